"""The folder of a fleet: one file says which snapshots count, and replacing it is the commit."""

from __future__ import annotations

import os
import shutil
import tempfile
import weakref
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from streambasis.errors import HomeError, SnapshotError, SnapshotFileError
from streambasis.files import lock_folder, remove_leftovers
from streambasis.fleet.parking import Parking, Place
from streambasis.fleet.rows import Key
from streambasis.snapshot import read_state, save
from streambasis.state import State

INDEX = "fleet.arrow"
FEEDS = "feeds"
KIND = "Fleet"
"""What ``fleet.arrow`` says it holds."""


@dataclass(slots=True)
class Committed:
    """What a commit says.

    Attributes
    ----------
    about : dict
        What the fleet is of: the key column and the settings of its monitors.
    places : dict of key to Place
        The snapshot of each feed, feeds in the order in which they appeared.
    learning : dict of key to int
        Samples that incomplete baselines wait for.
    position : object
        What whoever committed gave for it: JSON things.
    parts : dict of str to State
        What else was committed with it.
    """

    about: dict[str, Any]
    places: dict[Key, Place] = field(default_factory=dict)
    learning: dict[Key, int] = field(default_factory=dict)
    position: Any = None
    parts: dict[str, State] = field(default_factory=dict)


def kept_position(path: Path) -> Any:
    """Return the position of the last commit in a folder, None where there is none.

    Raises
    ------
    HomeError
        If the folder holds something else.
    """
    return _committed(path / INDEX).position if (path / INDEX).exists() else None


def _committed(path: Path) -> Committed:
    try:
        state = read_state(path)
        if state.kind != KIND:
            raise HomeError(f"{path}: holds a {state.kind}, not a fleet")
        keys = state.facts["keys"]
        table = state.take("places", np.int64, (len(keys), 3)).tolist()
        left = state.take("learning", np.int64, (len(keys),)).tolist()
    except SnapshotError as error:
        raise HomeError(f"{error}; the fleet cannot go on from it") from error
    return Committed(
        state.facts["about"],
        {key: Place(*row) for key, row in zip(keys, table, strict=True)},
        {key: count for key, count in zip(keys, left, strict=True) if count},
        state.facts["position"],
        state.parts,
    )


class Folder:
    """The files of a fleet.

    Parameters
    ----------
    path : Path or None
        The folder; None takes a temporary one, which goes with the process.

    Attributes
    ----------
    committed : Committed or None
        What was committed last; None in a new folder.
    parking : Parking
        Where the snapshots are.

    Raises
    ------
    HomeError
        If another process uses it, it cannot be written, or what it holds cannot be gone on from.
    """

    def __init__(self, path: Path | None) -> None:
        self.temporary = path is None
        self.committed: Committed | None = None
        if path is None:
            path = Path(tempfile.mkdtemp(prefix="streambasis-fleet-"))
            self._removal = weakref.finalize(self, shutil.rmtree, path, ignore_errors=True)
        self.path = path
        try:
            path.mkdir(parents=True, exist_ok=True)
            self._lock = lock_folder(path, "home")
            try:
                remove_leftovers(path)
                if (path / INDEX).exists():
                    self.committed = _committed(path / INDEX)
                elif (path / FEEDS).exists() and any((path / FEEDS).iterdir()):
                    raise HomeError(
                        f"{path}: holds feeds without the {INDEX} that says which of them count; "
                        "choose an empty folder"
                    )
                kept = self.committed.places.values() if self.committed else ()
                self.parking = Parking(path / FEEDS, kept)
            except BaseException:
                os.close(self._lock)
                raise
        except OSError as error:
            raise self.named(error) from None

    def commit(self, committed: Committed) -> None:
        """Make the snapshots that these places name, and everything else in it, what counts.

        Raises
        ------
        OSError, SnapshotFileError
            If the disk does not take it; the last commit still stands.
        """
        keys = list(committed.places)
        places = np.array(list(committed.places.values()), np.int64).reshape(len(keys), 3)
        left = np.array([committed.learning.get(key, 0) for key in keys], np.int64)
        facts = {"about": committed.about, "keys": keys, "position": committed.position}
        state = State(KIND, facts, {"places": places, "learning": left}, committed.parts)
        save(state, self.path / INDEX)
        self.committed = committed

    def check(self, about: Mapping[str, Any]) -> None:
        """Refuse a folder that holds a fleet of something else.

        Raises
        ------
        HomeError
            Which names what differs.
        """
        if self.committed is None:
            return
        before = self.committed.about
        for name, value in about.items():
            if before.get(name) != value:
                raise HomeError(
                    f"{self.path}: holds a fleet with {name} = {before.get(name)!r}, not "
                    f"{value!r}; give the same again, or choose another folder"
                )

    def needed(self, current: Iterable[Place]) -> Iterable[Place]:
        """Return the places that are in use now or that the last commit counts on."""
        before = self.committed.places.values() if self.committed else ()
        return {*before, *current}

    def named(self, error: OSError) -> HomeError:
        """Return an error of the system as one that names the folder."""
        if isinstance(error, HomeError):
            return error
        if isinstance(error, SnapshotFileError):
            return HomeError(f"{error}")
        return HomeError(f"{self.path}: cannot be written ({error.strerror or error})")

    def close(self) -> None:
        """Let go of the folder; a temporary one is removed."""
        self.parking.close()
        os.close(self._lock)
        if self.temporary:
            self._removal()
