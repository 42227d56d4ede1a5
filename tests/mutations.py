"""Change snapshots at random and load them: ``python tests/mutations.py FOLDER SEED COUNT``.

Runs in a process of its own, so that a crash or a hang of the reader is seen as such, with little
memory, so that an absurd allocation fails. Prints one JSON line: how many were loaded, how each
kind of change ended.
"""

from __future__ import annotations

import collections
import contextlib
import hashlib
import json
import random
import resource
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np

import streambasis
from streambasis.errors import SnapshotError, StreambasisError
from streambasis.seal import ZEROS, Flaw, read_seal
from streambasis.snapshot import READ_WHOLE, load, read_state, to_bytes
from streambasis.state import State

SPARE_MEMORY = 1 << 29
Mutation = Callable[[bytearray, random.Random], None]


def flip_bit(data: bytearray, rng: random.Random) -> None:
    """Change one bit."""
    data[rng.randrange(len(data))] ^= 1 << rng.randrange(8)


def flip_bits(data: bytearray, rng: random.Random) -> None:
    """Change up to eight bytes."""
    for _ in range(rng.randint(2, 8)):
        data[rng.randrange(len(data))] = rng.randrange(256)


def zero_sector(data: bytearray, rng: random.Random) -> None:
    """Fill a disk sector with zeros."""
    start = rng.randrange(0, len(data), 512)
    stop = min(start + 512, len(data))
    data[start:stop] = bytes(stop - start)


def truncate(data: bytearray, rng: random.Random) -> None:
    """Cut the end off."""
    del data[rng.randrange(len(data)) :]


def delete(data: bytearray, rng: random.Random) -> None:
    """Take a piece out."""
    start = rng.randrange(len(data))
    del data[start : start + rng.randint(1, 64)]


def insert(data: bytearray, rng: random.Random) -> None:
    """Put random bytes in."""
    data[(at := rng.randint(0, len(data))) : at] = rng.randbytes(rng.randint(1, 64))


def repeat(data: bytearray, rng: random.Random) -> None:
    """Copy a piece over another."""
    length = rng.randint(1, 64)
    source, target = rng.randrange(len(data)), rng.randrange(len(data))
    piece = data[source : source + length]
    data[target : target + len(piece)] = piece


def extreme_number(data: bytearray, rng: random.Random) -> None:
    """Put an extreme length or offset where one may be."""
    at = rng.randrange(0, len(data) - 8, 4)
    number = rng.choice([0, 1, -1, 2**31 - 1, -(2**31), 2**31 - 8])
    data[at : at + 4] = number.to_bytes(4, "little", signed=True)


def extreme_number_at_an_end(data: bytearray, rng: random.Random) -> None:
    """Put an extreme number into the schema message or the footer, where the structure is."""
    reach = min(2000, len(data) - 8)
    at = rng.randrange(0, reach, 4)
    at = at if rng.random() < 0.5 else len(data) - 8 - at
    number = rng.choice([0, 1, -1, 2**31 - 1, -(2**31), 255, 4096])
    data[at : at + 4] = number.to_bytes(4, "little", signed=True)


MUTATIONS: tuple[Mutation, ...] = (
    flip_bit,
    flip_bits,
    zero_sector,
    truncate,
    delete,
    insert,
    repeat,
    extreme_number,
    extreme_number_at_an_end,
)


def digest_of(data: bytes | bytearray) -> bytes:
    """Return the digest of a file, by the description of the format alone."""
    blocks = [data[start : start + 2**22] for start in range(0, len(data), 2**22)]
    parts = b"".join(hashlib.sha256(block).digest() for block in blocks)
    return hashlib.sha256(parts).hexdigest().encode()


def resealed(data: bytearray) -> bool:
    """Put the digest right again where it can be found, as a forger would; return whether."""
    try:
        seal = read_seal(memoryview(data))
    except Flaw:
        return False
    for position in (seal.first, seal.second):
        data[position : position + 64] = ZEROS
    digest = digest_of(data)
    for position in (seal.first, seal.second):
        data[position : position + 64] = digest
    return True


def originals() -> list[bytes]:
    """Return snapshots to change: small ones of real objects, and one that is mapped."""
    rng = np.random.default_rng(0)
    small = streambasis.StreamBasis(["a", "b", "c", "d"])
    small.push_many(rng.normal(size=(3, 4)))
    single = streambasis.StreamBasis(6, dtype="complex64", inner=np.arange(1.0, 7.0))
    single.push_many(rng.normal(size=(4, 6)) + 1j)
    principal = streambasis.PrincipalBasis(4, rank=2, block=8, centre=True)
    principal.push_many(rng.normal(size=(50, 4)))
    large = State("Kind", {}, {"values": rng.normal(size=READ_WHOLE // 8), "x": np.arange(3)})
    return [to_bytes(obj) for obj in (small, single, principal, large)]


def use(path: Path, verify: bool) -> str:
    """Load a forged snapshot and push to the object; say how that ended."""
    fair = (StreambasisError, ArithmeticError, np.linalg.LinAlgError)
    with np.errstate(all="ignore"):
        try:
            obj = load(path, verify=verify)
        except SnapshotError:
            return "forged, refused"
        with contextlib.suppress(*fair):
            obj.push_many(np.ones((10, len(obj.channels)), obj.dtype))
            obj.push(np.ones(len(obj.channels), obj.dtype))
    return "forged, used"


def main(folder: str, seed: int, count: int) -> None:
    """Change and load ``count`` snapshots; anything but a SnapshotError ends the process."""
    sources = originals()
    rng = random.Random(seed)
    path = Path(folder) / f"mutant-{seed}.arrow"
    resource.setrlimit(resource.RLIMIT_AS, (_address_space() + SPARE_MEMORY,) * 2)
    ends: collections.Counter[str] = collections.Counter()
    for number in range(count):
        # the large one, slow to write, comes up once in sixteen
        original = sources[3] if number % 16 == 0 else sources[number % 3]
        mutation = rng.choice(MUTATIONS)
        data = bytearray(original)
        mutation(data, rng)
        if data == original:
            ends["unchanged"] += 1
            continue
        path.write_bytes(data)
        try:
            read_state(path)
            raise AssertionError(f"{mutation.__name__}, seed {seed}, number {number}: loaded")
        except SnapshotError as error:
            if str(path) not in str(error):
                raise AssertionError(f"{error}: does not name the file") from error
        ends[mutation.__name__] += 1
        if data and number % 2 and resealed(data):
            path.write_bytes(data)
            for verify in (True, False):
                ends[use(path, verify)] += 1
    path.unlink(missing_ok=True)
    print(json.dumps({"count": count, "ends": ends}))


def _address_space() -> int:
    pages = int(Path("/proc/self/statm").read_text().split()[0])
    return pages * resource.getpagesize()


if __name__ == "__main__":
    main(sys.argv[1], int(sys.argv[2]), int(sys.argv[3]))
