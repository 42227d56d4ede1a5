"""A file is replaced whole or not at all, whatever fails and whenever the process dies."""

from __future__ import annotations

import errno
import fcntl
import os
import random
import signal
import stat
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import pytest
from faults import Disk, Faults, PowerCut

from streambasis import files
from streambasis.files import Outflow, remove_leftovers, replace_file, write_all

OLD, NEW = b"old content", b"new content, which is longer"
KILLS = 20


def writer(content: bytes) -> Callable[[int], None]:
    """Return a writer of some content, in pieces."""

    def write(descriptor: int) -> None:
        for start in range(0, len(content), 7):
            write_all(descriptor, content[start : start + 7])

    return write


def partials(folder: Path) -> list[Path]:
    """Return the temporary files in a folder."""
    return sorted(folder.glob(".*.partial"))


def test_a_file_is_created_and_replaced(tmp_path: Path) -> None:
    """New content takes the place of old, and nothing else stays behind."""
    path = tmp_path / "file"
    for content in (OLD, NEW, b""):
        replace_file(path, writer(content))
        assert path.read_bytes() == content
        assert list(tmp_path.iterdir()) == [path]


def test_a_link_is_followed(tmp_path: Path) -> None:
    """The file behind a symbolic link is replaced, the link stays."""
    (tmp_path / "behind").mkdir()
    path = tmp_path / "link"
    path.symlink_to(tmp_path / "behind" / "file")
    replace_file(path, writer(NEW))
    assert path.is_symlink()
    assert (tmp_path / "behind" / "file").read_bytes() == NEW


def test_a_short_write_is_continued(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """Where the system takes only a part, the rest is written as well."""
    real = os.write
    monkeypatch.setattr(os, "write", lambda descriptor, data: real(descriptor, data[:3]))
    replace_file(tmp_path / "file", lambda descriptor: write_all(descriptor, NEW))
    assert (tmp_path / "file").read_bytes() == NEW


@pytest.mark.parametrize("forever", [False, True], ids=["once", "for ever"])
@pytest.mark.parametrize("kind", ["error", "power cut"])
def test_every_operation_may_fail(tmp_path: Path, forever: bool, kind: str) -> None:
    """When the n-th operation fails, for every n, the file is the old one or the new, whole."""
    error = PowerCut if kind == "power cut" else lambda: OSError(errno.EIO, "Input/output error")
    path = tmp_path / "file"
    for at in range(1, 1000):
        path.write_bytes(OLD)
        with pytest.MonkeyPatch.context() as patch:
            faults = Faults(patch, at, forever=forever or kind == "power cut", error=error)
            failed = False
            try:
                replace_file(path, writer(NEW))
            except (OSError, PowerCut):
                failed = True
        if not faults.met:
            break
        content = path.read_bytes()
        assert content in (OLD, NEW), faults.history
        assert failed or content == NEW, f"a failure was kept silent: {faults.history}"
        if kind == "error" and not forever and faults.history[-1] != "unlink":
            assert partials(tmp_path) == [], faults.history
        remove_leftovers(path)
        assert list(tmp_path.iterdir()) == [path]
    assert at > 10, "the shim met hardly any operation"
    assert path.read_bytes() == NEW


def test_only_forced_bytes_take_the_place_of_the_old(tmp_path: Path) -> None:
    """When power is cut after the n-th operation, what reached the disk is whole, for every n."""
    path = tmp_path / "file"
    for at in range(1, 1000):
        path.write_bytes(OLD)
        with pytest.MonkeyPatch.context() as patch:
            disk = Disk(patch, path)
            faults = Faults(patch, at, forever=True, error=PowerCut)
            try:
                replace_file(path, writer(NEW))
                done = True
            except PowerCut:
                done = False
        for content in disk.after_a_cut():
            assert content in (OLD, NEW), faults.history
            assert not done or content == NEW, "success was reported before the folder was forced"
        remove_leftovers(path)
        if done and not faults.met:
            break
    assert at > 10


def test_a_failed_fsync_is_never_tried_again_on_the_same_file(tmp_path: Path) -> None:
    """After a failed fsync the temporary file is given up; the next attempt writes another."""
    path = tmp_path / "file"
    path.write_bytes(OLD)
    synced: list[int] = []
    real = os.fsync

    def fsync(descriptor: int) -> None:
        synced.append(os.fstat(descriptor).st_ino)
        if len(synced) == 1:
            raise OSError(errno.EIO, "Input/output error")
        real(descriptor)

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(os, "fsync", fsync)
        # an open descriptor keeps the inode number from being given to the next file
        kept: list[int] = []

        def write(descriptor: int) -> None:
            kept.append(os.dup(descriptor))
            write_all(descriptor, NEW)

        with pytest.raises(OSError, match="Input/output"):
            replace_file(path, write)
        assert len(synced) == 1
        assert path.read_bytes() == OLD
        replace_file(path, write)
        for descriptor in kept:
            os.close(descriptor)
    assert len(set(synced)) == len(synced)
    assert path.read_bytes() == NEW


def test_a_writer_that_raises_leaves_nothing(tmp_path: Path) -> None:
    """An error of the writer itself passes through and leaves the old file alone."""
    path = tmp_path / "file"
    path.write_bytes(OLD)

    def write(descriptor: int) -> None:
        write_all(descriptor, NEW)
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        replace_file(path, write)
    assert path.read_bytes() == OLD
    assert partials(tmp_path) == []


def test_leftovers_are_removed_and_nothing_else(tmp_path: Path) -> None:
    """What a killed process left goes; files in use and files of others stay."""
    path = tmp_path / "file"
    ours = tmp_path / ".file.0123456789abcdef.partial"
    stay = [
        tmp_path / ".other.0123456789abcdef.partial",
        tmp_path / ".file.0123.partial",
        tmp_path / ".file.0123456789abcdef.partial.txt",
        tmp_path / "file.0123456789abcdef.partial",
    ]
    in_use = tmp_path / ".file.fedcba9876543210.partial"
    for file in (path, ours, in_use, *stay):
        file.write_bytes(OLD)
    with in_use.open("rb") as open_file:
        fcntl.flock(open_file, fcntl.LOCK_EX)
        assert remove_leftovers(path) == 1
    assert sorted(tmp_path.iterdir()) == sorted([path, in_use, *stay])
    assert remove_leftovers(path) == 1
    assert remove_leftovers(tmp_path) == 1
    assert sorted(tmp_path.iterdir()) == sorted([path, *stay[1:]])


def test_a_writer_survives_the_cleaner(tmp_path: Path) -> None:
    """A temporary file that is taken for a leftover before it is locked is made anew."""
    path = tmp_path / "file"
    real = fcntl.flock
    calls = []

    def flock(descriptor: int, operation: int) -> None:
        calls.append(operation)
        if len(calls) == 1:
            for temporary in partials(tmp_path):
                temporary.unlink()
        real(descriptor, operation)

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(fcntl, "flock", flock)
        replace_file(path, writer(NEW))
    assert len(calls) == 2
    assert path.read_bytes() == NEW
    assert partials(tmp_path) == []


LOOP = """
import sys
from streambasis.files import replace_file, write_all
path = sys.argv[1]
print("ready", flush=True)
number = 0
while True:
    number += 1
    content = b"%d\\n" % number * 20_000
    replace_file(path, lambda descriptor: write_all(descriptor, content))
"""


def test_a_killed_process_leaves_a_whole_file(tmp_path: Path) -> None:
    """SIGKILL at random moments of a loop of replacements leaves one of them, whole."""
    path = tmp_path / "file"
    rng = random.Random(1)
    left = 0
    for _ in range(KILLS):
        loop = subprocess.Popen([sys.executable, "-c", LOOP, str(path)], stdout=subprocess.PIPE)
        assert loop.stdout is not None
        loop.stdout.readline()
        deadline = time.monotonic() + 30
        while not path.exists() and time.monotonic() < deadline:
            time.sleep(0.001)
        time.sleep(rng.uniform(0, 0.02))
        loop.send_signal(signal.SIGKILL)
        loop.wait()
        loop.stdout.close()
        content = path.read_bytes()
        number = content[: content.index(b"\n") + 1]
        assert content == number * 20_000
        left += remove_leftovers(path)
        assert list(tmp_path.iterdir()) == [path]
    assert left > 0, "no kill hit a replacement: the test shows nothing"


def test_permissions_are_as_told_whatever_the_umask(tmp_path: Path) -> None:
    """The owner alone by default, else exactly the mode that was given."""
    path = tmp_path / "file"
    before = os.umask(0o077)
    try:
        replace_file(path, writer(NEW))
        assert stat.S_IMODE(path.stat().st_mode) == 0o600
        replace_file(path, writer(NEW), mode=0o644)
        assert stat.S_IMODE(path.stat().st_mode) == 0o644
    finally:
        os.umask(before)


def test_a_large_file_flows_out_whole(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Whatever the sizes of the writes, every byte arrives, and pages are given back meanwhile."""
    monkeypatch.setattr(files, "PIECE", 5)
    monkeypatch.setattr(files, "BEHIND", 16)
    told: list[int] = []
    monkeypatch.setattr(os, "posix_fadvise", lambda *call: told.append(call[2]))
    content = random.Random(3).randbytes(200)

    def write(descriptor: int) -> None:
        flow = Outflow(descriptor)
        for start, stop in ((0, 0), (0, 1), (1, 90), (90, 93), (93, 200)):
            flow.write(content[start:stop])

    replace_file(tmp_path / "file", write)
    assert (tmp_path / "file").read_bytes() == content
    assert len(told) >= 200 // (16 + 5)
    assert all(16 <= b - a <= 16 + 5 for a, b in zip([0, *told], told, strict=False))
