"""Killed at random moments, a program that commits samples and position together misses nothing."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import threading
import time
from pathlib import Path

import numpy as np
from brokers import Mosquitto, Publisher, make_session

# the least that a daemon does: what came of the samples and the position are one file, replaced
# in one step; only then are the messages acknowledged
PROGRAM = """
import json, os, sys
from streambasis.feeds import Broker, FeedOptions, open_feed
source, kept, follow = sys.argv[1:]
state = {"samples": [], "position": None}
if os.path.exists(kept):
    state = json.load(open(kept))
options = FeedOptions(follow=bool(int(follow)), broker=Broker(client="monitor", queue=64))
with open_feed(source, position=state["position"], options=options) as feed:
    for batch in feed.batches():
        state["samples"] += batch.values[:, 0].tolist()
        state["position"] = batch.position
        with open(kept + ".new", "w") as file:
            json.dump(state, file)
        os.replace(kept + ".new", kept)
        feed.commit(batch.position)
"""
SAMPLES = 2400
LIMIT = 40.0


def kept_samples(kept: Path) -> list[float]:
    """Return what the program has committed so far."""
    return json.loads(kept.read_text())["samples"] if kept.exists() else []


def run_killed(source: str, kept: Path, follow: bool, kills: int, seed: int) -> int:
    """Run the program, killing it so often, until all samples are kept; return the runs made."""
    rng = np.random.default_rng(seed)
    deadline = time.monotonic() + LIMIT
    runs = 0
    while len(kept_samples(kept)) < SAMPLES:
        assert time.monotonic() < deadline, f"{len(kept_samples(kept))} of {SAMPLES} samples"
        program = subprocess.Popen(
            [sys.executable, "-c", PROGRAM, source, str(kept), str(int(follow))]
        )
        runs += 1
        try:
            before = len(kept_samples(kept))
            while len(kept_samples(kept)) == before and time.monotonic() < deadline:
                assert program.poll() is None
                time.sleep(0.002)
            if runs <= kills:
                time.sleep(rng.uniform(0, 0.03))
            else:
                while len(kept_samples(kept)) < SAMPLES and time.monotonic() < deadline:
                    time.sleep(0.01)
        finally:
            program.kill()
            program.wait()
    return runs


def test_no_message_is_lost_or_taken_twice(tmp_path: Path) -> None:
    """Messages with a time, published all the while, each exactly once and in order."""
    payloads = [json.dumps({"time": n, "a": n}) for n in range(SAMPLES)]
    kept = tmp_path / "kept.json"
    with Mosquitto(tmp_path) as broker:
        make_session(broker.port, "monitor")
        with Publisher(broker.port) as publisher:
            sending = threading.Thread(target=publisher.publish, args=[payloads])
            sending.start()
            runs = run_killed(broker.url(), kept, False, kills=4, seed=1)
            sending.join()
    assert runs > 1
    assert kept_samples(kept) == list(range(SAMPLES))


def test_no_line_of_a_growing_file_is_lost_or_taken_twice(tmp_path: Path) -> None:
    """Lines written all the while, in pieces that end anywhere, through rotations."""
    path = tmp_path / "feed.csv"
    path.write_text("time,a\n")
    kept = tmp_path / "kept.json"

    def write() -> None:
        rng = np.random.default_rng(2)
        for start in range(0, SAMPLES, 300):
            if start:
                # a feed begins with the file that is there: not before its first position does it
                # know what came after which
                while not kept.exists():
                    time.sleep(0.01)
                os.rename(path, f"{path}.{SAMPLES - start}")
                path.write_text("time,a\n")
            lines = "".join(f"{n},{n}\n" for n in range(start, start + 300))
            while lines:
                cut = int(rng.integers(1, 200))
                with path.open("a") as file:
                    file.write(lines[:cut])
                lines = lines[cut:]
                time.sleep(0.005)

    writing = threading.Thread(target=write)
    writing.start()
    runs = run_killed(str(path), kept, True, kills=3, seed=3)
    writing.join()
    assert runs > 1
    assert kept_samples(kept) == list(range(SAMPLES))
