"""Where feeds that are not live lie on disk: many snapshots to a file, written one after another.

A snapshot never changes once it is written. A feed that has gone on since is written again, further
on, and the place of the old one is free when nothing needs it any more; a file of which most is
free goes once what is left in it has been written again as well.
"""

from __future__ import annotations

import contextlib
import os
import re
import threading
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import NamedTuple

from streambasis.files import OWNER_ONLY, sync_folder

FILE_BYTES = 1 << 28
"""Length at which the next file is begun."""

LEAST_USED = 0.5
"""A full file of which less than this part is needed is written again: so the files never take
more than twice what is needed, and a snapshot is copied at most as often as it was replaced."""

ALIGNED = 64
"""Snapshots start at multiples of this many bytes, as the arrays inside them do."""

_NAME = re.compile(r"(\d{10})\.snapshots")
_CREATE = os.O_RDWR | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC


class Place(NamedTuple):
    """Where a snapshot lies: number of the file, first byte, bytes."""

    file: int
    start: int
    length: int


class Parking:
    """The files that hold snapshots of feeds.

    Parameters
    ----------
    folder : Path
        Made where it does not exist. Nobody else writes there.
    kept : iterable of Place
        What an earlier process left that is still needed; files without any of these are removed.

    Notes
    -----
    :meth:`put` and :meth:`get` may be called by several threads at a time. Nothing is forced to
    the disk before :meth:`sync`.
    """

    def __init__(self, folder: Path, kept: Iterable[Place] = ()) -> None:
        self._folder = folder
        folder.mkdir(parents=True, exist_ok=True)
        self._lock = threading.Lock()
        self._descriptors: dict[int, int] = {}
        needed = {place.file for place in kept}
        found = _numbers(folder)
        for number, path in found.items():
            if number in needed:
                self._descriptors[number] = os.open(path, os.O_RDONLY | os.O_CLOEXEC)
            else:
                os.unlink(path)
        self._newest = max(found, default=0)
        self._length = FILE_BYTES
        self._unsynced: set[int] = set()
        self._new_names = self._begun = False

    @property
    def begun(self) -> bool:
        """Whether a file has been begun since :meth:`keep` looked last."""
        return self._begun

    @property
    def nbytes(self) -> int:
        """Bytes of the files."""
        with self._lock:
            return sum(os.fstat(descriptor).st_size for descriptor in self._descriptors.values())

    def put(self, snapshot: bytes) -> Place:
        """Write a snapshot and return where.

        Raises
        ------
        OSError
            If it cannot be written; what was written before is untouched.
        """
        with self._lock:
            if self._length >= FILE_BYTES:
                self._begin()
            place = Place(self._newest, self._length, len(snapshot))
            self._length += -(-len(snapshot) // ALIGNED) * ALIGNED
            self._unsynced.add(place.file)
            descriptor = self._descriptors[place.file]
        done = 0
        while done < len(snapshot):
            done += os.pwrite(descriptor, memoryview(snapshot)[done:], place.start + done)
        return place

    def get(self, place: Place) -> bytes:
        """Return a snapshot, or as much of it as is there."""
        return os.pread(self._descriptors[place.file], place.length, place.start)

    def sync(self) -> None:
        """Force everything put so far to the disk.

        Raises
        ------
        OSError
            If that fails. What was put since the last time must then be put again: the files in
            question are not written to any more, and forcing them again would prove nothing.
        """
        with self._lock:
            waiting, self._unsynced = self._unsynced, set()
            try:
                for number in sorted(waiting):
                    os.fsync(self._descriptors[number])
                if self._new_names:
                    sync_folder(self._folder)
                    self._new_names = False
            except BaseException:
                self._length = FILE_BYTES
                raise

    def keep(self, needed: Iterable[Place]) -> set[int]:
        """Remove the files of which nothing is needed; return those of which little is.

        Parameters
        ----------
        needed : iterable of Place
            Every snapshot that somebody may still ask for, or that a commit counts on.

        Returns
        -------
        set of int
            Files whose snapshots should be put again, so that the next call can remove them.
        """
        used: dict[int, int] = {}
        for place in needed:
            used[place.file] = used.get(place.file, 0) + place.length
        little = set()
        with self._lock:
            self._begun = False
            for number in list(self._descriptors):
                if number not in used and number != self._newest:
                    os.close(self._descriptors.pop(number))
                    # where this fails, the leftover is removed at the next start
                    with contextlib.suppress(OSError):
                        os.unlink(self._folder / _name(number))
                elif number != self._newest:
                    size = os.fstat(self._descriptors[number]).st_size
                    if used[number] < LEAST_USED * size:
                        little.add(number)
        return little

    def close(self) -> None:
        """Let go of the files."""
        with self._lock:
            descriptors, self._descriptors = self._descriptors, {}
            with contextlib.ExitStack() as closing:
                for descriptor in descriptors.values():
                    closing.callback(os.close, descriptor)

    def _begin(self) -> None:
        number = self._newest + 1
        self._descriptors[number] = os.open(self._folder / _name(number), _CREATE, OWNER_ONLY)
        self._newest, self._length = number, 0
        self._new_names = self._begun = True


def _name(number: int) -> str:
    return f"{number:010d}.snapshots"


def _numbers(folder: Path) -> dict[int, str]:
    def found() -> Iterator[tuple[int, str]]:
        with os.scandir(folder) as entries:
            for entry in entries:
                match = _NAME.fullmatch(entry.name)
                if match:
                    yield int(match[1]), entry.path

    return dict(found())
