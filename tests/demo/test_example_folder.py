"""The stored example: small, rebuilt to the byte, laid without harm, readable as declared."""

import gzip
import tomllib
from datetime import UTC, date, datetime
from pathlib import Path

import numpy as np
import pytest

from meterfix.demo.build import build, main
from meterfix.demo.calorific import gross_calorific_value
from meterfix.demo.example import EXAMPLE_NOW, lay, packaged_site
from meterfix.demo.logs import files_of
from meterfix.demo.simulator import simulate
from meterfix.demo.works import RUNS
from meterfix.errors import MeterfixError

ROOT = Path(__file__).parents[2]
SAMPLE = ROOT / "sample_logs"


def _unpacked(content):
    return gzip.decompress(content) if content[:2] == b"\x1f\x8b" else content


def test_the_stored_logs_are_small():
    """All of sample_logs is under 5 MB, and every file of it is a log."""
    stored = [path for path in SAMPLE.rglob("*") if path.is_file()]
    assert len(stored) > 280
    assert sum(path.stat().st_size for path in stored) < 3_500_000
    assert all(path.name.endswith((".csv", ".csv.gz")) for path in stored)


def test_a_rebuilt_day_is_the_stored_one():
    """Whole files of a day simulated anew hold, unpacked, exactly the stored bytes.

    (How hard a zlib compresses is that library's own; what it holds is ours.)
    """
    span = simulate(first_day=date(2026, 10, 7), days=2)
    compared = 0
    for name, content in files_of(span):
        if name.split(".")[0].endswith("2026-10-08"):
            assert _unpacked(content) == _unpacked((SAMPLE / name).read_bytes()), name
            compared += 1
    assert compared == 9


def test_compressed_logs_hold_no_time_and_no_name(example_files):
    """The gzip header has neither, and every log ends with a line end."""
    for name, content in example_files.items():
        if name.endswith(".gz"):
            assert content[3] == 0, name
            assert content[4:8] == bytes(4), name
        assert _unpacked(content).endswith(b"\n"), name


def test_local_times_run_through_the_repeated_hour(example_files):
    """The air file of 2026-10-25 has 02:00 to 02:59 twice, in file order."""
    text = _unpacked(example_files["compressed_air/air_2026-10-25.csv.gz"]).decode()
    clocks = [line.split(";")[1] for line in text.splitlines()[1:] if line.count(";") == 10]
    twice = [clock for clock in clocks if clock.startswith("02:")]
    assert twice == [f"02:{minute:02}:00" for minute in range(60)] * 2


def test_the_site_file_states_the_works(example_month):
    """Devices, compositions, cut-offs and noise of the site file are those simulated."""
    site = tomllib.loads(example_month.site_text)
    for run in RUNS:
        meter = site["meter"][run.name]
        device = meter[run.device.family]
        assert run.device.form in {device.get("tappings"), device.get("form")}
        assert float(device["bore"].removesuffix(" mm")) == pytest.approx(
            run.device.bore * 1e3, rel=1e-12
        )
        assert float(device["pipe_diameter"].removesuffix(" mm")) == pytest.approx(
            run.device.pipe_diameter * 1e3, rel=1e-12
        )
        if run.device.certificate is not None:
            assert (
                device["discharge_coefficient"]["value"]
                == run.device.certificate.discharge_coefficient
            )
        noise = site["signal"][f"PDT-{run.number}"]["repeatability"]
        assert noise["k"] == 1
        share = float(noise["size"].removesuffix(" % of span")) / 100.0
        log = example_month.run_logs[run.name]
        quiet = log.logged["PDT"] - log.shown["PDT"]
        assert share * run.dp_range == pytest.approx(float(np.std(quiet)), rel=0.03)
        assert float(meter["low_flow_cut_off"].removesuffix(" mbar")) * 100.0 == run.cut_off
    for composition in site["gas"]["natural_gas"]["composition"]:
        parts = [x for x in composition.values() if isinstance(x, float)]
        assert sum(parts) == pytest.approx(100.0, abs=1e-9)


def test_the_gases_calorific_values_are_those_of_the_standard():
    """By hand from ISO 6976:2016, Tables 2 and 3 (15 degC, 15 degC), with the figures for pure gas.

    Pure methane: 37.71 MJ/m3 (891.51 kJ/mol over 23.6448e-3 m3/mol and Z = 0.998018).
    """
    molar_volume = 8.3144621 * 288.15 / 101_325.0
    assert gross_calorific_value({"methane": 1.0}) == pytest.approx(
        891.51e3 / (molar_volume * (1.0 - 0.04452**2)), rel=1e-14
    )
    mixed = {"methane": 0.9, "ethane": 0.1}
    z = 1.0 - (0.9 * 0.04452 + 0.1 * 0.0919) ** 2
    assert gross_calorific_value(mixed) == pytest.approx(
        (0.9 * 891.51e3 + 0.1 * 1562.14e3) / (molar_volume * z), rel=1e-14
    )


def test_intake_reads_the_example_as_it_was_meant(example_month):
    """The site file loads; lines set aside are exactly the garbled ones; good cells the rest."""
    from meterfix.intake.logs import open_content, parse_many
    from meterfix.intake.site import site_from_text

    site = site_from_text(example_month.site_text, "site.toml")
    assert site.notes == ()
    arrival = int(datetime.fromisoformat(EXAMPLE_NOW).timestamp()) * 1_000_000
    logs = example_month.run_logs.values()
    for source in site.sources:
        files = sorted((SAMPLE / Path(source.folder).name).iterdir())
        contents = [open_content(f.read_bytes(), source.layout, f.name) for f in files]
        parsed = parse_many(
            contents,
            source.layout,
            stamp=source.stamp,
            interval=source.interval,
            arrivals=[arrival] * len(files),
        )
        assert {result.rejected for result in parsed} == {""}
        own = [log for log in logs if log.run.feed.name == source.name]
        garbled = sum(len(log.flaws.garbled) for log in own)
        bad = sum(len(log.flaws.bad_cells) for log in own)
        if source.name == "compressed_air":
            garbled = len(example_month.air_file_flaws.garbled)
        if source.name == "historian":  # a row holds one cell; those of a strange tag go with it
            garbled += bad + len(example_month.stray_lines)
            bad += len(example_month.stray_lines)
        assert sum(result.lines_set_aside for result in parsed) == garbled
        assert sum(result.cells_set_aside for result in parsed) == bad


def test_lay_makes_a_settled_example(tmp_path):
    """Site file and logs lie there, each older than EXAMPLE_NOW and younger than its last row.

    (Where the machine's clock is not that far yet, a minute older than the laying.)
    """
    site = lay(tmp_path / "new")
    made = site.stat().st_mtime
    assert site == tmp_path / "new" / "site.toml"
    laid = {
        path.relative_to(tmp_path / "new" / "logs").as_posix(): path.read_bytes()
        for path in (tmp_path / "new" / "logs").rglob("*.csv*")
    }
    stored = {p.relative_to(SAMPLE).as_posix(): p.read_bytes() for p in SAMPLE.rglob("*.csv*")}
    assert laid == stored
    now = datetime.fromisoformat(EXAMPLE_NOW).timestamp()
    for name in laid:
        day = datetime.fromisoformat(name.split(".")[0][-10:]).replace(tzinfo=UTC)
        age = (tmp_path / "new" / "logs" / name).stat().st_mtime
        assert min(day.timestamp() + 86_400.0, made - 120.0) < age < min(now, made)


def test_lay_again_is_fine_and_leaves_other_files(tmp_path):
    """A laid folder may be laid again; a database in it stays."""
    folder = tmp_path / "new"
    site = lay(folder)
    (folder / "meterfix.sqlite").write_bytes(b"kept")
    site.write_text("broken", encoding="utf-8")
    lay(folder)
    assert site.read_text(encoding="utf-8") == packaged_site().read_text(encoding="utf-8")
    assert (folder / "meterfix.sqlite").read_bytes() == b"kept"


def test_lay_never_touches_somebody_elses_folder(tmp_path):
    """A folder with anything in it, or a file, is refused; nothing in it changes."""
    (tmp_path / "site.toml").write_text("mine", encoding="utf-8")
    with pytest.raises(MeterfixError, match="not empty"):
        lay(tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["site.toml"]
    assert (tmp_path / "site.toml").read_text(encoding="utf-8") == "mine"
    with pytest.raises(MeterfixError, match="is a file"):
        lay(tmp_path / "site.toml")


def test_build_makes_the_stored_example(tmp_path, capsys):
    """The documented command makes the stored logs and the packaged site file from its random seed.

    Logs that the month does not have go; files elsewhere stay.
    """
    (tmp_path / "supply").mkdir()
    (tmp_path / "supply" / "FT-999_2026-10-01.csv.gz").write_bytes(b"stale")
    (tmp_path / "notes").mkdir()
    (tmp_path / "notes" / "mine.csv").write_bytes(b"kept")
    size = build(tmp_path, tmp_path / "site.toml")
    assert 1_000_000 < size < 3_500_000
    assert (tmp_path / "notes" / "mine.csv").read_bytes() == b"kept"
    (tmp_path / "notes" / "mine.csv").unlink()
    rebuilt, stored = (
        {
            path.relative_to(folder).as_posix(): _unpacked(path.read_bytes())
            for path in folder.rglob("*.csv*")
        }
        for folder in (tmp_path, SAMPLE)
    )
    assert rebuilt == stored
    assert (tmp_path / "site.toml").read_bytes() == packaged_site().read_bytes()
    assert main([]) == 2
    assert "usage" in capsys.readouterr().err


def test_a_written_span_has_site_and_logs(tmp_path):
    """`write` lays the site file and one folder per source."""
    site = simulate(days=1, noise=False, calibration=False, digits=9).write(tmp_path / "span")
    assert site.name == "site.toml"
    folders = sorted(path.name for path in (tmp_path / "span" / "logs").iterdir())
    assert folders == [
        "compressed_air",
        "historian",
        "kiln_control",
        "supply",
        "weather",
        "works",
    ]
    text = gzip.decompress(
        (tmp_path / "span/logs/supply/FT-101_2026-10-01.csv.gz").read_bytes()
    ).decode()
    time, dp, _, _ = text.splitlines()[1].split(",")
    assert time == "2026-10-01T04:00:00Z"
    assert len(dp.replace(".", "").lstrip("0")) <= 9
    assert len(dp) >= 8
