"""Plug-ins are found by file name; a broken one says why, and stops nothing else."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest

from mechbench import discovery
from mechbench.contract import InputError

ROOT = Path(__file__).resolve().parent.parent
BROKEN = {
    "slipped": ("def (", "SyntaxError"),
    "raising": ("raise RuntimeError('no\\nreason')", "RuntimeError: no"),
    "empty": ("", "expected one Distribution in the file, found 0"),
    "misnamed": (
        "from mechbench.contract import Distribution\n\n\nclass Other(Distribution):\n    name = 'other'\n",
        "the class is named 'other', the file says 'misnamed'",
    ),
}


@pytest.fixture(scope="module")
def told(tmp_path_factory):
    """Ask a checkout with broken plug-ins for each of them, for a good one, and for all names."""
    place = tmp_path_factory.mktemp("checkout")
    for room in ("mechbench", "mechanisms", "distributions"):
        (place / room).mkdir()
        for path in (ROOT / room).glob("*.py"):
            (place / room / path.name).write_bytes(path.read_bytes())
    (place / "pyproject.toml").write_text("")
    for name, (text, _) in BROKEN.items():
        (place / "distributions" / f"{name}.py").write_text(text)
    code = (
        "import json, mechbench.discovery as d\n"
        "said = {}\n"
        f"for name in {[*BROKEN, 'half-normal']!r}:\n"
        "    try:\n        said[name] = d.family_class(name).title\n"
        "    except d.InputError as error:\n        said[name] = str(error)\n"
        "print(json.dumps([said, d.families()]))\n"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=place, capture_output=True, text=True, check=True)
    return json.loads(done.stdout)


@pytest.mark.parametrize("name", BROKEN)
def test_a_broken_file_says_why(told, name):
    """The message is one line, names the path and the reason."""
    message = told[0][name]
    assert f"distributions/{name}.py" in message
    assert BROKEN[name][1] in message
    assert "\n" not in message


def test_the_others_go_on(told):
    """A good family loads beside broken ones, and all are listed by name."""
    assert "cannot be loaded" not in told[0]["half-normal"]
    assert {*BROKEN, "half-normal", "weibull"} <= set(told[1])


def test_an_unknown_name_gets_the_nearest():
    """A slip in a name is answered with the nearest there is and with all that is accepted."""
    with pytest.raises(InputError, match=r"no family 'weibul'; did you mean 'weibull'.*accepted: beta"):
        discovery.family_class("weibul")
    with pytest.raises(InputError, match="no mechanism 'lottery'; accepted: pay-as-bid"):
        discovery.mechanism_class("lottery")


def test_a_file_is_a_plug_in():
    """Every file of the two folders is found, under its name with hyphens, and loads."""
    for room, names, load in (
        ("distributions", discovery.families(), discovery.family_class),
        ("mechanisms", discovery.mechanisms(), discovery.mechanism_class),
    ):
        files = {path.stem.replace("_", "-") for path in (ROOT / room).glob("*.py")} - {"--init--"}
        assert set(names) == files
        for name in names:
            assert load(name).name == name
