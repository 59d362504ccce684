"""The house: imports point down, plug-ins see the contract alone, importing costs little and changes nothing."""

from __future__ import annotations

import ast
import json
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
PLUG_INS = sorted(
    path for room in ("mechanisms", "distributions") for path in (ROOT / room).glob("*.py") if path.stem != "__init__"
)


def test_imports_point_down():
    """The layers of the house hold, as import-linter sees them."""
    done = subprocess.run(
        [sys.executable, "-c", "from importlinter.cli import lint_imports_command; lint_imports_command()"],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stdout[-3000:] + done.stderr[-1000:]


@pytest.mark.parametrize("path", PLUG_INS, ids=lambda path: path.stem)
def test_a_plug_in_imports_the_contract_alone(path):
    """A plug-in needs no part of mechbench but the contract, and nothing outside numpy, scipy and Python."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        names = []
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0
            names = [str(node.module)]
        for name in names:
            top = name.split(".")[0]
            assert name == "mechbench.contract" or top in {"numpy", "scipy"} or top in sys.stdlib_module_names, name
            assert not name.startswith("scipy.stats"), "scipy.stats takes a second to import"


def _loaded_after(statement: str) -> list[str]:
    code = f"import sys, json; {statement}; print(json.dumps(sorted(sys.modules)))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=ROOT)
    return json.loads(done.stdout)


def test_importing_loads_nothing_heavy():
    """`import mechbench` loads neither pandas nor matplotlib nor scipy.stats."""
    loaded = _loaded_after("import mechbench")
    assert not {"pandas", "matplotlib", "scipy.stats", "joblib"} & set(loaded)


def test_the_plug_in_folders_are_no_packages_of_their_own():
    """`import mechanisms` is refused with a word on how to do it, so that no class exists twice."""
    for room in ("mechanisms", "distributions"):
        done = subprocess.run(
            [sys.executable, "-c", f"import {room}"], capture_output=True, text=True, check=False, cwd=ROOT
        )
        assert done.returncode != 0
        assert f"import mechbench.{room}" in done.stderr


def test_a_checkout_finds_its_own_plug_ins(tmp_path):
    """From the root of a checkout that is not installed, the plug-ins of that checkout are the ones found."""
    for name in ("mechbench", "mechanisms", "distributions"):
        (tmp_path / name).mkdir()
        for path in (ROOT / name).glob("*.py"):
            (tmp_path / name / path.name).write_bytes(path.read_bytes())
    (tmp_path / "pyproject.toml").write_text("")
    (tmp_path / "distributions" / "only_here.py").write_text("")
    code = "import mechbench.discovery as d; print('only-here' in d.families(), 'pay-as-bid' in d.mechanisms())"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=tmp_path)
    assert done.stdout.split() == ["True", "True"]


def test_every_package_is_shipped():
    """Each folder of code is named in pyproject.toml, so that an installed copy is whole."""
    listed = set(tomllib.loads((ROOT / "pyproject.toml").read_text())["tool"]["setuptools"]["packages"])
    found = {".".join(path.parent.relative_to(ROOT).parts) for path in (ROOT / "mechbench").rglob("__init__.py")} | {
        "mechbench.mechanisms",
        "mechbench.distributions",
    }
    assert listed == found
