"""The house rules: layers, style, types, sizes, names and words, kept by every file."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
PYTHON = sorted([*(ROOT / "meterfix").rglob("*.py"), *(ROOT / "tests").rglob("*.py")])
LONGEST = 500
TOPS = {
    ".ci",
    ".gitignore",
    "CHANGELOG.md",
    "DEVELOPERS.md",
    "LICENSE",
    "README.md",
    "config",
    "meterfix",
    "pyproject.toml",
    "sample_logs",
    "tests",
}
VAGUE = re.compile(r"(?:^|_)(?:utils?|managers?|helpers?|data|misc|common|stuff)(?:_|$)")
# spelled in parts, so that this file does not hold them
UNFINISHED = ("TO" + "DO", "FIX" + "ME", "X" + "XX", "NotImplemented" + "Error")
TEXT = {".py", ".md", ".toml", ".txt", ".csv", ".ini", ".mako", ""}


def tool(*arguments: str) -> None:
    """Run a tool over the checkout; its own words are the failure."""
    done = subprocess.run(
        [sys.executable, *arguments],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=False,
        timeout=300,
    )
    assert done.returncode == 0, f"{done.stdout}\n{done.stderr}"


def tracked() -> list[Path]:
    """Return the files that belong to the project: git's, or all that are not made by a tool."""
    listed = subprocess.run(
        ["git", "ls-files", "--cached", "--others", "--exclude-standard", "-z"],
        cwd=ROOT,
        capture_output=True,
        check=False,
    )
    if listed.returncode == 0 and listed.stdout:
        paths = [ROOT / name for name in listed.stdout.decode().split("\0") if name]
    else:
        made = re.compile(r"/(?:\.[a-z_]*cache|__pycache__|\.venv|\.hypothesis|\.git|demo)/")
        paths = [p for p in ROOT.rglob("*") if not made.search(f"{p}/".replace(str(ROOT), ""))]
    return sorted(path for path in paths if path.is_file())


def test_the_layers_hold():
    """Data flows one way: every import contract of pyproject.toml is kept."""
    tool("-c", "from importlinter import cli; cli.lint_imports_command()", "--no-cache")


def test_style():
    """Every file keeps all rules of ruff, but for the exceptions explained in pyproject.toml."""
    tool("-m", "ruff", "check", ".")


def test_format():
    """Every file is as ruff formats it."""
    tool("-m", "ruff", "format", "--check", ".")


def test_types():
    """The package passes mypy in strict mode."""
    tool("-m", "mypy")


@pytest.mark.parametrize("path", PYTHON, ids=lambda path: path.relative_to(ROOT).as_posix())
def test_a_file_is_short_and_has_a_telling_name(path):
    """No file is over 500 lines; none has a name that says nothing."""
    assert len(path.read_text(encoding="utf-8").splitlines()) <= LONGEST
    assert not VAGUE.search(path.stem)


def test_top_level_names():
    """The repository's top holds what the design lists and nothing else."""
    assert {path.relative_to(ROOT).parts[0] for path in tracked()} <= TOPS


def test_test_files_have_unique_names():
    """Any test file can be named without its folder."""
    names = [path.name for path in PYTHON if path.name.startswith("test_")]
    assert len(set(names)) == len(names)


def test_nothing_is_left_unfinished():
    """No file carries a note of work left over, and no function stands in for one to come."""
    found = [
        f"{path.relative_to(ROOT)}: {word}"
        for path in tracked()
        if path.suffix in TEXT
        for word in UNFINISHED
        if word in path.read_text(encoding="utf-8", errors="replace")
    ]
    assert found == []


def test_no_path_of_one_machine():
    """Nothing names a place that exists on one machine only."""
    places = re.compile(r"(?<![\w.])/(?:work|root|home|tmp|opt|mnt)/\w")
    found = [
        f"{path.relative_to(ROOT)}:{number}: {line.strip()}"
        for path in tracked()
        if path.suffix in {*TEXT, ".sh"}
        for number, line in enumerate(
            path.read_text(encoding="utf-8", errors="replace").splitlines(), 1
        )
        if places.search(line)
    ]
    # a place that help texts may use as an example of any folder
    assert [line for line in found if "meterfix demo /tmp/works" not in line] == []


def test_every_test_says_its_claim():
    """Each test function has a docstring: its claim."""
    silent = []
    for path in PYTHON:
        if path.name.startswith("test_"):
            text = path.read_text(encoding="utf-8")
            silent += [
                f"{path.name}: {name}"
                for name, after in re.findall(
                    r"^ *def (test_\w+)\((?:.|\n)*?\)(?: -> None)?:\n( *\S.*)$", text, re.MULTILINE
                )
                if not after.strip().startswith(('"""', 'r"""'))
            ]
    assert silent == []
