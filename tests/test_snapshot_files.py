"""Saving to a file survives kills, full disks and read-only folders, and leaves the old file."""

from __future__ import annotations

import errno
import json
import os
import random
import shutil
import signal
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from faults import Disk, Faults, PowerCut

import streambasis
from streambasis.errors import SnapshotFileError
from streambasis.snapshot import load, read_state, save, to_bytes
from streambasis.state import State

ROOT = Path(__file__).parent.parent
KILLS = 20


def numbered(number: int, size: int = 50) -> State:
    """Return a state that shows whether it is whole."""
    return State("Kind", {"number": number}, {"values": np.full(size, float(number))})


@pytest.mark.parametrize("forever", [False, True], ids=["once", "for ever"])
def test_every_operation_of_saving_may_fail(tmp_path: Path, forever: bool) -> None:
    """When the n-th operation fails, for every n, the old or the new snapshot is there, whole."""
    path = tmp_path / "state.arrow"
    old, new = to_bytes(numbered(1)), to_bytes(numbered(2))
    for at in range(1, 1000):
        path.write_bytes(old)
        with pytest.MonkeyPatch.context() as patch:
            faults = Faults(patch, at, forever=forever)
            failed = False
            try:
                save(numbered(2), path)
            except SnapshotFileError as error:
                failed = error.errno == errno.EIO and str(path) in str(error)
        if not faults.met:
            break
        content = path.read_bytes()
        assert content in (old, new), faults.history
        assert failed or content == new, faults.history
    assert {"write", "pwrite", "fsync", "replace"} <= set(faults.history)
    assert path.read_bytes() == new


def test_a_power_cut_at_any_moment_of_saving(tmp_path: Path) -> None:
    """When power is cut after the n-th operation, what reached the disk is whole, for every n."""
    path = tmp_path / "state.arrow"
    old, new = to_bytes(numbered(1)), to_bytes(numbered(2))
    for at in range(1, 1000):
        path.write_bytes(old)
        with pytest.MonkeyPatch.context() as patch:
            disk = Disk(patch, path)
            faults = Faults(patch, at, forever=True, error=PowerCut)
            try:
                save(numbered(2), path)
                done = True
            except PowerCut:
                done = False
        for content in disk.after_a_cut():
            assert content in (old, new), faults.history
            assert not done or content == new, faults.history
        if done and not faults.met:
            break
    assert at > 10


LOOP = """
import sys
import numpy as np
from streambasis.snapshot import load, save
from streambasis.state import State
path, number = sys.argv[1], int(sys.argv[2])
while True:
    number += 1
    save(State("Kind", {"number": number}, {"values": np.full(200_000, float(number))}), path)
    if number % 2 == 0:
        print(number, flush=True)
"""


def test_a_killed_process_leaves_a_whole_snapshot(tmp_path: Path) -> None:
    """SIGKILL at random moments of a loop of saves: a whole snapshot, none lost that was reported.

    Each process also removes what the one before it left behind.
    """
    path = tmp_path / "state.arrow"
    rng = random.Random(3)
    number = 0
    seen_leftovers = 0
    for _ in range(KILLS):
        loop = subprocess.Popen(
            [sys.executable, "-c", LOOP, str(path), str(number)],
            cwd=ROOT,
            stdout=subprocess.PIPE,
            text=True,
        )
        assert loop.stdout is not None
        reported = int(loop.stdout.readline())
        assert len(list(tmp_path.glob(".*.partial"))) <= 1, "leftovers pile up"
        try:
            loop.wait(rng.uniform(0, 0.03))
        except subprocess.TimeoutExpired:
            loop.send_signal(signal.SIGKILL)
        loop.wait()
        reported = max([reported, *map(int, loop.stdout.read().split())])
        loop.stdout.close()
        state = read_state(path)
        number = state.facts["number"]
        assert number >= reported
        assert np.array_equal(state.arrays["values"], np.full(200_000, float(number)))
        seen_leftovers += len(list(tmp_path.glob(".*.partial")))
    assert seen_leftovers > 0, "no kill hit a save: the test shows nothing"


FULL = """
import sys
import numpy as np
from streambasis.errors import SnapshotFileError
from streambasis.snapshot import read_state, save
from streambasis.state import State
path = sys.argv[1]
save(State("Kind", {"number": 1}, {"values": np.ones(1000)}), path)
try:
    save(State("Kind", {"number": 2}, {"values": np.ones(1_000_000)}), path)
except SnapshotFileError as error:
    print(error.errno, error)
    print(read_state(path).facts["number"])
save(State("Kind", {"number": 3}, {"values": np.ones(2000)}), path)
print(read_state(path).facts["number"])
import os
print(os.listdir(os.path.dirname(path)))
"""


def in_namespace(setup: str, code: str, path: Path) -> list[str]:
    """Run code on a path after mounting something, in a namespace of its own; return its lines."""
    command = ["unshare", "--user", "--map-root-user", "--mount", "sh", "-c"]
    if shutil.which("unshare") is None or subprocess.run([*command, "true"]).returncode:
        pytest.skip("this machine lets no process mount a file system in a namespace of its own")
    script = f'{setup} && exec {sys.executable} -c "$0" "$1"'
    shown = subprocess.run(
        [*command, script, code, str(path)], cwd=ROOT, capture_output=True, text=True, check=False
    )
    assert shown.returncode == 0, shown.stderr
    return shown.stdout.splitlines()


def test_a_full_disk_leaves_the_old_snapshot(tmp_path: Path) -> None:
    """On a tmpfs of 1 MiB the error says so, the old file stays, and a smaller one is saved."""
    path = tmp_path / "state.arrow"
    lines = in_namespace(f"mount -t tmpfs -o size=1m none {tmp_path}", FULL, path)
    error, old, new, files = lines
    assert error.startswith(f"{errno.ENOSPC} {path}: snapshot cannot be written: No space left")
    assert (old, new, files) == ("1", "3", "['state.arrow']")


def test_a_limit_on_file_sizes_leaves_the_old_snapshot(tmp_path: Path) -> None:
    """Where the system stops a file from growing further, the old one stays as well."""
    path = tmp_path / "state.arrow"
    code = (
        "import resource, signal; signal.signal(signal.SIGXFSZ, signal.SIG_IGN); "
        f"resource.setrlimit(resource.RLIMIT_FSIZE, (100_000, 100_000))\n{FULL}"
    )
    shown = subprocess.run(
        [sys.executable, "-c", code, str(path)],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=True,
    )
    error, old, new, files = shown.stdout.splitlines()
    assert error == f"{errno.EFBIG} {path}: snapshot cannot be written: File too large"
    assert (old, new, files) == ("1", "3", "['state.arrow']")


READ_ONLY = """
import sys
from streambasis.errors import SnapshotFileError
from streambasis.snapshot import load, read_state, save
path = sys.argv[1]
basis = load(path)
try:
    save(basis, path)
except SnapshotFileError as error:
    print(error.errno, error)
print(load(path).count)
"""


def test_a_read_only_folder_leaves_the_old_snapshot(tmp_path: Path) -> None:
    """In a folder on a file system mounted read-only, saving says so and loading works."""
    basis = streambasis.StreamBasis(2)
    basis.push([1.0, 2.0])
    path = tmp_path / "state.arrow"
    save(basis, path)
    # permissions alone would not stop root, which tests may run as
    setup = f"mount --bind {tmp_path} {tmp_path} && mount -o remount,bind,ro {tmp_path}"
    error, count = in_namespace(setup, READ_ONLY, path)
    assert error == f"{errno.EROFS} {path}: snapshot cannot be written: Read-only file system"
    assert count == "1"
    assert os.listdir(tmp_path) == ["state.arrow"]


def test_a_path_that_cannot_be_is_refused(tmp_path: Path) -> None:
    """A folder that is missing, and a folder in the file's place, are named."""
    for path in (tmp_path / "none" / "state.arrow", tmp_path):
        with pytest.raises(SnapshotFileError) as caught:
            save(numbered(1), path)
        assert str(path) in str(caught.value)
    assert list(tmp_path.iterdir()) == []


def test_the_first_save_removes_what_others_left(tmp_path: Path) -> None:
    """What a killed process left goes at the first save to the same place, not at each."""
    path = tmp_path / "state.arrow"
    leftover = tmp_path / ".state.arrow.0123456789abcdef.partial"
    leftover.write_bytes(b"half a snapshot")
    save(numbered(1), path)
    assert not leftover.exists()


def test_loading_changes_nothing(tmp_path: Path) -> None:
    """load() leaves file and folder as they are, also when the object is pushed to."""
    basis = streambasis.StreamBasis(400)
    basis.push_many(np.random.default_rng(0).normal(size=(400, 400)))
    path = tmp_path / "state.arrow"
    save(basis, path)
    before = path.read_bytes()
    assert len(before) > 1 << 20
    for verify in (True, False):
        loaded = load(path, verify=verify)
        loaded.push_many(np.random.default_rng(1).normal(size=(5, 400)))
        assert path.read_bytes() == before
    assert os.listdir(tmp_path) == ["state.arrow"]
    assert json.dumps(read_state(path).facts["channels"]).startswith('["0"')
