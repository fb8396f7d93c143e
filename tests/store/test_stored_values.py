from __future__ import annotations

import gzip
import hashlib

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from meterfix.store.archive import Archive, DamagedArchiveError, PackEntry
from meterfix.store.chain import row_digest, split_marks, table_digest
from meterfix.store.fingerprint import describe, fingerprint
from meterfix.store.tables import table_named
from meterfix.store.values import decode_array, encode_array, stored_row

CONFLICT = {
    "signal": "p",
    "instant_us": 1,
    "decision": 1,
    "candidates": "[]",
    "chosen": 1.5,
    "rule": "r",
    "pass_sequence": 1,
}


def stored(**changes):
    return stored_row(table_named("conflict"), {**CONFLICT, **changes})


def test_numbers_become_pythons_own():
    """NumPy's scalars and -0.0 leave no trace."""
    row = stored(chosen=np.float64(-0.0), instant_us=np.int32(7), decision=np.int64(2**63 - 1))
    assert (type(row["chosen"]), type(row["instant_us"])) == (float, int)
    assert str(row["chosen"]) == "0.0"
    assert row["decision"] == 2**63 - 1
    assert stored(chosen=np.float32(0.5))["chosen"] == 0.5


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"chosen": float("nan")}, r"conflict\.chosen: nan is not finite"),
        ({"chosen": np.float64("inf")}, r"conflict\.chosen: inf is not finite"),
        ({"chosen": "1.5"}, r"conflict\.chosen: '1.5' is not a number"),
        ({"chosen": None}, r"conflict\.chosen cannot be None"),
        ({"instant_us": 1.0}, r"conflict\.instant_us: 1.0 is not an integer"),
        ({"instant_us": 2**63}, "does not fit in 64 bits"),
        ({"rule": b"r"}, "is not text"),
        ({"rule": "a\0b"}, "holds a NUL"),
        ({"rule": "\udcff"}, "cannot be written as UTF-8"),
        ({"ruling": "r"}, "conflict has no column 'ruling'"),
    ],
)
def test_what_cannot_be_stored_is_named(change, message):
    """Table, column and value are named when a value cannot be stored."""
    with pytest.raises(ValueError, match=message):
        stored(**change)


def test_missing_columns():
    """A column without a default must be given; one that may be unknown becomes NULL."""
    with pytest.raises(ValueError, match=r"conflict\.rule is missing"):
        stored_row(table_named("conflict"), {k: v for k, v in CONFLICT.items() if k != "rule"})
    row = stored_row(
        table_named("alert_event"),
        {
            "alert_id": "a",
            "number": 1,
            "state": "opened",
            "severity": "s",
            "message": "m",
            "pass_sequence": 1,
        },
    )
    assert row["until_us"] is None
    assert row["currency"] == ""


@given(st.lists(st.lists(st.floats(allow_infinity=False), min_size=3, max_size=3)))
def test_arrays_round_trip(rows):
    """Finite values keep their bits, NaN stays NaN in one form, -0.0 becomes 0.0."""
    array = np.array(rows, dtype=np.float64).reshape(-1, 3)
    blob = encode_array(array)
    back = decode_array(blob, 3)
    np.testing.assert_array_equal(back, array)
    assert not np.signbit(back[back == 0]).any()
    assert encode_array(back) == blob
    assert back.flags.writeable
    assert back.dtype == np.float64


def test_arrays_have_one_form():
    """Any NaN, any memory order: the same bytes, little-endian; the caller's array stays as is."""
    other_nan = np.frombuffer(b"\x01\x00\x00\x00\x00\x00\xf8\xff", dtype="<f8")[0]
    array = np.array([[1.0, other_nan], [-0.0, 3.0]])
    assert encode_array(array).hex() == (
        "000000000000f03f" + "000000000000f87f" + "0" * 16 + "0000000000000840"
    )
    assert encode_array(np.asfortranarray(array)) == encode_array(array)
    assert np.signbit(array[1, 0])
    with pytest.raises(ValueError, match="infinite"):
        encode_array([np.inf])
    with pytest.raises(ValueError, match="not whole rows"):
        decode_array(b"\0" * 24, 2)


def test_digest_does_not_depend_on_order():
    """Order of rows and of columns is irrelevant; every value, type and name counts."""
    rows = [stored(signal=s, instant_us=t) for s in ("a", "b", "é") for t in (1, 2, 10, -1)]
    plain = table_digest("conflict", rows)
    chance = np.random.default_rng(1)
    for _ in range(5):
        order = chance.permutation(len(rows))
        turned = [dict(reversed(rows[n].items())) for n in order]
        assert table_digest("conflict", turned) == plain
    assert len(split_marks(plain.marks)) == plain.rows == 12
    for column, value in (("chosen", 1.5000000000000002), ("rule", "s"), ("instant_us", 3)):
        changed = [{**rows[0], column: value}, *rows[1:]]
        assert table_digest("conflict", changed).digest != plain.digest
    assert row_digest({"a": 1}) != row_digest({"a": 1.0})
    assert row_digest({"a": "1"}) != row_digest({"a": b"1"})
    assert row_digest({"a": "bc"}) != row_digest({"ab": "c"})


def test_a_later_column_does_not_change_older_digests():
    """A row's digest is the same before and after a column that is NULL for it was added."""
    assert row_digest({"a": 1}) == row_digest({"a": 1, "b": None})


def test_fingerprint():
    """The fingerprint is stable and says what it covers, without CoolProp being loaded."""
    described = describe()
    assert described["numpy"] == np.__version__
    assert described["dispatched"].keys() >= {"power", "exp", "log", "multiply"}
    assert described["cpu_features"]
    assert len(fingerprint()) == 16
    assert fingerprint() == fingerprint()


def entry(content: bytes, name: str = "a.csv", **meta) -> PackEntry:
    return PackEntry(
        hashlib.sha256(content).hexdigest(), content, {"source": "s", "name": name, **meta}
    )


@pytest.fixture
def archive(tmp_path):
    archive = Archive(tmp_path / "archive", "id")
    archive.make_folders()
    return archive


def test_pack_round_trip(archive, tmp_path):
    """Objects come back bit for bit; equal entries give one pack, equal bytes one object."""
    text, packed = b"time,dp\n" * 500, gzip.compress(b"time,dp\n1,2\n" * 99, mtime=0)
    entries = [entry(text), entry(packed, "b.csv.gz"), entry(text, "c.csv"), entry(b"", "empty")]
    rows = archive.write_pack(entries)
    assert len(rows) == 3
    by_hash = {row["sha256"]: row for row in rows}
    for one in entries:
        assert archive.read_raw(by_hash[one.sha256]) == one.content
    assert by_hash[entries[0].sha256]["stored_length"] < len(text) / 10
    assert by_hash[entries[1].sha256]["packing"] == "none"
    (pack,) = archive.packs()
    assert archive.hash_of_pack(pack) == pack
    index = archive.pack_index(pack)
    assert [line.meta["name"] for line in index] == ["a.csv", "b.csv.gz", "c.csv", "empty"]
    other = Archive(tmp_path / "other", "id")
    other.make_folders()
    other.write_pack(entries)
    assert other.packs() == [pack]


def test_a_delivery_of_known_bytes(archive):
    """A file whose bytes are stored already is noted without them."""
    known = entry(b"known")
    assert archive.write_pack([PackEntry(known.sha256, None, known.meta)]) == []
    (pack,) = archive.packs()
    assert archive.pack_index(pack)[0].location is None
    with pytest.raises(DamagedArchiveError, match="no pack holds"):
        archive.find(known.sha256)
    (row,) = archive.write_pack([entry(b"known", "again")])
    assert archive.find(known.sha256) == row


def test_packs_that_are_not_what_they_say(archive, tmp_path):
    """Wrong content, a foreign pack and a broken index are refused by name."""
    with pytest.raises(ValueError, match="the content is not"):
        archive.write_pack([PackEntry("0" * 64, b"x", {})])
    archive.write_pack([entry(b"x")])
    (pack,) = archive.packs()
    with pytest.raises(DamagedArchiveError, match="belongs to ledger id"):
        Archive(archive.folder, "another").pack_index(pack)
    for content in (b"", b"meterfix pack 1\n" + b"\xff" * 8, b"meterfix pack 1\n" + b"\0" * 8):
        (archive.packs_folder / "broken.pack").write_bytes(content)
        with pytest.raises(DamagedArchiveError, match="pack broken"):
            archive.pack_index("broken")
    with pytest.raises(DamagedArchiveError, match="not known"):
        archive.read_raw(
            {"pack": pack, "sha256": "", "offset": 0, "stored_length": 1, "packing": "?"}
        )
