"""The README tells the truth: every output block in it is what its command prints."""

from __future__ import annotations

import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")
FILES = re.findall(r"^`([\w.]+)`:\n\n```(?:toml|python)\n(.*?)^```$", README, flags=re.DOTALL | re.MULTILINE)
BLOCKS = re.findall(r"^```console\n(.*?)^```$", README, flags=re.DOTALL | re.MULTILINE)


def _steps() -> list[tuple[str, str]]:
    """Commands and what the README says they print, in order."""
    steps = []
    for block in BLOCKS:
        for part in re.split(r"^\$ ", block, flags=re.MULTILINE)[1:]:
            command, _, output = part.partition("\n")
            steps.append((command, output))
    return steps


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """Make a folder with the files that the README shows."""
    place = tmp_path_factory.mktemp("tour")
    for name, text in FILES:
        (place / name).write_text(text, encoding="utf-8")
    return place


def test_the_tour_is_there():
    """The README has a tour to be tested: commands with outputs, and files they read."""
    assert len(_steps()) >= 5
    assert FILES


@pytest.mark.parametrize(("command", "output"), _steps(), ids=lambda text: text[:40].strip())
def test_output_block(command, output, folder):
    """A command in the README prints what the README shows, to the letter; lines after `...` are left out."""
    words = shlex.split(command)
    assert words[0] in {"mechbench", "python"}, command
    run = [sys.executable, *(["-m", "mechbench"] if words[0] == "mechbench" else []), *words[1:]]
    done = subprocess.run(run, cwd=folder, capture_output=True, text=True, check=False)
    shown = done.stdout + done.stderr
    if output.rstrip().endswith("..."):
        assert shown.startswith(output.rstrip().removesuffix("...").rstrip("\n")), shown
    else:
        assert shown == output


def test_the_two_commands():
    """The README opens with the two set-up commands, and the gate runs the second word for word."""
    commands = re.findall(r"^ {4}(python3 -m venv .*)$", README, flags=re.MULTILINE)
    assert len(commands) == 2
    assert commands[0].endswith(".venv/bin/mechbench choose")
    assert commands[1] in (ROOT / ".ci" / "run").read_text(encoding="utf-8")
