"""The digest that a snapshot carries inside itself, and how it is found and checked.

The schema metadata of an Arrow file is written twice, in the first message and in the footer. Both
copies hold one line of text, the seal::

    streambasis-snapshot 1 sha256:0123...cdef

with the version of the format and the digest of *the whole file*, taken while both digests read as
64 zeros. So every byte counts, padding and footer included. The file is cut into blocks of 4 MiB
(the last one shorter), and the digest is the SHA-256 of the SHA-256 digests of the blocks, one
after another, 32 bytes each: so that the processor's cores can share the work.

The seal is found by searching the raw bytes of those two places, before any of the file is
interpreted; that it is the only match there is the writer's duty
(:func:`streambasis.layout.outline_text`).
"""

from __future__ import annotations

import hashlib
import os
import re
from concurrent.futures import Future, ThreadPoolExecutor
from typing import NamedTuple, Self

FORMAT = "streambasis-snapshot"
VERSION = 1
LARGEST_METADATA = 1 << 26
"""No schema, with all its metadata, is larger than this many bytes (64 MiB)."""

BLOCK = 1 << 22
"""Bytes of the file that are hashed together."""

MOST_THREADS = 4
ZEROS = b"0" * 64
_START = b"ARROW1\0\0"
_END = b"ARROW1"
_CONTINUATION = b"\xff\xff\xff\xff"
_SEAL = re.compile(rb"%s (\d{1,9}) sha256:([0-9a-f]{64})" % FORMAT.encode())
_VERSION = re.compile(rb"%s (\d{1,9})\b" % FORMAT.encode())


class Flaw(Exception):
    """What is wrong with a snapshot; whoever knows the file's name adds it."""


class Seal(NamedTuple):
    """The digest of a snapshot, as text, and the two positions where it stands."""

    digest: bytes
    first: int
    second: int


class Digest:
    """The digest of bytes that come in pieces, computed beside whatever the caller goes on with.

    The pieces are kept until they are hashed and must not change. Threads start with the second
    block.
    """

    def __init__(self) -> None:
        self._blocks: list[Future[bytes]] = []
        self._pieces: list[memoryview] = []
        self._room = BLOCK
        self._pool: ThreadPoolExecutor | None = None

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *error: object) -> None:
        if self._pool is not None:
            self._pool.shutdown(cancel_futures=True)

    @property
    def at_work(self) -> bool:
        """Whether threads may still be hashing."""
        return self._pool is not None

    def update(self, data: memoryview) -> None:
        """Take the next bytes."""
        while data.nbytes:
            if not self._room:
                self._hash_block()
            piece = data[: self._room]
            self._pieces.append(piece)
            self._room -= piece.nbytes
            data = data[piece.nbytes :]

    def text(self) -> bytes:
        """Return the digest of all bytes, as 64 hexadecimal digits."""
        last = _hashed(self._pieces)
        return (
            hashlib.sha256(b"".join([f.result() for f in self._blocks] + [last]))
            .hexdigest()
            .encode()
        )

    def _hash_block(self) -> None:
        if self._pool is None:
            self._pool = ThreadPoolExecutor(min(MOST_THREADS, os.cpu_count() or 1))
        self._blocks.append(self._pool.submit(_hashed, self._pieces))
        self._pieces, self._room = [], BLOCK


def _hashed(pieces: list[memoryview]) -> bytes:
    content = hashlib.sha256()
    for piece in pieces:
        content.update(piece)
    return content.digest()


def seal_text(digest: bytes = ZEROS) -> str:
    """Return the line that carries a digest."""
    return f"{FORMAT} {VERSION} sha256:{digest.decode()}"


def regions(head: bytes, tail: bytes, size: int) -> tuple[slice, slice]:
    """Return where the schema message and the footer of an Arrow file lie.

    Parameters
    ----------
    head : bytes
        The first 16 bytes of the file.
    tail : bytes
        Its last 10 bytes.
    size : int
        Its length in bytes.

    Raises
    ------
    Flaw
        If this is no Arrow file, or not all of one.
    """
    if size == 0:
        raise Flaw("the file is empty")
    if head[:8] != _START[: min(size, 8)]:
        raise Flaw("it is not an Arrow file")
    if size < 16 + 10 or tail[4:] != _END:
        raise Flaw("it is cut short, or its end was changed: the Arrow footer is missing")
    schema = int.from_bytes(head[12:16], "little")
    footer = int.from_bytes(tail[:4], "little")
    if head[8:12] != _CONTINUATION:
        raise Flaw("it is not an Arrow file of today's layout")
    for what, length in (("schema", schema), ("footer", footer)):
        if length > min(LARGEST_METADATA, size - 16 - 10):
            raise Flaw(f"its {what} claims {length} bytes in a file of {size}")
    if schema + footer > size - 16 - 10:
        raise Flaw("its schema and its footer overlap")
    return slice(16, 16 + schema), slice(size - 10 - footer, size - 10)


def find_seal(schema: bytes, footer: bytes, places: tuple[slice, slice]) -> Seal:
    """Return the seal, read from the bytes of the two regions.

    Raises
    ------
    Flaw
        If there is none, the version is another, or the two copies differ.
    """
    found = []
    for region, place in zip((schema, footer), places, strict=True):
        matches = list(_SEAL.finditer(region))
        versions = [int(match[1]) for match in _VERSION.finditer(region)]
        if not versions:
            raise Flaw("it is an Arrow file, but not a snapshot of streambasis")
        if versions[0] > VERSION:
            raise Flaw(
                f"its format has version {versions[0]}, this streambasis reads up to {VERSION}: "
                "update streambasis to read it"
            )
        if len(matches) != 1 or versions != [VERSION]:
            raise Flaw("it is damaged: its digest cannot be read")
        found.append((matches[0][2], place.start + matches[0].start(2)))
    (one, first), (other, second) = found
    if one != other:
        raise Flaw("it is damaged: its two digests differ")
    return Seal(one, first, second)


def read_seal(memory: memoryview) -> Seal:
    """Return the seal of a whole file in memory; raises as :func:`find_seal`."""
    size = memory.nbytes
    places = regions(bytes(memory[:16]), bytes(memory[max(size - 10, 0) :]), size)
    return find_seal(bytes(memory[places[0]]), bytes(memory[places[1]]), places)


def check_digest(memory: memoryview, seal: Seal) -> None:
    """Compare the digest with the content.

    Raises
    ------
    Flaw
        If a single byte differs from what was written.
    """
    with Digest() as content:
        content.update(memory[: seal.first])
        content.update(memoryview(ZEROS))
        content.update(memory[seal.first + 64 : seal.second])
        content.update(memoryview(ZEROS))
        content.update(memory[seal.second + 64 :])
        if content.text() != seal.digest:
            raise Flaw("it is damaged: its content does not match its digest")
