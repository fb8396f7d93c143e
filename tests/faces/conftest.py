"""A small works and a one-meter site, processed through the command line as a user would."""

from __future__ import annotations

import gzip
import json
import os
import shutil
from dataclasses import dataclass
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from meterfix.demo.simulator import simulate
from meterfix.faces.commands import main

NOW = "2026-10-04T09:00:00+02:00"
"""Three gas days are over, and the last of them is past its deadline."""

ONE_METER = """
[site]
name = "One meter"
time_zone = "UTC"
gas_day_start = "06:00"
database = "sqlite:///meterfix.sqlite"
archive = "archive"

[site.base_conditions]
pressure = "101.325 kPa"
temperature = "15 degC"

[site.atmospheric_pressure]
value = "101 kPa"

[contract]
currency = "EUR"
provisional_after = "12 h"

[source.station]
folder = "logs"
files = "{binding}_*.csv*"
delivery = "whole"
stamp = "instant"
between = "linear"
maximum_gap = "10 min"
delimiter = ","
decimal_mark = "."
time_columns = ["time"]
time_format = "%Y-%m-%dT%H:%M:%SZ"
time_zone = "UTC"
final_line_end = "required"
bad_values = { "BAD" = "transmitter fault" }
size_limit_bytes = 100000

[source.station.column.dp]
quantity = "differential_pressure"
unit = "mbar"
holds = "sample"
root = "not_taken"

[source.station.column.p]
quantity = "static_pressure"
unit = "bar"
reference = "gauge"

[source.station.column.t]
quantity = "temperature"
unit = "degC"

[signal.PDT-1]
from = [{ source = "station", binding = "FT-1", column = "dp" }]
range = ["0 mbar", "250 mbar"]

[signal.PT-1]
from = [{ source = "station", binding = "FT-1", column = "p" }]

[signal.TT-1]
from = [{ source = "station", binding = "FT-1", column = "t" }]

[gas.air]
line_model = "ideal"
base_model = "ideal"
dynamic_viscosity = "0.018 mPa s"
isentropic_exponent = 1.4

[[gas.air.composition]]
basis = "mole"
unit = "%"
nitrogen = 79
oxygen = 21

[meter.FT-1]
gas = "air"
differential_pressure = "PDT-1"
static_pressure = "PT-1"
temperature = "TT-1"
static_pressure_tapping = "upstream"
thermometer = "upstream"
low_flow_cut_off = "1 mbar"

[meter.FT-1.orifice]
tappings = "flange"
bore = "50 mm"
pipe_diameter = "100 mm"
bore_expansion = "16e-6 / K"
pipe_expansion = "11e-6 / K"
reference_temperature = "20 degC"
"""


def run(*arguments: str | Path, exit_code: int | None = 0) -> Result:
    """Run a command in this process and check its exit code and that it raised nothing."""
    result = CliRunner().invoke(main, [str(argument) for argument in arguments])
    if result.exception is not None and not isinstance(result.exception, SystemExit):
        raise result.exception
    if exit_code is not None:
        assert result.exit_code == exit_code, result.output
    return result


@dataclass(frozen=True)
class Folder:
    """A folder with a site file and logs."""

    path: Path

    @property
    def site(self) -> Path:
        return self.path / "site.toml"

    def log(self, name: str, content: bytes | str, *, age_s: float = 7200) -> Path:
        """Write a log that has rested for a while."""
        path = self.path / "logs" / name
        path.parent.mkdir(parents=True, exist_ok=True)
        raw = content.encode() if isinstance(content, str) else content
        path.write_bytes(gzip.compress(raw, mtime=0) if name.endswith(".gz") else raw)
        self.rest(path, age_s)
        return path

    @staticmethod
    def rest(path: Path, age_s: float = 7200) -> None:
        then = path.lstat().st_mtime - age_s
        os.utime(path, (then, then), follow_symlinks=False)

    def process(self, now: str = NOW, *, exit_code: int | None = 0) -> Result:
        return run("process", "--site", self.site, "--now", now, exit_code=exit_code)

    def json(self, what: str, *options: str) -> list[dict]:
        """Return what `show WHAT --format json` prints."""
        return json.loads(
            run("show", what, "--site", self.site, *options, "--format", "json").stdout
        )

    def text(self, what: str, *options: str) -> str:
        return run("show", what, "--site", self.site, *options).stdout


@pytest.fixture(scope="session")
def invoke():
    """`run`: a command line, its exit code checked."""
    return run


@pytest.fixture(scope="session")
def works(tmp_path_factory) -> Folder:
    """Process three gas days of the simulated works; not to be changed."""
    folder = Folder(tmp_path_factory.mktemp("works"))
    simulate(seed=11, days=3).write(folder.path)
    folder.process()
    return folder


@pytest.fixture
def own_works(works, tmp_path) -> Folder:
    """Return a copy of the processed works that a test may change."""
    shutil.copytree(works.path, tmp_path / "works", symlinks=True)
    return Folder(tmp_path / "works")


@pytest.fixture
def one_meter(tmp_path) -> Folder:
    """Return a site with one meter on air, without logs."""
    return _one_meter(tmp_path / "one")


@pytest.fixture(scope="session")
def new_one_meter(tmp_path_factory):
    """Return a function that makes a one-meter site in a folder of its own."""
    return lambda: _one_meter(tmp_path_factory.mktemp("site") / "one")


def _one_meter(path: Path) -> Folder:
    folder = Folder(path)
    (path / "logs").mkdir(parents=True)
    folder.site.write_text(ONE_METER, encoding="utf-8")
    return folder


def hour(number: int, *, rows: int = 10, header: str = "time,dp,p,t") -> str:
    """Return a log of one hour of 2026-10-02, a row every 6 minutes."""
    lines = [header]
    for n in range(rows):
        minute = number * 60 + 6 * n
        lines.append(
            f"2026-10-02T{minute // 60:02d}:{minute % 60:02d}:00Z,{100 + n},5.0,{20 + n / 10}"
        )
    return "\n".join(lines) + "\n"


@pytest.fixture(scope="session")
def hour_log():
    """`hour`: one hour's log."""
    return hour
