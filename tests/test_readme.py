"""What README shows is what the program prints.

``python tests/test_readme.py`` writes the present output into README.
"""

from __future__ import annotations

import contextlib
import doctest
import re
import shlex
import shutil
import tempfile
from pathlib import Path

import pytest
from click.testing import CliRunner

from profileplan.cli import cli

ROOT = Path(__file__).parents[1]
README = ROOT / "README.md"
BLOCK = re.compile(r"^```console\n(.*?)^```$", re.MULTILINE | re.DOTALL)


NUMBER = re.compile(r"\d+\.\d+")

SEARCHED = 2e-3
"""Share by which a time that was searched for may differ from machine to machine."""


def numbers_of(line: str) -> list[float]:
    """Return the decimal numbers in a line."""
    return [float(number) for number in NUMBER.findall(line)]


def words_of(line: str) -> list[str]:
    """Return all of a line but its decimal numbers and its spacing."""
    return NUMBER.sub("", line).split()


def outputs(block: str) -> str:
    """Return a console block with the present output of its commands."""
    shown = []
    for line in block.splitlines():
        if line.startswith("$ "):
            words = shlex.split(line.removeprefix("$ "))
            assert words[0] == "profileplan"
            result = CliRunner(env={"COLUMNS": "100"}).invoke(cli, words[1:])
            shown += [line, result.output.rstrip()]
    return "\n".join(shown) + "\n"


@pytest.fixture
def user_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Go to a folder with the samples, as after a fresh clone."""
    shutil.copytree(ROOT / "samples", tmp_path / "samples")
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.mark.usefixtures("user_folder")
def test_console_blocks_show_the_output() -> None:
    """A reader compares their screen with README, line by line."""
    for block in BLOCK.findall(README.read_text(encoding="utf-8")):
        shown, printed = block.splitlines(), outputs(block).splitlines()
        assert len(shown) == len(printed)
        for one, other in zip(shown, printed, strict=True):
            assert words_of(one) == words_of(other)
            assert numbers_of(one) == pytest.approx(numbers_of(other), rel=SEARCHED)


@pytest.mark.usefixtures("user_folder")
def test_python_blocks_run() -> None:
    """The first lines that a library's user tries are those in README."""
    result = doctest.testfile(str(README), module_relative=False)
    assert result.attempted > 0
    assert result.failed == 0


def test_the_two_commands_do_all_set_up() -> None:
    """One command runs the main job, one the tests; CI runs that very one."""
    commands = re.findall(r"^python3 -m venv .*$", README.read_text(encoding="utf-8"), re.MULTILINE)
    assert len(commands) == 2
    assert "profileplan plan" in commands[0]
    assert commands[1].endswith("-m pytest -n auto --dist loadfile")


if __name__ == "__main__":
    with tempfile.TemporaryDirectory() as folder, contextlib.chdir(folder):
        shutil.copytree(ROOT / "samples", "samples")
        text = README.read_text(encoding="utf-8")
        text = BLOCK.sub(lambda found: f"```console\n{outputs(found[1])}```", text)
        README.write_text(text, encoding="utf-8")
