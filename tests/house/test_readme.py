"""README, pins and .ci/run say the same, and what they say works."""

from __future__ import annotations

import re
import subprocess
import tomllib
from pathlib import Path

import pytest
from click.testing import CliRunner
from packaging.requirements import Requirement
from packaging.utils import canonicalize_name
from packaging.version import Version

from meterfix import __version__
from meterfix.faces.columns import SHORT_FLAGS
from meterfix.faces.commands import main
from meterfix.frames import FLAGS

ROOT = Path(__file__).parents[2]
README = (ROOT / "README.md").read_text(encoding="utf-8")
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
PINS = [
    line
    for line in (ROOT / ".ci" / "pins.txt").read_text(encoding="utf-8").splitlines()
    if line and not line.startswith("#")
]
DEMO = (
    "python3 -m venv .venv && .venv/bin/pip install --quiet -c .ci/pins.txt . "
    "&& .venv/bin/meterfix demo"
)
TEST = (
    "python3 -m venv .venv && .venv/bin/pip install --quiet -c .ci/pins.txt -e '.[test]' "
    "&& .venv/bin/pytest -n 2 -m 'not slow'"
)


def test_the_two_commands_stand_alone():
    """The README's blocks of shell are two, one line each: run the example, run the tests."""
    blocks = re.findall(r"^```sh\n(.*?)^```$", README, re.MULTILINE | re.DOTALL)
    assert blocks == [f"{DEMO}\n", f"{TEST}\n"]


def test_the_job_comes_first():
    """Under the title stands one paragraph that says what meterfix does, then the first command."""
    title, job, *_ = README.split("\n\n")
    assert title == "# meterfix"
    assert job.startswith("meterfix turns the raw logs of orifice plates, nozzles")
    assert README.index(job) < README.index(DEMO) < README.index(TEST)


def test_ci_runs_the_readme_test_command():
    """What .ci/run takes out of the README is the test command, and it is all that it tests."""
    script = (ROOT / ".ci" / "run").read_text(encoding="utf-8")
    extraction = re.search(r"^command=\$\((.*)\)$", script, re.MULTILINE)
    assert extraction is not None
    taken = subprocess.run(
        ["bash", "-c", extraction[1]], cwd=ROOT, capture_output=True, text=True, check=True
    )
    assert taken.stdout == f"{TEST}\n"
    commands = [line for line in script.splitlines() if line and not line.startswith("#")]
    assert commands[-1] == 'bash -euo pipefail -c "$command"'
    assert "set -euo pipefail" in commands
    assert not [line for line in commands if re.search(r"pytest|ruff|mypy|lint-imports", line)]
    subprocess.run(["bash", "-n", ROOT / ".ci" / "run"], check=True)
    assert (ROOT / ".ci" / "run").stat().st_mode & 0o111


def test_pins_are_exact_versions():
    """Each pin is one name and one version, in order, without hosts, paths or installers."""
    names = []
    for line in PINS:
        assert re.fullmatch(r"[A-Za-z0-9][A-Za-z0-9._-]*==[0-9][A-Za-z0-9.]*", line), line
        names.append(canonicalize_name(line.partition("==")[0]))
    assert names == sorted(set(names))
    assert not {"pip", "setuptools", "wheel", "meterfix"} & set(names)


@pytest.mark.parametrize(
    "text", [*PROJECT["dependencies"], *PROJECT["optional-dependencies"]["test"]]
)
def test_every_dependency_is_pinned_within_its_bounds(text):
    """What pyproject.toml asks for is pinned to a version that it allows."""
    wanted = Requirement(text)
    pinned = {canonicalize_name(p.partition("==")[0]): p.partition("==")[2] for p in PINS}
    version = pinned.get(canonicalize_name(wanted.name))
    assert version is not None
    assert Version(version) in wanted.specifier


def test_the_command_table_is_what_exists():
    """The README's table names exactly the commands that there are, none to come."""
    told = set(re.findall(r"^\| `meterfix (\w+)", README, re.MULTILINE))
    assert told == set(main.commands)
    for command in told:
        assert CliRunner().invoke(main, [command, "--help"]).exit_code == 0


def test_the_readme_shows_the_example_site_file():
    """The README's piece of a site file stands, comments apart, in config/site.toml."""
    (piece,) = re.findall(r"^```toml\n(.*?)^```$", README, re.MULTILINE | re.DOTALL)
    whole = tomllib.loads((ROOT / "config" / "site.toml").read_text(encoding="utf-8"))
    shown = tomllib.loads(piece)["meter"]["FT-101"]
    for key, value in shown.items():
        if isinstance(value, dict):
            assert value.items() <= whole["meter"]["FT-101"][key].items()
        else:
            assert whole["meter"]["FT-101"][key] == value


def test_the_caution_stands_where_it_belongs():
    """README and the example's output say that results are never for safety functions."""
    from meterfix.faces.commands import CAUTION

    readme = " ".join(README.replace(">", "").split())
    for text in (readme, CAUTION):
        assert "Results are for accounting, never for safety functions" in text
        assert "flammable" in text
        assert "local codes" in text
        assert "licensed people" in text


def test_links_lead_somewhere():
    """Every file that the README links to is there."""
    for target in re.findall(r"\]\(([^)#]+)\)", README):
        assert target.startswith("https://") or (ROOT / target).exists(), target


def test_the_changelog_opens_with_this_version():
    """The newest entry is this version, and says first what happened to the figures."""
    text = (ROOT / "CHANGELOG.md").read_text(encoding="utf-8")
    newest = re.search(r"^## (\S+)\n\n### (.+)$", text, re.MULTILINE)
    assert newest is not None
    assert newest.groups() == (__version__, "Figures changed")


def test_the_glossary_holds_every_flag():
    """The README's table of flags has each one, in order, under both of its names."""
    told = re.findall(r"^\| ([^|`]+?) \| `(\w+)` \|", README, re.MULTILINE)
    assert told == [(SHORT_FLAGS[name], name) for name, _ in FLAGS]


def test_the_readme_is_short():
    """It can be read in one go."""
    assert len(README.splitlines()) <= 220
