"""What lies in a source's folder: real files, links, pipes, growing and vanishing files."""

import os
import time
from pathlib import Path

import pytest

from meterfix.intake.logs import Refusal, look, read_stable
from meterfix.intake.logs import discover as module


def lay(path: Path, content: bytes = b"x\n", *, age: float = 60.0) -> Path:
    """Write a file that was last changed so many seconds ago."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(content)
    if age:
        now = path.stat().st_mtime_ns
        os.utime(path, ns=(now, now - int(age * 1e9)))
    return path


def names(parts) -> list[str]:
    """Return the names in one part of what was found."""
    return [part.name for part in parts]


def test_files_are_found_by_pattern_in_order_of_names(tmp_path, source):
    """A file's binding is what its name holds in place of '{binding}'; others are left alone."""
    for name in ("B_2.csv", "A_1.csv", "A_10.csv.gz", "A.csv", "A_1.txt", "_1.csv"):
        lay(tmp_path / name)
    looked = look(source(), tmp_path, tmp_path)
    assert [(f.name, f.binding) for f in looked.stable] == [
        ("A_1.csv", "A"),
        ("A_10.csv.gz", "A"),
        ("B_2.csv", "B"),
    ]
    assert (looked.waiting, looked.rejected, looked.trouble) == ((), (), "")
    found = looked.stable[0]
    state = (tmp_path / "A_1.csv").stat()
    assert (found.size, found.modified_ns, found.inode) == (2, state.st_mtime_ns, state.st_ino)
    assert found.modified_us == state.st_mtime_ns // 1000
    assert 59_000_000 < found.age_us < 120_000_000
    assert read_stable(found) == b"x\n"


@pytest.mark.parametrize(
    ("pattern", "file", "binding"),
    [
        ("*.csv", "plain.csv", ""),
        ("{binding}/*.csv", "FT-1/2026.csv", "FT-1"),
        ("20??/{binding}_[0-9]*.csv", "2026/FT_A_1.csv", "FT_A"),
        ("{binding}[!0-9]x.csv", "FT-x.csv", "FT"),
        ("log.{binding}", "log.a b", "a b"),
        ("a[^-]b{binding}", "a^bc", "c"),
        ("*/{binding}.csv", "x/a+(b).csv", "a+(b)"),
        (".{binding}", ".hidden", "hidden"),
    ],
)
def test_patterns(tmp_path, source, pattern, file, binding):
    """Subfolders, sets of characters and any place of the binding are understood."""
    lay(tmp_path / file)
    looked = look(source(file_pattern=pattern), tmp_path, tmp_path)
    assert [(f.name, f.binding) for f in looked.stable] == [(file, binding)]


@pytest.mark.parametrize(
    ("pattern", "file"),
    [
        ("*.csv", "sub/a.csv"),
        ("{binding}_*.csv", "a/b_1.csv"),
        ("*.csv", "a.csv.tmp"),
        ("*.csv", "axcsv"),
        ("*.csv*", ".a.csv.Xy12"),
        ("a[!b].csv", "ab.csv"),
        ("{binding}.csv", ".csv"),
    ],
)
def test_files_outside_the_pattern(tmp_path, source, pattern, file):
    """'*' and '{binding}' stay within one part of the path; half-written copies stay hidden."""
    lay(tmp_path / file)
    looked = look(source(file_pattern=pattern), tmp_path, tmp_path)
    assert (looked.stable, looked.waiting, looked.rejected) == ((), (), ())


@pytest.mark.parametrize(
    "name", ["..a_1.csv", "a..b_..csv", "a\\..\\b_1.csv", "=1+1_x.csv", "a\n_1.csv"]
)
def test_odd_names_are_only_labels(tmp_path, source, name):
    """35: whatever a name holds, the file is read; the name is never taken apart as a path."""
    lay(tmp_path / name)
    (found,) = look(source(), tmp_path, tmp_path).stable
    assert found.name == name
    assert read_stable(found) == b"x\n"


def test_a_name_that_is_no_text_gets_a_label_that_is(tmp_path, source):
    """Bytes that are not UTF-8 are escaped in the label; the file is read all the same."""
    lay(tmp_path / os.fsdecode(b"a\xff_1.csv"))
    (found,) = look(source(), tmp_path, tmp_path).stable
    assert found.name == "a\\xff_1.csv"
    assert read_stable(found) == b"x\n"


def test_a_file_must_have_settled(tmp_path, source):
    """1: a file is stable once it was changed settle_time before a file touched now."""
    lay(tmp_path / "old_1.csv", age=5.5)
    lay(tmp_path / "young_1.csv", age=4.0)
    lay(tmp_path / "new_1.csv", age=0)
    lay(tmp_path / "tomorrow_1.csv", age=-86_400)
    looked = look(source(), tmp_path, tmp_path)
    assert names(looked.stable) == ["old_1.csv"]
    assert names(looked.waiting) == ["new_1.csv", "tomorrow_1.csv", "young_1.csv"]
    reasons = [part.reason for part in looked.waiting]
    assert "rest for 5 s" in reasons[0]
    assert "in the future" in reasons[1]
    assert sorted(p.name for p in tmp_path.iterdir()) == sorted(
        ["old_1.csv", "young_1.csv", "new_1.csv", "tomorrow_1.csv"]
    )


def test_no_clock_is_asked(tmp_path, source, monkeypatch):
    """Only the file system's own time counts: a broken clock changes nothing."""

    def broken() -> float:
        raise AssertionError

    lay(tmp_path / "a_1.csv")
    monkeypatch.setattr(time, "time", broken)
    monkeypatch.setattr(time, "time_ns", broken)
    assert names(look(source(), tmp_path, tmp_path).stable) == ["a_1.csv"]


def test_a_folder_that_cannot_be_written(tmp_path, source, monkeypatch):
    """Where the folder is read-only the probe is touched in the other folder."""
    folder, probe = tmp_path / "logs", tmp_path / "archive"
    probe.mkdir()
    lay(folder / "a_1.csv")
    touched = module._touched
    asked = []

    def refuse(place: Path) -> int:
        asked.append(place)
        if place == folder:
            raise PermissionError(30, "Read-only file system")
        return touched(place)

    monkeypatch.setattr(module, "_touched", refuse)
    assert names(look(source(), folder, probe).stable) == ["a_1.csv"]
    assert asked == [folder, probe]


def test_a_folder_that_is_not_there(tmp_path, source):
    """A missing folder, or a file in its place, is told and raises nothing."""
    looked = look(source(), tmp_path / "none", tmp_path)
    assert "none" in looked.trouble
    assert looked.stable == ()
    lay(tmp_path / "file")
    assert "file" in look(source(), tmp_path / "file", tmp_path).trouble


def test_links_pipes_and_devices_are_rejected(tmp_path, source):
    """33, 34: links and pipes are rejected; nothing hangs, no link is followed."""
    outside = lay(tmp_path / "outside" / "secret_1.csv")
    folder = tmp_path / "logs"
    lay(folder / "good_1.csv")
    (folder / "link_1.csv").symlink_to(outside)
    (folder / "lost_1.csv").symlink_to(folder / "nowhere")
    os.mkfifo(folder / "pipe_1.csv")
    (folder / "folder_1.csv").mkdir()
    looked = look(source(), folder, tmp_path)
    assert names(looked.stable) == ["good_1.csv"]
    assert names(looked.waiting) == []
    assert [(part.name, part.reason) for part in looked.rejected] == [
        ("link_1.csv", "is a symbolic link; links are not followed"),
        ("lost_1.csv", "is a symbolic link; links are not followed"),
        ("pipe_1.csv", "is a pipe, socket or device, not a file"),
    ]


@pytest.mark.skipif(not Path("/dev/null").exists(), reason="no device to look at")
def test_a_device_is_rejected():
    """34: a device is no file, even by its own path."""
    outcome = module._examine(Path("/dev/null"))
    assert isinstance(outcome, Refusal)
    assert "device" in outcome.reason


def test_a_linked_subfolder_is_rejected(tmp_path, source):
    """33: a link to a folder is not followed either."""
    lay(tmp_path / "outside" / "a.csv")
    folder = tmp_path / "logs"
    folder.mkdir()
    (folder / "FT-1").symlink_to(tmp_path / "outside")
    looked = look(source(file_pattern="{binding}/*.csv"), folder, tmp_path)
    assert looked.stable == ()
    assert [(p.binding, p.name) for p in looked.rejected] == [("FT-1", "FT-1")]


def test_a_file_over_the_size_limit_is_rejected(tmp_path, source):
    """30, 29: one over the limit is rejected by its size alone; one at the limit is not."""
    lay(tmp_path / "at_1.csv", b"x" * 100)
    lay(tmp_path / "over_1.csv", b"x" * 101)
    huge = tmp_path / "huge_1.csv"
    with huge.open("wb") as file:
        file.truncate(2 << 30)
    looked = look(source(layout={"size_limit": 100}), tmp_path, tmp_path)
    assert names(looked.stable) == ["at_1.csv"]
    assert [(p.name, p.reason) for p in looked.rejected] == [
        ("huge_1.csv", "the file has 2147483648 bytes; the limit is 100"),
        ("over_1.csv", "the file has 101 bytes; the limit is 100"),
    ]


def test_an_unreadable_file_waits(tmp_path, source, monkeypatch):
    """46: a file that cannot be opened waits, with the system's reason."""
    lay(tmp_path / "a_1.csv")
    lay(tmp_path / "b_1.csv")
    opened = os.open

    def refuse(path, *args, **kw):
        if str(path).endswith("a_1.csv"):
            raise PermissionError(13, "Permission denied")
        return opened(path, *args, **kw)

    monkeypatch.setattr(os, "open", refuse)
    looked = look(source(), tmp_path, tmp_path)
    assert names(looked.stable) == ["b_1.csv"]
    assert [(p.name, p.reason) for p in looked.waiting] == [
        ("a_1.csv", "cannot be opened: Permission denied")
    ]


def test_what_changed_since_it_was_found_waits(tmp_path, source):
    """46: a file that vanished, grew, was replaced or became a link is not read."""
    paths = {n: lay(tmp_path / f"{n}_1.csv") for n in ("gone", "grown", "link", "new", "same")}
    found = {f.binding: f for f in look(source(), tmp_path, tmp_path).stable}
    state = paths["new"].stat()
    paths["gone"].unlink()
    with paths["grown"].open("ab") as file:
        file.write(b"y\n")
    paths["link"].unlink()
    paths["link"].symlink_to(paths["same"])
    other = lay(tmp_path / "other")
    os.utime(other, ns=(state.st_atime_ns, state.st_mtime_ns))
    other.rename(paths["new"])
    for binding in ("gone", "grown", "link", "new"):
        outcome = read_stable(found[binding])
        assert isinstance(outcome, Refusal), binding
        assert outcome.truncated
    assert read_stable(found["same"]) == b"x\n"


def test_what_grows_while_it_is_read_waits(tmp_path, source, monkeypatch):
    """1: bytes added between the two looks at an open file make it wait; none is read in part."""
    path = lay(tmp_path / "a_1.csv", b"one\n")
    (found,) = look(source(), tmp_path, tmp_path).stable
    identity = module._identity

    def grow(descriptor: int) -> tuple[int, int, int]:
        before = identity(descriptor)
        with path.open("ab") as file:
            file.write(b"two\n")
        return before

    monkeypatch.setattr(module, "_identity", grow)
    outcome = read_stable(found)
    assert isinstance(outcome, Refusal)
    assert "while it was read" in outcome.reason
