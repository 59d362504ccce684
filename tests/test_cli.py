"""The command line: what it prints, what it refuses, and how it ends."""

import csv
import io
import json
import os
import re
import signal
import subprocess
import sys
from pathlib import Path

import pytest

import mechbench
from mechbench import cli, discovery
from mechbench.contract import InputError
from mechbench.show.records import FIELDS

CORPUS = Path(__file__).parent / "corpus"
MISTAKES = sorted(CORPUS.glob("*.toml"))
ROOT = Path(discovery.__file__).parent.parent

CELL = ("measure", "--mechanism", "pay-as-bid", "--family", "uniform", "--bidders", "100", "--units", "5")


def run(capsys, *arguments: str):
    """Run a command in this process: exit code, stdout, stderr."""
    try:
        code = cli.main(arguments)
    except SystemExit as end:
        code = end.code
    told = capsys.readouterr()
    return code, told.out, told.err


def command(*arguments: str, **more: object):
    """Run a command in a process of its own."""
    line = [sys.executable, "-m", "mechbench", *arguments]
    return subprocess.run(line, capture_output=True, text=True, cwd=ROOT, timeout=120, check=False, **more)


class TestRefusals:
    @pytest.mark.parametrize("path", MISTAKES, ids=lambda path: path.stem)
    def test_planted_mistakes(self, path, capsys):
        """A market file with a mistake gives one line on stderr that tells it, exit 2, and nothing else."""
        code, out, err = run(capsys, "choose", str(path))
        assert (code, out) == (2, "")
        assert err.endswith("\n")
        assert len(err.splitlines()) == 1
        first = path.read_bytes().splitlines()[0].decode("latin-1")
        for words in first.removeprefix("# refused:").split("|"):
            assert words.strip() in err

    @pytest.mark.parametrize("stem", ["turnout_nan", "log_of_shaded_bids", "not_utf8"])
    def test_in_a_process(self, stem):
        """The same holds for the command itself."""
        done = command("choose", str(CORPUS / f"{stem}.toml"))
        assert (done.returncode, done.stdout, len(done.stderr.splitlines())) == (2, "", 1)

    @pytest.mark.parametrize(
        ("line", "words"),
        [
            ("", "COMMAND"),
            ("chose", "choose|measure|catalogue|invalid choice: 'chose'"),
            ("choose --fromat csv", "--fromat"),
            ("choose --format xml", "'xml'"),
            ("choose no-such-file.toml", "no-such-file.toml"),
            ("measure", "--mechanism"),
            (" ".join([*CELL, "--units", "five"]), "--units|'five'|a whole number"),
            (" ".join([*CELL, "--units", "100"]), "fewer units than bidders"),
            (" ".join([*CELL, "--units", "0"]), "at least 1"),
            (" ".join([*CELL, "--bidders", "1"]), "at least 2"),
            (" ".join([*CELL, "--reserve", "nan"]), "reserve"),
            (" ".join([*CELL, "--reserve", "2"]), "reserve"),
            (" ".join([*CELL, "--turnout", "70"]), "turnout"),
            (" ".join([*CELL, "--threshold", "nan"]), "threshold"),
            (" ".join([*CELL, "--error", "-1"]), "error"),
            (" ".join([*CELL, "--error", "inf"]), "error|inf|below 1"),
            (" ".join([*CELL, "--error", "1"]), "error|below 1"),
            (" ".join([*CELL, "--seed", "-1"]), "--seed"),
            (" ".join([*CELL, "--family", "exponential", "--reserve", "50"]), "reserve|turnout|nothing ever sells"),
            (" ".join([*CELL, "--turnout", "5e-324"]), "reserve|turnout|nothing ever sells"),
            (" ".join([*CELL, "--set", "high=1e308"]), "values: too large"),
            (" ".join([*CELL, "--set", "high=1e-300"]), "values: too small"),
            (" ".join([*CELL, "--family", "weibull", "--set", "shape=1e-6"]), "values: too large"),
            (" ".join([*CELL, "--measure", "gain"]), "--measure|worst_gain"),
            (" ".join([*CELL, "--set", "high"]), "--set|name=value"),
            (" ".join([*CELL, "--set", "hihg=1"]), "hihg"),
            (" ".join([*CELL, "--set", "high=1", "--set", "high=2"]), "high twice"),
            (" ".join([*CELL, "--with", "price_at=last-accepted"]), "price_at"),
            (" ".join([*CELL, "--family", "unifrom"]), "uniform"),
            (" ".join([*CELL, "--family", "empirical"]), "bid log"),
            (" ".join([*CELL, "--mechanism", "pay-as-bit"]), "pay-as-bid"),
        ],
    )
    def test_arguments(self, line, words, capsys):
        """A mistake on the command line is told in one line with what is accepted, exit 2."""
        code, out, err = run(capsys, *line.split())
        assert (code, out, len(err.splitlines())) == (2, "", 1)
        assert len(re.findall(r"accepted(?: is| are| here is|:)", err)) == 1
        assert all(word in err for word in words.split("|"))

    def test_a_rule_that_raises(self, capsys, monkeypatch):
        """A mechanism that raises is told in one line with its name, not with a traceback."""

        def fail(*_: object) -> None:
            message = "boom"
            raise ZeroDivisionError(message)

        monkeypatch.setattr(discovery.mechanism_class("pay-as-bid"), "functional", fail)
        for line in (CELL, ("choose",)):
            code, out, err = run(capsys, *line)
            assert (code, out, len(err.splitlines())) == (2, "", 1)
            assert "pay-as-bid" in err
            assert "ZeroDivisionError: boom" in err


class TestOutput:
    def test_choose(self, capsys):
        """Without a file the demo market is weighed."""
        code, out, err = run(capsys, "choose")
        assert (code, err) == (0, "")
        assert out.startswith("Cold-room bays, weeknights\n")
        assert "Recommended: " in out

    def test_formats_agree(self, capsys):
        """JSON and CSV hold the same records, with the fields of the design."""
        rows = json.loads(run(capsys, "choose", "--format", "json")[1])
        table = list(csv.DictReader(io.StringIO(run(capsys, "choose", "--format", "csv")[1])))
        assert [tuple(row) for row in (rows[0], table[0])] == [FIELDS, FIELDS]
        assert [row["value"] for row in rows] == [float(row["value"]) for row in table]
        assert {row["mechanism"] for row in rows} == {
            "pay-as-bid",
            "uniform-price(price_at=first-rejected)",
            "uniform-price(price_at=last-accepted)",
        }

    def test_markdown(self, capsys):
        """Markdown has headings and tables with pipes."""
        out = run(capsys, "choose", "--format", "markdown")[1]
        assert "## Recommendation" in out
        assert re.search(r"^\| *pay-as-bid *\|", out, re.MULTILINE)

    def test_measure(self, capsys):
        """Uniform values: the worst gain of pay-as-bid is units / bidders."""
        code, out, _ = run(capsys, *CELL, "--measure", "worst_gain", "--format", "json")
        (row,) = json.loads(out)
        assert code == 0
        assert row["value"] == pytest.approx(0.05, abs=1e-9)
        assert (row["method"], row["status"], row["seed"]) == ("exact", "ok", None)

    def test_measure_simulated(self, capsys):
        """A simulation carries its seed, and reaches the error asked for."""
        line = [*CELL, "--measure", "worst_gain", "--method", "simulated", "--error", "0.01", "--seed", "7"]
        (row,) = json.loads(run(capsys, *line, "--format", "json")[1])
        assert (row["method"], row["seed"]) == ("simulated", 7)
        assert abs(row["value"] - 0.05) < 2 * row["error"] < 0.021

    def test_measure_table(self, capsys):
        """The table of a cell shows each measure with its error and its status."""
        out = run(capsys, *CELL, "--measure", "worst_gain", "--measure", "revenue")[1]
        assert re.search(r"^worst_gain +0\.05000 +(< )?\S+ +exact +ok", out, re.MULTILINE)

    def test_a_reserve_is_told_as_given(self, capsys):
        """The heading of a cell rounds neither reserve nor turnout."""
        out = run(capsys, *CELL, "--reserve", "0.99999999", "--turnout", "0.7000001", "--measure", "no_sale")[1]
        assert "reserve 0.99999999, turnout 0.7000001" in " ".join(out.split())

    def test_infinite(self, capsys):
        """An infinite revenue is null in JSON, with a status, and a word in the table."""
        line = "measure --mechanism pay-as-bid --family pareto --set tail_index=1.2 --bidders 50 --units 2"
        line += " --measure revenue"
        (row,) = json.loads(run(capsys, *line.split(), "--format", "json")[1])
        assert (row["value"], row["status"]) == (None, "infinite")
        out = run(capsys, *line.split())[1]
        assert "infinite" in out
        assert not re.search(r"\b(nan|inf)\b", out)

    def test_catalogue(self, capsys):
        """The catalogue lists every plug-in there is, with domains."""
        rows = json.loads(run(capsys, "catalogue", "--format", "json")[1])
        assert {row["name"] for row in rows} == {*discovery.mechanisms(), *discovery.families()}
        assert "first-rejected or last-accepted" in run(capsys, "catalogue")[1]

    def test_a_broken_plug_in(self, capsys, monkeypatch):
        """A plug-in that cannot be loaded is listed with its reason and stops nothing else."""
        load = discovery.family_class

        def family_class(name) -> object:
            if name == "gamma":
                message = "family 'gamma' cannot be loaded from gamma.py: SyntaxError: invalid syntax"
                raise InputError(message)
            return load(name)

        monkeypatch.setattr(discovery, "family_class", family_class)
        code, out, _ = run(capsys, "catalogue")
        assert code == 0
        assert "gamma.py: SyntaxError" in out
        assert "weibull" in out

    @pytest.mark.parametrize("name", ["choose", "measure", "catalogue"])
    def test_help(self, name, capsys):
        """Each command's help has an example that the command accepts."""
        code, out, _ = run(capsys, name, "--help")
        assert code == 0
        assert "example:" in out

    def test_version(self, capsys):
        """The version is printed and nothing else."""
        code, out, _ = run(capsys, "--version")
        assert code == 0
        assert re.fullmatch(r"mechbench \S+\n", out)


class TestEndings:
    def test_light_imports(self):
        """Neither the package nor its help loads what is slow to import."""
        heavy = "{'pandas', 'matplotlib', 'scipy.stats', 'tabulate', 'tqdm'}"
        for body in (
            "import mechbench",
            "from mechbench.cli import main\ntry: main(['--help'])\nexcept SystemExit: pass",
        ):
            code = f"{body}\nimport sys\nassert not {heavy} & set(sys.modules), {heavy} & set(sys.modules)"
            done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=False)
            assert done.returncode == 0, done.stderr

    def test_closed_pipe(self):
        """A reader that has seen enough ends the command without a word."""
        read, write = os.pipe()
        os.close(read)
        try:
            done = subprocess.run(
                [sys.executable, "-m", "mechbench", "catalogue"],
                stdout=write,
                stderr=subprocess.PIPE,
                cwd=ROOT,
                check=False,
            )
        finally:
            os.close(write)
        assert (done.returncode, done.stderr) == (0, b"")

    @pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs a device that is always full")
    def test_full_disk(self):
        """Output that cannot be written is told in one line."""
        with Path("/dev/full").open("w", encoding="utf-8") as full:
            done = subprocess.run(
                [sys.executable, "-m", "mechbench", "catalogue"],
                stdout=full,
                stderr=subprocess.PIPE,
                cwd=ROOT,
                text=True,
                check=False,
            )
        assert done.returncode == 2
        assert len(done.stderr.splitlines()) == 1

    @pytest.mark.parametrize(("closed", "code"), [(1, 2), (2, 0)])
    def test_closed_streams(self, closed, code):
        """A closed stdout is told in one line; a closed stderr stops nothing and leaves the exit code."""
        starter = f"import os, sys; os.close({closed}); os.execv(sys.executable, sys.argv[1:])"
        line = [sys.executable, "-c", starter, sys.executable, "-m", "mechbench", "catalogue"]
        done = subprocess.run(line, capture_output=True, text=True, cwd=ROOT, check=False)
        assert done.returncode == code
        assert len(done.stderr.splitlines()) == (closed == 1)
        done = subprocess.run([*line[:-1], "chose"], capture_output=True, text=True, cwd=ROOT, check=False)
        assert done.returncode == 2

    def test_interrupt(self, capsys, monkeypatch):
        """Ctrl-C ends a command with one line and the shell's exit code for it."""

        def interrupted(_) -> None:
            raise KeyboardInterrupt

        monkeypatch.setattr(cli, "_catalogue", interrupted)
        assert run(capsys, "catalogue") == (128 + signal.SIGINT, "", "mechbench: interrupted\n")

    def test_narrow_encoding(self):
        """A terminal that knows only ASCII still gets the whole output."""
        done = command("choose", env={**os.environ, "PYTHONIOENCODING": "ascii", "PYTHONUTF8": "0"})
        assert (done.returncode, done.stderr) == (0, "")
        assert "Recommended" in done.stdout


class TestPython:
    def test_choose(self):
        """The Python surface gives the records as a DataFrame, and does so again after a first call."""
        for _ in range(2):
            frame = mechbench.choose()
            assert tuple(frame.columns) == FIELDS
        assert set(frame["method"]) == {"exact"}

    def test_measure(self):
        """A cell from Python equals the command's."""
        frame = mechbench.measure("pay-as-bid", "uniform", bidders=100, units=5, measures=["worst_gain"])
        assert frame["value"].item() == pytest.approx(0.05, abs=1e-9)

    def test_catalogue(self):
        """The catalogue is a DataFrame too."""
        assert "weibull" in set(mechbench.catalogue()["name"])

    def test_no_other_attribute(self):
        """What is not there is an AttributeError as anywhere."""
        with pytest.raises(AttributeError, match="no attribute 'chose'"):
            mechbench.chose  # noqa: B018
