from __future__ import annotations

import numpy as np
import pytest

from meterfix.store.ledger import Between, DamagedReadings, RawReadings
from meterfix.store.proof import check_store


def add_waiting(ledger, names):
    ledger.write_outside(
        replace={
            "waiting": [
                {"source": "s", "binding": f"b{n % 3}", "name": name, "reason": "", "seen_us": n}
                for n, name in enumerate(names)
            ]
        }
    )


def test_where(ledger):
    """Equality, membership and ranges select what they say, ordered as asked."""
    add_waiting(ledger, ["a", "b", "c", "d", "e"])

    def names(**where):
        return [r["name"] for r in ledger.rows("waiting", where=where, order=["name"])]

    assert names() == ["a", "b", "c", "d", "e"]
    assert names(name="c") == ["c"]
    assert names(name=["a", "e", "zz"]) == ["a", "e"]
    assert names(name={"b"}, binding="b1") == ["b"]
    assert names(seen_us=Between(1, 3)) == ["b", "c", "d"]
    assert names(seen_us=Between(None, 1)) == ["a", "b"]
    assert names(seen_us=Between(4, None)) == ["e"]
    assert names(name=[]) == []
    assert ledger.rows("waiting", where={"name": "a"}, columns=["seen_us"]) == [{"seen_us": 0}]
    with pytest.raises(ValueError, match="no column 'nam'"):
        ledger.rows("waiting", where={"nam": 1})
    with pytest.raises(ValueError, match="no table 'wait'"):
        ledger.rows("wait")


def test_membership_beyond_any_limit(ledger):
    """Thousands of values in one membership test give one ordered answer."""
    names = [f"{n:05d}" for n in range(1700)]
    add_waiting(ledger, names)
    found = ledger.rows("waiting", where={"name": names[::-1]}, order=["seen_us"])
    assert [row["name"] for row in found] == names


def test_latest(ledger):
    """The row with the highest number of each group, over several queries too."""
    add_waiting(ledger, ["a", "b", "c", "d", "e"])
    found = ledger.latest("waiting", group=["binding"], number="seen_us", columns=["name"])
    assert found == [{"name": "d"}, {"name": "e"}, {"name": "c"}]
    many = [f"x{n}" for n in range(1200)] + ["a", "b", "c"]
    found = ledger.latest(
        "waiting", group=["binding"], number="seen_us", where={"name": many}, columns=["seen_us"]
    )
    assert found == [{"seen_us": 0}, {"seen_us": 1}, {"seen_us": 2}]


def readings(instants, values, delivery):
    count = len(instants)
    return RawReadings(
        np.array(instants, dtype=np.int64),
        np.array(values, dtype=np.float64),
        np.arange(count) % 2 == 1,
        np.full(count, delivery, dtype=np.int64),
        np.ones(count, dtype=np.int64),
        np.arange(count) % 3 == 1,
    )


def store(ledger, scenario, clock, columns):
    with ledger.writer():
        ledger.recover()
        record = scenario.build_pass(
            ledger, [scenario.entry_of(f"day_{clock:02d}.csv", b"%d\n\n" % clock, clock)], clock
        )
        file, digest, spans = ledger.archive.write_readings(list(columns), columns)
        key = {"pass_sequence": ledger.next_sequence()}
        record.replace["reading_segment"] = [{**key, "file": file, "digest": digest}]
        record.replace["reading_span"] = [{**key, **span} for span in spans]
        return ledger.commit(record)


def test_readings_of_several_segments(ledger, scenario):
    """Readings come from every pass, within the window, up to a pass, and keep their bits."""
    store(ledger, scenario, 1, {"p": readings([30, 10, 20], [0.1, -0.0, 1e300], 1)})
    store(
        ledger,
        scenario,
        2,
        {"p": readings([40, 20], [5.0, 6.0], 2), "t": readings([25], [273.15], 2)},
    )
    found = ledger.load_readings(["p", "t", "none"], 20, 40)
    assert set(found) == {"p", "t", "none"}
    assert len(found["none"].instants) == 0
    rows = sorted(
        zip(
            found["p"].instants.tolist(),
            found["p"].delivery.tolist(),
            found["p"].values.tolist(),
            found["p"].implausible.tolist(),
            strict=True,
        )
    )
    assert rows == [
        (20, 1, 1e300, False),
        (20, 2, 6.0, True),
        (30, 1, 0.1, False),
        (40, 2, 5.0, False),
    ]
    assert found["t"].values.tolist() == [273.15]
    assert ledger.load_readings(["p"], 0, 99, up_to_pass=1)["p"].delivery.tolist() == [1, 1, 1]
    zero = ledger.load_readings(["p"], 10, 10)["p"].values
    assert not np.signbit(zero[0])
    assert found["p"].instants.dtype == np.int64
    assert found["p"].implausible.dtype == np.bool_
    marks = [found["p"].implausible.tolist(), found["p"].doubtful.tolist()]
    by_instant = sorted(zip(found["p"].values.tolist(), *marks, strict=True))
    assert by_instant == [
        (0.1, False, False),
        (5.0, False, False),
        (6.0, True, True),
        (1e300, False, False),
    ]
    first = ledger.load_readings(["p"], 10, 10, up_to_pass=1)["p"]
    assert (first.implausible.tolist(), first.doubtful.tolist()) == ([True], [True])
    assert check_store(ledger) == []


def test_damaged_readings_are_named_and_can_be_replaced(ledger, scenario, tmp_path):
    """A damaged or missing segment is named with its pass; replaced, all is well again."""
    columns = {"p": readings([10, 20], [1.0, 2.0], 1)}
    store(ledger, scenario, 1, columns)
    (path,) = ledger.archive.readings_folder.glob(ledger.rows("reading_segment")[0]["file"])
    content = bytearray(path.read_bytes())
    content[-30] ^= 1
    for damage in (lambda: path.write_bytes(content), path.unlink):
        damage()
        with (
            scenario.open_ledger(tmp_path, read_only=True) as fresh,
            pytest.raises(DamagedReadings, match="readings of pass 1") as caught,
        ):
            fresh.load_readings(["p"], 0, 99)
        assert caught.value.pass_sequence == 1
        assert [finding.check for finding in check_store(ledger)] == ["readings"]
        with ledger.writer():
            ledger.replace_readings(1, ["p"], columns)
        assert ledger.load_readings(["p"], 0, 99)["p"].values.tolist() == [1.0, 2.0]
        assert check_store(ledger) == []


def test_readings_that_are_not_numbers(ledger):
    """A reading that is not finite is refused."""
    for value in (np.nan, np.inf):
        with pytest.raises(ValueError, match="signal p: a reading is not finite"):
            ledger.archive.write_readings(["p"], [readings([1], [value], 1)])


def test_one_set_of_readings_has_one_file(ledger):
    """The file of a set of readings does not depend on the order in which they come."""
    instants, values = [5, 1, 3, 3], [1.0, 2.0, 4.0, 3.0]
    plain = RawReadings(
        np.array(instants),
        np.array(values),
        np.zeros(4, dtype=np.bool_),
        np.ones(4, dtype=np.int64),
        np.ones(4, dtype=np.int64),
        np.zeros(4, dtype=np.bool_),
    )
    turned = RawReadings(
        plain.instants[::-1],
        plain.values[::-1],
        plain.implausible,
        plain.delivery,
        plain.judgement,
        plain.doubtful,
    )
    first = ledger.archive.write_readings(["a", "b"], {"a": plain, "b": turned})
    second = ledger.archive.write_readings(["b", "a"], {"a": turned, "b": plain})
    assert first == second
