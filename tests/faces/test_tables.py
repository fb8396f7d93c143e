"""How a figure, a flag or a text looks in a table."""

from __future__ import annotations

import io

import pytest
from rich.console import Console

from meterfix.faces import render
from meterfix.faces.columns import ALL, BRIEF, SHORT_FLAGS
from meterfix.frames import FLAGS


def printed(what, rows, width=100, **options):
    text = io.StringIO()
    console = Console(file=text, width=width, highlight=False)
    render.print_table(console, what, rows, "title", **options)
    return text.getvalue()


def test_every_flag_has_a_short_name():
    """A table can name every flag, each by another word."""
    assert list(SHORT_FLAGS) == [name for name, _ in FLAGS]
    assert len(set(SHORT_FLAGS.values())) == len(SHORT_FLAGS)


def test_a_table_shows_columns_that_csv_has():
    """A table leaves columns out; it never invents one, but for the month and the sums."""
    for what, names in BRIEF.items():
        if what != "sources":
            assert set(names) - {"month"} <= set(ALL[what])


@pytest.mark.parametrize(
    ("value", "shown"),
    [
        (0.0, "0"),
        (1.0, "1.00000"),
        (-123.456789, "-123.457"),
        (1234567.0, "1234567"),
        (0.001234567, "0.001235"),
        (0.0000123456, "1.23456e-05"),
        (1.5e13, "1.5e+13"),
        (999999.9, "1000000"),
    ],
)
def test_six_significant_digits(value, shown):
    """Figures have about six significant digits and no powers of ten where they fit."""
    row = {"meter": "M", "gas_day": "2026-10-01", "mass_kg": value}
    assert shown in printed("totals", [row], by="gas-day").split()


def test_a_measured_fraction_below_one_never_shows_as_whole():
    """99.99999 % is shown as 99.99 %, not as 100.00 %."""
    row = {"meter": "M", "gas_day": "2026-10-01", "measured_fraction": 0.9999999}
    assert "99.99 %" in printed("totals", [row], by="gas-day")


def test_flags_are_short_and_in_percent_of_flow_time():
    """carried_value with a share of 0.0027 reads `carried 0.27`; a trace is not shown as none."""
    row = {
        "meter": "M",
        "gas_day": "2026-10-01",
        "flags": "over_range 1e-06; carried_value 0.0027",
        "shares": {"carried_value": 0.0027, "over_range": 1e-6},
    }
    text = printed("totals", [row], by="gas-day")
    assert "carried 0.27" in text
    assert "over range <0.01" in text


def test_what_says_nothing_is_left_out():
    """A column without any value, and vented gas that is zero everywhere, are not shown."""
    row = {"envelope": "E", "gas_day": "2026-10-01", "in": 2.0, "vented": 0.0, "tolerance": None}
    text = printed("balances", [row], by="gas-day")
    assert "vented" not in text
    assert "tolerance" not in text
    assert "vented" in printed("balances", [{**row, "vented": 0.5}], by="gas-day")


def test_markup_in_names_is_text():
    """A name in square brackets is printed, not taken for markup."""
    assert "[bold]M" in printed("totals", [{"meter": "[bold]M", "gas_day": "2026-10-01"}])


def test_all_flags_at_once_fit_100_columns():
    """A row as wide as a large works makes it fits 100 columns, and loses no figure."""
    row = {
        "meter": "FT-1234",
        "period_start": "2026-10-01T04:00:00Z",
        "base_volume_m3": 1234567.0,
        "mass_kg": 1234567.0,
        "energy_MJ": 123456789.0,
        "measured_fraction": 1.0,
        "status": "provisional",
        "revision": 12,
        "flags": "all",
        "shares": dict.fromkeys(SHORT_FLAGS, 1.0),
    }
    text = printed("totals", [row], by="hour")
    assert max(map(len, text.splitlines())) <= 100
    for part in ("1234567", "123456789", "100.00 %", "provisional", "12", "2026-10-01 04:00"):
        assert part in text
    for short in SHORT_FLAGS.values():
        assert short.split()[0] in text


def test_a_balance_as_wide_as_it_can_be_loses_no_figure():
    """Every column at its widest: headings stay whole where they can, figures always."""
    row = {
        "envelope": "works",
        "gas_day": "2026-10-01",
        "in": 1234567.0,
        "out": 1234567.0,
        "imbalance": -84.3115,
        "expanded_uncertainty": 1234.56,
        "tolerance": 1627.43,
        "unit": "kg",
        "significant": "cannot be judged: no uncertainty is stated for a thing of a long name",
        "beyond_tolerance": "cannot be judged: missing input",
        "measured_fraction": 0.9876,
        "status": "provisional",
        "revision": 12,
    }
    text = printed("balances", [row], by="gas-day")
    assert max(map(len, text.splitlines())) <= 100
    for part in ("envelope", "-84.3115", "1234.56", "1627.43", "98.76 %", "12"):
        assert part in text
    assert text.count("not judged") == 2


@pytest.mark.parametrize(
    ("share", "percent", "shown"),
    [
        (0.81351, 0.249751, ("0.2498", "81.35 %")),
        (8.2e-6, -0.000806, ("-0.0008", "<0.01 %")),
        (1e-9, 0.00001, ("<0.0001", "<0.01 %")),
        (0.0, 0.0, ("0.0000", "0 %")),
    ],
)
def test_a_budget_shows_no_trace_as_none(share, percent, shown):
    """Shares and percentages have fixed digits; what is too small for them is not a zero."""
    row = {
        "meter": "M",
        "gas_day": "2026-10-01",
        "source_of_uncertainty": "M bore",
        "base_volume_contribution_percent": percent,
        "variance_fraction": share,
    }
    line = printed("budget", [row], by="gas-day").splitlines()[-1]
    assert " ".join(line.split()) == " ".join(("M 2026-10-01 M bore", *shown))


@pytest.mark.parametrize(
    ("full", "short"),
    [
        ("excluded 2400.0 s", "excluded 2400 s"),
        ("excluded 86399.987654 s", "excluded 86399.98 s"),
        ("excluded 1e-06 s", "excluded <0.01 s"),
        ("not yet over 2422800.0 s", "not yet over 2422800 s"),
        ("FT-1.2345 (99.99999999 % measured)", "FT-1.2345 (99.99 % measured)"),
        ("A (50.0 % measured, no energy for 1800.125 s of it)",
         "A (50 % measured, no energy for 1800.12 s of it)"),
        ("left out: 2026-06-03 to 2026-06-30", "left out: 2026-06-03 to 2026-06-30"),
    ],
)  # fmt: skip
def test_notes_are_shortened_and_never_rounded_up(full, short):
    """Seconds and percent lose decimals under a table; names and dates lose nothing."""
    assert render.shortened(full) == short


def test_control_characters_of_a_log_are_escaped():
    """Text that was set aside cannot move the cursor or colour the screen."""
    row = {
        "source": "s",
        "name": "f.csv",
        "reason": "",
        "verdict": "accepted",
        "set_aside": [{"line": 3, "column": None, "text": "\x1b[31mred\x00", "reason": "bad"}],
    }
    assert render.troubles([row]) == [r"s/f.csv:3: bad | \x1b[31mred\x00"]


def test_long_notes_are_cut_and_counted():
    """Under a table stand the first notes and how many more there are."""
    text = io.StringIO()
    render.print_notes(Console(file=text, width=100), "Notes", [f"n{i}" for i in range(30)], 20)
    assert "n19" in text.getvalue()
    assert "n20" not in text.getvalue()
    assert "and 10 more" in text.getvalue()
