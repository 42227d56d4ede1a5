"""A shim under the calls of the system that replacing a file needs: it fails them, or cuts power.

After the way in which SQLite tests itself ("How SQLite is tested", sections on I/O errors and
crashes): fail the first operation, then the second, and so on until the work is done without
meeting the fault.
"""

from __future__ import annotations

import errno
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

OPERATIONS = ("open", "write", "pwrite", "fchmod", "fsync", "replace", "unlink", "close")


class PowerCut(BaseException):
    """The machine is gone: nothing of the process goes on."""


class Faults:
    """Counts the operations and fails from the ``at``-th on.

    Parameters
    ----------
    monkeypatch : pytest.MonkeyPatch
    at : int
        Which operation fails first, from 1.
    forever : bool
        Whether all later ones fail as well.
    error : callable
        Makes the exception; a function of nothing.
    only : str, optional
        Count and fail nothing but operations of this name.
    """

    def __init__(
        self,
        monkeypatch: pytest.MonkeyPatch,
        at: int,
        *,
        forever: bool,
        error: Callable[[], BaseException] = lambda: OSError(errno.EIO, "Input/output error"),
        only: str | None = None,
    ) -> None:
        self.at, self.forever, self.error = at, forever, error
        self.count = 0
        self.met = False
        self.history: list[str] = []
        for name in OPERATIONS if only is None else (only,):
            monkeypatch.setattr(os, name, self._wrapped(name, getattr(os, name)))

    def _wrapped(self, name: str, real: Callable[..., Any]) -> Callable[..., Any]:
        def operation(*arguments: Any, **named: Any) -> Any:
            self.count += 1
            self.history.append(name)
            if self.count == self.at or (self.forever and self.count > self.at):
                self.met = True
                if name == "close":
                    real(*arguments, **named)  # a descriptor is gone even where closing fails
                raise self.error()
            return real(*arguments, **named)

        return operation


class Disk:
    """What a power cut would leave: only what was forced to the disk.

    Follows the calls and keeps, for each file, the bytes at its last fsync; a rename may reach the
    disk at any time after it was made, an fsync of the folder says that it has.
    """

    def __init__(self, monkeypatch: pytest.MonkeyPatch, target: Path) -> None:
        self.target = target
        self.forced: dict[int, bytes] = {}
        self.names = {target.stat().st_ino}
        if target.exists():
            self.forced[target.stat().st_ino] = target.read_bytes()
        fsync, replace = os.fsync, os.replace

        def forcing(descriptor: int) -> None:
            fsync(descriptor)
            status = os.fstat(descriptor)
            if os.path.isdir(f"/proc/self/fd/{descriptor}"):
                self.names = {target.stat().st_ino}
            else:
                self.forced[status.st_ino] = os.pread(descriptor, status.st_size, 0)

        def renaming(source: str, destination: str) -> None:
            replace(source, destination)
            self.names.add(target.stat().st_ino)

        monkeypatch.setattr(os, "fsync", forcing)
        monkeypatch.setattr(os, "replace", renaming)

    def after_a_cut(self) -> list[bytes]:
        """Return every content that the target may have after a power cut now."""
        return [self.forced.get(inode, b"") for inode in self.names]
