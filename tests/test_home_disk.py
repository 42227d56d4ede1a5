"""A disk that takes nothing for a while: scoring goes on, and nothing is lost or written twice."""

from __future__ import annotations

import hashlib
import json
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from faults import OPERATIONS, Faults
from runs import FILE_ROWS, Watched, results, write_feed

from streambasis.errors import HomeError
from streambasis.snapshot import load
from streambasis.watch import keeping as keeping_module

ROOT = Path(__file__).parent.parent
ROWS = 24_000
FULL_FROM, FULL_TO = 8_000, 16_000


@pytest.fixture(scope="module")
def feed(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a feed in which some rows are no samples."""
    return write_feed(tmp_path_factory.mktemp("feed") / "feed.csv", ROWS, torn=400)


@pytest.fixture(scope="module")
def straight(feed: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, bytes]:
    """Return the results of a run whose disk takes everything."""
    folder = tmp_path_factory.mktemp("straight") / "home"
    Watched(feed, folder)()
    found = results(folder)
    assert len(found) == ROWS // FILE_ROWS + 3
    assert min(found[name].count(b"\n") for name in ("events.jsonl", "malformed.jsonl")) > 5
    return found


SCRIPT = """
import hashlib, json, os, resource, sys, threading, time
from pathlib import Path

sys.path.insert(0, "tests")
from runs import Watched, results
from streambasis.watch import keeping

feed, folder, kind, most, first, last = *map(Path, sys.argv[1:3]), *json.loads(sys.argv[3])
keeping.RETRY_SECONDS, keeping.MOST_FILES = 0.02, most
ballast = folder.parent / "ballast"
limits = resource.getrlimit(resource.RLIMIT_FSIZE)
meanwhile, full = [], False


def fill():
    if kind == "limit":
        resource.setrlimit(resource.RLIMIT_FSIZE, (1000, limits[1]))
        return
    with ballast.open("wb", buffering=0) as file:
        try:
            while True:
                file.write(bytes(4096))
        except OSError:
            pass


def make_room():
    global full
    full = False
    if kind == "limit":
        resource.setrlimit(resource.RLIMIT_FSIZE, limits)
    else:
        ballast.unlink()


def after(samples):
    global full
    if not full and samples >= first and not meanwhile:
        fill()
        full = True
        if last is None:
            # the run will stand still: somebody else has to make room
            threading.Timer(1.0, make_room).start()
    if full:
        meanwhile.append(samples)
    if full and last is not None and samples >= last and watched.vitals.unkept:
        make_room()


if first == 0:
    # full before the process starts that goes on with the run
    early = Watched(feed, folder, lambda samples: early.asked.set())
    early()
    fill()
    full = True
watched = Watched(feed, folder, after)
watched()
found = {name: hashlib.sha256(data).hexdigest() for name, data in results(folder).items()}
print(json.dumps([found, meanwhile, watched.vitals.unkept, watched.ear.warnings]))
"""


def run_on(
    kind: str,
    feed: Path,
    folder: Path,
    *,
    most: int = 16,
    first: int = FULL_FROM,
    last: int | None = FULL_TO,
) -> tuple[dict[str, str], list[int], str | None, list[str]]:
    """Run in a process whose disk takes nothing for a while.

    Parameters
    ----------
    kind : {"tmpfs", "limit"}
        A small file system that is filled up, or a limit on the size of files.
    most : int
        Files of decisions that may wait in memory.
    first : int
        Number of samples after which the disk takes nothing; 0 is before the process starts.
    last : int or None
        Number of samples after which there is room again; None is after a second.

    Returns
    -------
    results : dict of str to str
        Digest of each file.
    meanwhile : list of int
        Numbers of samples taken while the disk took nothing.
    unkept : str or None
        What the readings say of the disk at the end.
    warnings : list of str
        What was said.
    """
    given = json.dumps([kind, most, first, last])
    command = [sys.executable, "-c", SCRIPT, str(feed), str(folder), given]
    if kind == "tmpfs":
        namespace = ["unshare", "--user", "--map-root-user", "--mount", "sh", "-c"]
        if shutil.which("unshare") is None or subprocess.run([*namespace, "true"]).returncode:
            pytest.skip(
                "this machine lets no process mount a file system in a namespace of its own"
            )
        mount = f'mount -t tmpfs -o size=8m none {folder.parent} && exec "$@"'
        command = [*namespace, mount, "sh", *command]
    shown = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=False)
    assert shown.returncode == 0, shown.stderr
    results, meanwhile, unkept, warnings = json.loads(shown.stdout)
    return results, meanwhile, unkept, warnings


def digests(found: dict[str, bytes]) -> dict[str, str]:
    """Return the digest of each file."""
    return {name: hashlib.sha256(data).hexdigest() for name, data in found.items()}


@pytest.mark.parametrize(
    ("kind", "reason"), [("tmpfs", "No space left"), ("limit", "File too large")]
)
def test_a_full_disk_stops_no_scoring_and_loses_nothing(
    feed: Path, straight: dict[str, bytes], tmp_path: Path, kind: str, reason: str
) -> None:
    """All through the trouble samples are taken; it is said once, and the files are the same."""
    (tmp_path / "disk").mkdir()
    found, meanwhile, unkept, warnings = run_on(kind, feed, tmp_path / "disk" / "home")
    assert found == digests(straight)
    assert max(meanwhile) - min(meanwhile) > (FULL_TO - FULL_FROM) // 2
    assert unkept is None
    trouble, relief = (warning for warning in warnings if "home: " in warning)
    assert reason in trouble
    assert "scoring goes on" in trouble
    assert "written again" in relief


def test_a_run_goes_on_though_the_disk_is_full_when_it_starts(
    feed: Path, straight: dict[str, bytes], tmp_path: Path
) -> None:
    """A restart during the trouble scores on as well, and keeps all of it in the end."""
    (tmp_path / "disk").mkdir()
    found, meanwhile, unkept, _ = run_on("tmpfs", feed, tmp_path / "disk" / "home", first=0)
    assert found == digests(straight)
    assert min(meanwhile) < FULL_FROM < FULL_TO <= max(meanwhile)
    assert unkept is None


def test_what_waits_for_a_full_disk_is_bounded(
    feed: Path, straight: dict[str, bytes], tmp_path: Path
) -> None:
    """With two files in memory no more samples are taken until there is room."""
    (tmp_path / "disk").mkdir()
    found, meanwhile, _, _ = run_on("limit", feed, tmp_path / "disk" / "home", most=2, last=None)
    assert found == digests(straight)
    assert FULL_FROM < max(meanwhile) <= FULL_FROM + 3 * FILE_ROWS + 2 * 1024


@pytest.mark.parametrize("operation", [name for name in OPERATIONS if name != "unlink"])
def test_an_operation_that_fails_is_made_good(
    feed: Path,
    straight: dict[str, bytes],
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    operation: str,
) -> None:
    """Whichever operation of the system fails in the middle of a run, the results are the same."""
    monkeypatch.setattr(keeping_module, "RETRY_SECONDS", 0.0)
    folder = tmp_path / "home"
    with pytest.MonkeyPatch.context() as patch:
        disturbance = Disturbance(patch, operation)
        watched = Watched(feed, folder, disturbance)
        try:
            watched()
        except HomeError:
            # the very last commit, for which nobody waits any longer
            patch.undo()
            Watched(feed, folder)()
    assert disturbance.faults is not None
    assert disturbance.faults.met
    assert results(folder) == straight


class Disturbance:
    """Makes one operation of the system fail, the second of its name from the middle of a run."""

    def __init__(self, patch: pytest.MonkeyPatch, operation: str) -> None:
        self._patch, self._operation = patch, operation
        self.faults: Faults | None = None

    def __call__(self, samples: int) -> None:
        """Begin to count."""
        if self.faults is None and samples >= FULL_FROM:
            self.faults = Faults(self._patch, 2, forever=False, only=self._operation)


def test_a_run_whose_disk_stays_full_ends_with_what_was_committed(
    feed: Path, straight: dict[str, bytes], tmp_path: Path
) -> None:
    """At the end of the feed the error is raised; once there is room the run goes on from there."""
    folder = tmp_path / "home"
    with pytest.MonkeyPatch.context() as patch:

        def after(samples: int) -> None:
            if samples == FULL_FROM // 1024 * 1024:
                Faults(patch, 1, forever=True)

        with pytest.raises(HomeError, match="cannot be written"):
            Watched(feed, folder, after)()
    assert 0 < load(folder / "state.arrow").count <= FULL_FROM
    Watched(feed, folder)()
    assert results(folder) == straight
