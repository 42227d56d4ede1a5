"""Snapshots: one Arrow file that holds all of an object, readable by any Arrow implementation.

What the file looks like is written in :mod:`streambasis.layout`, how it proves that it is whole in
:mod:`streambasis.seal`, how it takes the place of an older one in :mod:`streambasis.files`.
"""

from __future__ import annotations

import errno
import importlib
import io
import mmap
import os
import stat
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

import numpy as np
from numpy.typing import NDArray

from streambasis.audit import LEAST_DIMENSION, ORTHOGONALITY_LIMIT, orthogonality, unit_roundoff
from streambasis.errors import SnapshotError, SnapshotFileError, SnapshotMissingError
from streambasis.files import OWNER_ONLY, Outflow, remove_leftovers, replace_file
from streambasis.layout import parsed_outline, read_arrow, write_arrow
from streambasis.seal import (
    FORMAT,
    VERSION,
    Digest,
    Flaw,
    check_digest,
    find_seal,
    read_seal,
    regions,
)
from streambasis.state import Lender, State, Stateful

KINDS = ("StreamBasis", "PrincipalBasis", "NoveltyMonitor")
"""What :func:`load` builds; the class of a kind is the public name of the package."""

READ_WHOLE = 1 << 20
"""A smaller file is read, a larger one mapped into memory."""

LENT = 1 << 26
"""Bytes from which an object is written where it lies: for less, pushes that wait for the disk
would cost more than the copy."""

EXACT_CHECK = 1 << 27
"""Up to this many products the directions are checked one against the other."""

PROBES = 4

# what building an object from facts and arrays that contradict each other may run into
_MISFIT = (LookupError, TypeError, ValueError, AttributeError, ArithmeticError, MemoryError)
_cleaned: set[str] = set()
_cleaning = threading.Lock()


def save(obj: Stateful | State, path: str | os.PathLike[str], *, mode: int = OWNER_ONLY) -> None:
    """Write a snapshot of an object to a file.

    Parameters
    ----------
    obj : StreamBasis, PrincipalBasis, NoveltyMonitor or State
        What to save. Of an object of less than 64 MiB a copy is written, so that other threads
        may push to it meanwhile; a larger one is written where it lies, and pushes wait.
    path : path
        The file, new or to be replaced.
    mode : int
        Permissions of the file; by default its owner alone may read it.

    Raises
    ------
    SnapshotFileError
        If the file cannot be written, such as on a full disk; also an OSError, with its ``errno``.
        An older file at that place is untouched.
    TypeError
        If the object is none that can be saved.

    Notes
    -----
    A crash at any moment leaves the old file or the new one, whole. The first save to a path in a
    process also removes what killed processes left behind there. Costs hashing and writing the
    state once.

    Examples
    --------
    >>> import os, tempfile, streambasis
    >>> basis = streambasis.StreamBasis(["inlet", "outlet"])
    >>> decision = basis.push([3.0, 4.0])
    >>> path = os.path.join(tempfile.mkdtemp(), "state.arrow")
    >>> streambasis.save(basis, path)
    >>> streambasis.load(path).vectors
    array([[0.6, 0.8]])
    """

    def write(descriptor: int) -> None:
        with Digest() as digest:
            sink = _Sink(digest, Outflow(descriptor).write)
            write_arrow(state, sink)
            head, tail = os.pread(descriptor, 16, 0), os.pread(descriptor, 10, sink.size - 10)
            places = regions(head, tail, sink.size)
            schema, footer = (os.pread(descriptor, p.stop - p.start, p.start) for p in places)
            seal = find_seal(schema, footer, places)
            if digest.at_work:
                # the disk works while the processor still hashes
                os.fsync(descriptor)
            text = digest.text()
            for position in (seal.first, seal.second):
                os.pwrite(descriptor, text, position)

    try:
        with _state_of(obj) as state:
            _clean_once(path)
            replace_file(path, write, mode=mode)
    except OSError as error:
        raise _file_error(path, "cannot be written", error) from error


def load(path: str | os.PathLike[str], *, verify: bool = True) -> Any:
    """Build the object that a snapshot was taken of, to go on exactly where it was.

    Parameters
    ----------
    path : path
        The file.
    verify : bool
        Whether the digest and the directions are checked; without, a large file is not even read
        before it is used. Only for a file that one has just written oneself.

    Returns
    -------
    StreamBasis, PrincipalBasis or NoveltyMonitor
        Where the file holds more, such as how far a feed was read, the one object in it.

    Raises
    ------
    SnapshotError
        If it is no snapshot, not a whole one, changed by as much as a byte, of a later format,
        or inconsistent in itself; the message names the file and what is wrong.
    SnapshotFileError
        If the file is missing (then also a FileNotFoundError) or cannot be read.

    Notes
    -----
    A file of more than 1 MiB is mapped into memory and its pages are copied by the system when
    they are first changed: replace such a file, as :func:`save` does, but never write into it.
    Costs reading and hashing the file once, and reading the directions twice.
    """
    return _built(read_state(path, verify=verify), os.fspath(path))


def to_bytes(obj: Stateful | State) -> bytes:
    """Return a snapshot of an object as bytes: what :func:`save` writes to a file.

    Parameters
    ----------
    obj : StreamBasis, PrincipalBasis, NoveltyMonitor or State

    Raises
    ------
    TypeError
        If the object is none that can be saved.
    """
    memory = io.BytesIO()
    with Digest() as digest, _state_of(obj) as state:
        write_arrow(state, _Sink(digest, memory.write))
        text = digest.text()
        with memory.getbuffer() as content:
            seal = read_seal(content)
            for position in (seal.first, seal.second):
                content[position : position + 64] = text
    return memory.getvalue()


def from_bytes(data: bytes | bytearray | memoryview, *, verify: bool = True) -> Any:
    """Build an object from the bytes of a snapshot; raises as :func:`load`.

    Parameters
    ----------
    data : bytes-like
        What :func:`to_bytes` returned; it is copied from and may be reused afterwards.
    verify : bool
        As for :func:`load`.
    """
    return _built(state_from_bytes(data, verify=verify), "snapshot")


def read_state(path: str | os.PathLike[str], *, verify: bool = True) -> State:
    """Return what a snapshot holds as a plain state, of whatever kind; raises as :func:`load`."""
    try:
        memory = _memory(path)
    except OSError as error:
        raise _file_error(path, "cannot be read", error) from error
    return _read(memory, os.fspath(path), verify, given=True)


def read_outline(path: str | os.PathLike[str]) -> dict[str, Any]:
    """Return what a snapshot says of itself, unverified and without reading its arrays.

    Parameters
    ----------
    path : path
        The file.

    Returns
    -------
    dict
        ``format``, ``digest``, ``written_by``, and what the metadata holds: ``kind``, ``facts``
        as JSON, ``arrays`` and ``parts``.

    Raises
    ------
    SnapshotError
        If it has no such metadata.
    """
    try:
        memory = _memory(path)
    except OSError as error:
        raise _file_error(path, "cannot be read", error) from error
    try:
        seal = read_seal(memory)
        outline, written_by = parsed_outline(memory)
    except Flaw as flaw:
        raise SnapshotError(f"{os.fspath(path)}: {flaw}") from flaw
    digest = f"sha256:{seal.digest.decode()}"
    return {"format": f"{FORMAT} {VERSION}", "digest": digest, "written_by": written_by, **outline}


def state_from_bytes(data: bytes | bytearray | memoryview, *, verify: bool = True) -> State:
    """Return the state in the bytes of a snapshot; its arrays are views of them."""
    memory = memoryview(data).cast("B")
    if memory.nbytes and np.frombuffer(memory, np.uint8).ctypes.data % 8:
        memory = memoryview(bytes(memory))
    return _read(memory, "snapshot", verify, given=False)


class _Sink:
    """Passes on the bytes of a file in their order, and hands them to the digest."""

    def __init__(self, digest: Digest, put: Callable[[memoryview], Any]) -> None:
        self._digest, self._put = digest, put
        self.size = 0
        self.closed = False

    def write(self, data: Any) -> int:
        """Take the next bytes."""
        view = memoryview(data).cast("B")
        self._digest.update(view)
        self._put(view)
        self.size += view.nbytes
        return view.nbytes

    def flush(self) -> None:
        """Do nothing: whoever owns the file forces it to the disk."""


@contextmanager
def _state_of(obj: Stateful | State) -> Iterator[State]:
    if isinstance(obj, State):
        yield obj
    elif isinstance(obj, Lender) and obj.nbytes >= LENT:
        with obj.lent_state() as state:
            yield state
    elif isinstance(obj, Stateful):
        yield obj.to_state()
    else:
        raise TypeError(f"{type(obj).__name__} has no state to save: {', '.join(KINDS)} have")


def _clean_once(path: str | os.PathLike[str]) -> None:
    target = os.path.realpath(path)
    with _cleaning:
        if target in _cleaned:
            return
        _cleaned.add(target)
    remove_leftovers(target)


def _file_error(path: str | os.PathLike[str], what: str, error: OSError) -> SnapshotFileError:
    kind = SnapshotMissingError if error.errno == errno.ENOENT else SnapshotFileError
    reason = error.strerror or str(error)
    return kind(error.errno, f"snapshot {what}: {reason}", os.fspath(path))


def _memory(path: str | os.PathLike[str]) -> memoryview:
    """Return the bytes of a file: private, writable, and read only as far as they are used."""
    # a pipe that nobody writes to would block the opening
    descriptor = os.open(path, os.O_RDONLY | os.O_CLOEXEC | os.O_NONBLOCK)
    try:
        status = os.fstat(descriptor)
        if not stat.S_ISREG(status.st_mode):
            raise OSError(errno.EINVAL, "not a regular file")
        if status.st_size >= READ_WHOLE:
            return memoryview(mmap.mmap(descriptor, 0, access=mmap.ACCESS_COPY))
        content = bytearray(status.st_size)
        with open(descriptor, "rb", closefd=False) as file:
            length = file.readinto(content)
        return memoryview(content)[:length]
    finally:
        os.close(descriptor)


def _read(memory: memoryview, name: str, verify: bool, *, given: bool) -> State:
    try:
        seal = read_seal(memory)
        if verify:
            check_digest(memory, seal)
        state = read_arrow(memory)
        for part in _all_parts(state):
            part.given = given
            if verify and "vectors" in part.arrays:
                _check_directions(part.arrays["vectors"])
    except Flaw as flaw:
        raise SnapshotError(f"{name}: {flaw}") from flaw
    return state


def _all_parts(state: State) -> Iterator[State]:
    yield state
    for part in state.parts.values():
        yield from _all_parts(part)


def _check_directions(vectors: NDArray[Any]) -> None:
    """Refuse directions that are not finite or not orthonormal.

    Notes
    -----
    A small basis is checked in full, as an audit does. A large one is checked at the speed of
    reading it twice: for E = V Vᴴ - I and a vector x of random signs the expectation of |E x|² is
    |E|_F² (Hutchinson 1990, Communications in Statistics 19:433), and |E x| <= sqrt(k)·|E|₁ for
    every x, so a basis within its contract is never refused.
    """
    if vectors.ndim != 2 or vectors.dtype.kind not in "fc" or vectors.shape[0] > vectors.shape[1]:
        raise Flaw(f"its directions have the shape {vectors.shape} and type {vectors.dtype}")
    rows, channels = vectors.shape
    with np.errstate(all="ignore"):
        if rows * rows * channels <= EXACT_CHECK:
            ratio = orthogonality(vectors)
        else:
            signs = np.random.default_rng(0).choice([-1.0, 1.0], (PROBES, rows))
            signs = signs.astype(vectors.dtype)
            there = signs @ vectors
            back = there.conj() @ vectors.T if vectors.dtype.kind == "c" else there @ vectors.T
            back = back.conj() - signs
            loss = float(np.sqrt((np.abs(back) ** 2).sum(axis=1).max()))
            unit = max(channels, LEAST_DIMENSION) * unit_roundoff(vectors.dtype)
            ratio = loss / (np.sqrt(rows) * unit)
    if not np.isfinite(ratio):
        raise Flaw("its directions are not finite")
    if ratio >= ORTHOGONALITY_LIMIT:
        raise Flaw(
            f"its directions are not orthonormal: the loss is {ratio:.3g} where "
            f"{ORTHOGONALITY_LIMIT:g} is the limit"
        )


def _built(state: State, name: str) -> Any:
    if state.kind not in KINDS:
        held = [part for part in state.parts.values() if part.kind in KINDS]
        if len(held) != 1:
            raise SnapshotError(f"{name}: it holds the state of a {state.kind!r}, not of an object")
        state = held[0]
    kind = getattr(importlib.import_module("streambasis"), state.kind)
    try:
        return kind.from_state(state)
    except _MISFIT as error:
        raise SnapshotError(
            f"{name}: its parts do not make up a {state.kind} ({type(error).__name__}: {error})"
        ) from error
