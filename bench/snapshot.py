"""Snapshots: how fast they are, and what it takes to break one."""

from __future__ import annotations

import hashlib
import json
import multiprocessing
import os
import random
import resource
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import scipy.fft

from bench.harness import Table, interleaved
from streambasis.files import remove_leftovers
from streambasis.snapshot import from_bytes, load, read_state, save, to_bytes
from streambasis.state import State

ROOT = Path(__file__).parent.parent
CHANNELS = 10_000
MUTANT_PROCESSES = 2


def run(quick: bool) -> list[Table]:
    """Answer how fast, and how safe."""
    with tempfile.TemporaryDirectory(dir=os.environ.get("STREAMBASIS_BENCH_FOLDER")) as folder:
        return [
            speed(Path(folder), 64 if quick else 512, repetitions=3 if quick else 7),
            small(Path(folder), repetitions=3 if quick else 7),
            kills(Path(folder), 20 if quick else 200),
            mutants(Path(folder), 1000 if quick else 20_000),
        ]


def large_basis(rows: int) -> Any:
    """Return a basis of many directions without pushing to it: rows of a cosine transform."""
    vectors = scipy.fft.dct(np.eye(rows, CHANNELS), axis=1, norm="ortho")
    import streambasis

    state = streambasis.StreamBasis(CHANNELS).to_state()
    header = state.parts["core"].arrays["header"]
    header[:2] = rows  # as many samples as directions
    state.parts["core"].arrays |= {
        "vectors": vectors,
        "factor": np.eye(rows),
        "pivots": np.arange(rows),
        "exponents": np.zeros(rows, np.int64),
        "header": header,
    }
    return from_bytes(to_bytes(state), verify=False)


def read_and_hash(path: Path) -> str:
    """Read a file once and hash it, as fast as the standard library does."""
    content = hashlib.sha256()
    piece = memoryview(bytearray(1 << 20))
    with path.open("rb", buffering=0) as file:
        while length := file.readinto(piece):
            content.update(piece[:length])
    return content.hexdigest()


def numpy_save(path: Path, array: Any) -> None:
    """Write an array with numpy.save and force it to the disk."""
    with path.open("wb") as file:
        np.save(file, array)
        file.flush()
        os.fsync(file.fileno())


def speed(folder: Path, megabytes: int, repetitions: int) -> Table:
    """Time saving and loading against writing, reading and hashing the same bytes."""
    # vectors (rows, channels) and factor (rows, rows)
    rows = int((CHANNELS**2 / 4 + (megabytes << 17)) ** 0.5 - CHANNELS / 2)
    basis = large_basis(rows)
    path, plain = folder / "large.arrow", folder / "large.npy"
    save(basis, path)
    bytes_alike = np.zeros(path.stat().st_size // 8)
    bytes_alike += 0.5
    before = _peak()
    load(path, verify=False)
    unverified = _peak() - before
    load(path)
    verified = _peak() - before
    timings = interleaved(
        {
            "read and hash": lambda: read_and_hash(path),
            "load": lambda: load(path),
            "load, not verified": lambda: load(path, verify=False),
            "numpy.save": lambda: numpy_save(plain, bytes_alike),
            "save": lambda: save(basis, path),
        },
        repetitions=repetitions,
    )
    table = Table(
        f"A basis of {rows} directions on {CHANNELS} channels, {megabytes} MiB",
        ["operation", "median s", "min s", "max s", "ratio", "wanted"],
        headline=True,
    )
    wanted: dict[str, tuple[str, str]] = {
        "read and hash": ("read and hash", "1"),
        "load": ("read and hash", "at most 1.5"),
        "load, not verified": ("read and hash", "under 0.2 s"),
        "numpy.save": ("numpy.save", "1"),
        "save": ("numpy.save", "at most 2"),
    }
    for name, (against, bound) in wanted.items():
        timing = timings[name]
        ratio = timing.median / timings[against].median
        table.add(name, timing.median, timing.least, timing.most, ratio, bound)
    table.notes.append(
        f"Memory that loading took beyond pages of the file: {unverified >> 20} MiB unverified, "
        f"{verified >> 20} MiB verified. numpy.save includes fsync, as save does."
    )
    path.unlink()
    plain.unlink()
    return table


def _peak() -> int:
    """Return the bytes of this process that are backed by no file, now."""
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith("RssAnon:"):
            return int(line.split()[1]) * 1024
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024


def small(folder: Path, repetitions: int) -> Table:
    """Time the snapshots that a daemon writes every few seconds."""
    import streambasis

    table = Table(
        "Snapshots of everyday size (a basis in full)",
        ["channels", "bytes", "to_bytes ms", "from_bytes ms", "save ms", "load ms"],
    )
    for channels in (8, 32, 256):
        basis = streambasis.StreamBasis(channels)
        basis.push_many(np.random.default_rng(0).normal(size=(channels, channels)))
        path, data = folder / "small.arrow", to_bytes(basis)
        sides: dict[str, Callable[[], Any]] = {
            "to_bytes": lambda basis=basis: to_bytes(basis),
            "from_bytes": lambda data=data: from_bytes(data),
            "save": lambda basis=basis, path=path: save(basis, path),
            "load": lambda path=path: load(path),
        }
        timings = interleaved(sides, repetitions=repetitions)
        table.add(channels, len(data), *(1e3 * timings[name].median for name in sides))
    return table


def saving(path: str, number: int) -> None:
    """Save states with growing numbers until killed."""
    while True:
        number += 1
        values = np.full(20_000 * (1 + number % 10), float(number))
        save(State("Kind", {"number": number}, {"values": values}), path)


def kills(folder: Path, count: int) -> Table:
    """Kill a process that saves without pause, at random moments, and look at what it leaves."""
    path = folder / "killed.arrow"
    rng = random.Random(7)
    context = multiprocessing.get_context("forkserver")
    context.set_forkserver_preload(["bench.snapshot"])
    number = bad = back = leftovers = remaining = 0
    saved = 0
    for _ in range(count):
        process = context.Process(target=saving, args=(str(path), number))
        process.start()
        start = path.stat().st_mtime_ns if path.exists() else 0
        deadline = time.monotonic() + 60
        while (not path.exists() or path.stat().st_mtime_ns == start) and (
            time.monotonic() < deadline
        ):
            time.sleep(0.0005)
        time.sleep(rng.uniform(0, 0.02))
        assert process.pid is not None
        os.kill(process.pid, signal.SIGKILL)
        process.join()
        state = read_state(path)
        found = state.facts["number"]
        bad += not (state.arrays["values"] == found).all()
        back += found < number
        saved += found - number
        number = found
        leftovers += remove_leftovers(path)
        remaining += len(list(folder.glob(".killed.arrow.*")))
    table = Table(
        "SIGKILL at random moments of a loop of saves",
        ["kills", "saves", "bad files", "steps back", "leftovers removed", "leftovers remaining"],
    )
    table.add(count, saved, bad, back, leftovers, remaining)
    return table


def mutants(folder: Path, count: int) -> Table:
    """Change snapshots at random and load them, in processes of their own."""
    share = count // MUTANT_PROCESSES
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    runs = [
        subprocess.Popen(
            [sys.executable, str(ROOT / "tests" / "mutations.py"), folder, str(seed), str(share)],
            cwd=ROOT,
            env=environment,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        for seed in range(100, 100 + MUTANT_PROCESSES)
    ]
    ends: dict[str, int] = {}
    for process in runs:
        shown, errors = process.communicate(timeout=600)
        if process.returncode:
            raise RuntimeError(f"a changed snapshot got in, or broke the reader:\n{errors}")
        for end, number in json.loads(shown)["ends"].items():
            ends[end] = ends.get(end, 0) + number
    table = Table(
        "Snapshots changed at random: all refused, no crash, no hang", ["change", "number"]
    )
    for end, number in sorted(ends.items()):
        table.add(end.replace("_", " "), number)
    table.notes.append(
        "Forged: changed, then sealed with the right digest; half of them unverified. Those that "
        "are used hold other numbers, and nothing but numbers."
    )
    return table
