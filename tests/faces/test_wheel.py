"""The wheel, installed away from the checkout, does all of its work."""

from __future__ import annotations

import hashlib
import os
import re
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]


@pytest.fixture(scope="module")
def wheel(tmp_path_factory) -> Path:
    """Build the wheel from the checkout without a network."""
    folder = tmp_path_factory.mktemp("dist")
    subprocess.run(
        [sys.executable, "-m", "build", "--wheel", "--no-isolation", "--outdir", folder, ROOT],
        check=True,
        capture_output=True,
        timeout=120,
    )
    (built,) = folder.glob("*.whl")
    return built


@pytest.fixture(scope="module")
def installed(wheel, tmp_path_factory) -> Path:
    """Return a folder that holds what the wheel installs, and nothing of the checkout."""
    folder = tmp_path_factory.mktemp("installed")
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(folder)
    return folder


def run_installed(installed: Path, away: Path, *arguments: str) -> subprocess.CompletedProcess:
    """Run the installed command line in another folder."""
    code = (
        "import sys, meterfix\n"
        f"assert meterfix.__file__.startswith({str(installed)!r}), meterfix.__file__\n"
        "from meterfix.__main__ import main\n"
        "main(prog_name='meterfix')\n"
    )
    # without -P and with the installed folder first: an editable checkout must not win
    return subprocess.run(
        [sys.executable, "-c", code, *arguments],
        cwd=away,
        env={**os.environ, "PYTHONPATH": str(installed)},
        capture_output=True,
        text=True,
        check=False,
        timeout=120,
    )


def digests(folder: Path) -> dict[str, str]:
    return {
        path.relative_to(folder).as_posix(): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def test_the_wheel_carries_the_logs_to_the_byte(installed):
    """The package data are the files of sample_logs, all of them, byte for byte."""
    packaged = digests(installed / "meterfix" / "demo" / "example" / "logs")
    assert len(packaged) > 280
    assert packaged == digests(ROOT / "sample_logs")


def test_the_wheel_carries_tables_and_migrations(installed):
    """Every file of the package that is not made by running it is in the wheel."""
    made = re.compile(r"__pycache__|\.pyc$")
    source = {
        path.relative_to(ROOT).as_posix(): path.read_bytes()
        for path in (ROOT / "meterfix").rglob("*")
        if path.is_file() and not made.search(str(path))
    }
    assert any("migrations" in name for name in source)
    assert any(name.endswith(".csv") for name in source)
    for name, content in source.items():
        assert (installed / name).read_bytes() == content, name


def test_the_wheel_brings_nothing_else(installed):
    """Beside the package there is only its metadata: no tests, no stray modules."""
    tops = {path.name for path in installed.iterdir()}
    assert {name for name in tops if not name.endswith(".dist-info")} == {"meterfix"}
    (info,) = (path for path in installed.iterdir() if path.name.endswith(".dist-info"))
    entry = (info / "entry_points.txt").read_text(encoding="utf-8")
    assert "meterfix = meterfix.__main__:main" in entry
    assert any(path.name == "LICENSE" for path in info.rglob("*"))


def test_demo_works_from_the_wheel(installed, tmp_path):
    """`meterfix demo FOLDER`, away from the checkout: what the README shows of it, and exit 0."""
    done = run_installed(installed, tmp_path, "demo", "works")
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    lines = done.stdout.splitlines()
    assert max(map(len, lines)) <= 100
    assert any("corrected totals of the last gas day" in line for line in lines)
    assert any(re.match(r"FT-101 +2026-10-31( +[\d.]+){4} +100.00 %", x) for x in lines)
    assert any(
        re.match(r"works +2026-10-31( +[\d.]+){2} +-?[\d.]+( +[\d.]+){2} +kg +(yes|no) ", x)
        for x in lines
    )
    assert "Results are for accounting, never for safety functions." in " ".join(lines)
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    (excerpt,) = re.findall(r"^```text\n(.*?)^```$", readme, re.MULTILINE | re.DOTALL)
    assert {line.rstrip() for line in excerpt.splitlines()} <= {line.rstrip() for line in lines}
    site = str(tmp_path / "works" / "site.toml")
    again = run_installed(installed, tmp_path, "demo", "works")
    assert again.returncode == 0, again.stderr
    assert "nothing new" in again.stdout
    example, *_ = re.findall(r"^  meterfix (show .*)$", done.stdout, re.MULTILINE)
    shown = run_installed(installed, tmp_path, *example.split())
    assert shown.returncode == 0, shown.stderr
    assert "corrected totals per hour, FT-101" in shown.stdout
    checked = run_installed(installed, tmp_path, "check", "--site", site)
    assert checked.returncode == 0, checked.stderr
