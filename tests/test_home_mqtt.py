"""A run on messages: what the broker, the network and the disk do to it costs no sample."""

from __future__ import annotations

import json
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np
import pyarrow as pa
import pytest
from brokers import Line, Mosquitto, Publisher, make_session
from faults import Faults
from runs import Watched, table_of
from test_feeds_fuzz import mutated

from streambasis.feeds import Broker
from streambasis.snapshot import load
from streambasis.watch import keeping as keeping_module
from streambasis.watch import loop as loop_module

CLIENT = "monitor"
SAMPLES = 4000
GIVE_UP = 40.0
SETTINGS = Broker(client=CLIENT, queue=256, keepalive=2, patience=5.0)


def payloads_of(samples: int) -> list[bytes]:
    """Return messages with a time, which is the number of the sample."""
    rows = table_of(samples).to_pylist()
    return [
        json.dumps({"time": n, **{k: v for k, v in row.items() if v == v}}).encode()
        for n, row in enumerate(rows)
    ]


def times_kept(folder: Path) -> list[int]:
    """Return the times, in seconds, of the samples whose decisions are kept, in order."""
    files = sorted((folder / "decisions").iterdir())
    tables = [pa.ipc.open_file(file).read_all() for file in files]
    samples = np.concatenate([table["sample"].to_numpy() for table in tables])
    assert samples.tolist() == list(range(len(samples)))
    times = np.concatenate([table["time"].cast(pa.int64()).to_numpy() for table in tables])
    return (times // 10**9).tolist()


@pytest.fixture
def broker(tmp_path: Path) -> Iterator[Mosquitto]:
    """Give a broker that knows us, so that nothing is published in vain."""
    (tmp_path / "broker").mkdir()
    with Mosquitto(tmp_path / "broker") as broker:
        make_session(broker.port, CLIENT)
        yield broker


@contextmanager
def giving_up(watched: Watched) -> Iterator[Watched]:
    """End a run by itself if a test waits for what does not come."""
    timer = threading.Timer(GIVE_UP, watched.asked.set)
    timer.start()
    try:
        yield watched
    finally:
        timer.cancel()


class Script:
    """Does things when so many samples have been taken, each once, and stops at the last."""

    def __init__(self, *steps: tuple[int, object], last: int = SAMPLES) -> None:
        self._steps, self._last = list(steps), last
        self.watched: Watched

    def __call__(self, samples: int) -> None:
        """Do what is due."""
        while self._steps and samples >= self._steps[0][0]:
            step = self._steps.pop(0)[1]
            assert callable(step)
            step()
        if samples >= self._last:
            self.watched.asked.set()


def run(url: str, folder: Path, script: Script, **given: object) -> Watched:
    """Run until the script says stop."""
    settings = {"every": (500, 0.5), "broker": SETTINGS, "reopens": True, **given}
    script.watched = Watched(url, folder, script, **settings)
    with giving_up(script.watched) as watched:
        return watched()


def test_a_broker_that_restarts_costs_no_sample(broker: Mosquitto, tmp_path: Path) -> None:
    """Published before, during and after: each sample once, in order."""
    payloads = payloads_of(SAMPLES)
    with Publisher(broker.port) as publisher:
        publisher.send(payloads[:2000])

        def restart() -> None:
            broker.close()
            publisher.send(payloads[2000:3000])
            broker.start()
            publisher.send(payloads[3000:])

        watched = run(broker.url(), tmp_path / "home", Script((1500, restart)))
    assert times_kept(tmp_path / "home") == list(range(SAMPLES))
    assert watched.vitals.samples == SAMPLES


def test_a_network_that_is_gone_costs_no_sample(broker: Mosquitto, tmp_path: Path) -> None:
    """Nothing passes and nothing closes for longer than the keep-alive."""
    payloads = payloads_of(SAMPLES)
    with Publisher(broker.port) as publisher, Line(broker.port) as line:
        publisher.send(payloads[:2000])

        def cut() -> None:
            line.freeze()
            threading.Timer(4.0, line.thaw).start()
            publisher.send(payloads[2000:])

        run(broker.url(port=line.port), tmp_path / "home", Script((1500, cut)))
    assert times_kept(tmp_path / "home") == list(range(SAMPLES))


def test_a_run_that_goes_back_is_sent_its_messages_again(
    broker: Mosquitto, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A monitor that fails its audit costs no sample either."""
    monkeypatch.setattr(loop_module, "AUDIT_SHARE", float("inf"))
    script = Script((3000, lambda: harm(script)))
    with Publisher(broker.port) as publisher:
        publisher.send(payloads_of(SAMPLES))
        watched = run(broker.url(), tmp_path / "home", script, audit_every=0.0)
    assert watched.vitals.failed_audits == 1
    assert "went back" in watched.ear.warnings[0]
    assert times_kept(tmp_path / "home") == list(range(SAMPLES))


def harm(script: Script) -> None:
    """Turn a direction of the monitor that runs now."""
    script.watched.run._monitor.basis._core.core.directions[0, 2] += 0.5


def test_a_full_disk_does_not_stop_messages(
    broker: Mosquitto, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Many more samples are scored than the broker sends ahead, and all are kept in the end."""
    monkeypatch.setattr(keeping_module, "RETRY_SECONDS", 0.1)
    seen: list[int] = []
    with pytest.MonkeyPatch.context() as patch, Publisher(broker.port) as publisher:
        publisher.send(payloads_of(SAMPLES))

        def room() -> None:
            seen.append(script.watched.vitals.samples)
            assert script.watched.vitals.unkept is not None
            patch.undo()

        script = Script((1500, lambda: Faults(patch, 1, forever=True)), (3500, room))
        watched = run(broker.url(), tmp_path / "home", script)
    assert seen[0] - 1500 > 4 * SETTINGS.ahead
    assert times_kept(tmp_path / "home") == list(range(SAMPLES))
    assert ["scoring goes on" in w for w in watched.ear.warnings] == [True, False]


def test_silence_does_not_put_off_a_commit(broker: Mosquitto, tmp_path: Path) -> None:
    """What came last is committed, and acknowledged, though nothing follows."""
    with Publisher(broker.port) as publisher:
        publisher.send(payloads_of(10))
        script = Script(last=SAMPLES)
        script.watched = Watched(
            broker.url(), tmp_path / "home", script, every=(10**9, 0.3), broker=SETTINGS
        )
        with giving_up(script.watched) as watched:
            thread = threading.Thread(target=watched)
            thread.start()
            state = tmp_path / "home" / "state.arrow"
            deadline = time.monotonic() + GIVE_UP
            while not (state.exists() and load(state).count == 10):
                assert time.monotonic() < deadline
                time.sleep(0.02)
            watched.asked.set()
            thread.join()


def test_messages_of_any_kind_are_samples_or_malformed(broker: Mosquitto, tmp_path: Path) -> None:
    """Random and mutated payloads between good ones: none ends the run, each is accounted for."""
    rng = np.random.default_rng(7)
    good = payloads_of(1200)
    numbered = [b'{"seq": %d, ' % n + payload[1:] for n, payload in enumerate(good)]
    bad = [rng.bytes(int(rng.integers(1, 200))) for _ in range(150)]
    bad += [b"\xff\xff\xff\xff" + rng.bytes(60) for _ in range(50)]
    bad += [b"", b"[" * 100_000, b"1e999", b'{"c0": 1e999}', b'{"time": "x", "c0": 1}']
    mixed = [mutated(rng, numbered[int(rng.integers(1200))]) for _ in range(300)]
    between = sorted(zip(rng.uniform(0, 1200, len(bad + mixed)), bad + mixed, strict=True))
    order = sorted([*enumerate(numbered), *between], key=lambda item: item[0])
    last = b'{"time": 5000, "seq": 5000, "c0": 1.0}'
    with Publisher(broker.port) as publisher:
        publisher.publish([*[payload for _, payload in order], last])
        script = Script(last=10**9)

        def stop_at_the_last(samples: int) -> None:
            del samples
            if script.watched.run._last_time == 5000 * 10**9:
                script.watched.asked.set()

        script.watched = Watched(
            broker.url(), tmp_path / "home", stop_at_the_last, broker=SETTINGS, every=(300, 0.5)
        )
        with giving_up(script.watched) as watched:
            watched()
    vitals = watched.vitals
    assert set(range(1200)) <= set(times_kept(tmp_path / "home"))
    assert vitals.samples + vitals.malformed + vitals.duplicates == len(order) + 1
    kept = (tmp_path / "home" / "malformed.jsonl").read_text(encoding="utf-8").splitlines()
    assert len(kept) == vitals.malformed >= len(bad)
    assert {json.loads(line)["unit"] for line in kept} == {"message"}
