"""The daemon as a service: real processes, real signals, real sockets, a real broker."""

from __future__ import annotations

import json
import os
import pty
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from streambasis import cli
from streambasis.snapshot import read_state
from streambasis.watch.metrics import COUNTERS, GAUGES, TIMES
from tests.brokers import Mosquitto, Publisher, program
from tests.daemons import PATIENCE, ROOT, Daemon

CHANNELS = "abcdef"
BASELINE = 200
FIRST = 2000
"""Rows that the feed holds when the daemon starts."""


def rows(first: int, last: int) -> list[list[float]]:
    """Return samples of two sources in six channels, the same for the same numbers."""
    rng = np.random.default_rng(7)
    mixing = rng.standard_normal((2, len(CHANNELS)))
    values = rng.standard_normal((last, 2)) @ mixing + 0.1 * rng.standard_normal((last, 6))
    return values[first:last].round(4).tolist()


def lines(first: int, last: int) -> str:
    """Return samples as lines of CSV, a second apart."""
    return "".join(
        f"2026-03-02T{n // 3600:02}:{n // 60 % 60:02}:{n % 60:02},{','.join(map(str, row))}\n"
        for n, row in enumerate(rows(first, last), first)
    )


def write_feed(folder: Path) -> Path:
    """Write the first rows of a feed."""
    feed = folder / "feed.csv"
    feed.write_text(f"time,{','.join(CHANNELS)}\n" + lines(0, FIRST))
    return feed


CONFIG = f"""
feed = "feed.csv"
home = "run"
follow = true
baseline = {BASELINE}
metrics = ":0"
silent-after = "1h"
snapshot-every = [500, "1h"]
"""


@pytest.fixture(scope="module")
def running(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Daemon]:
    """Run a daemon over a growing file, configured by a file and heard by a service manager."""
    folder = tmp_path_factory.mktemp("daemon")
    write_feed(folder)
    (folder / "watch.toml").write_text(CONFIG)
    with Daemon(folder, "--config", folder / "watch.toml", managed=True) as daemon:
        assert daemon.hear() == "READY=1"
        daemon.until(lambda: daemon.taken(FIRST))
        yield daemon


def test_a_scrape_shows_every_metric_of_the_run(running: Daemon) -> None:
    """All that is promised is there, and follows what the feed brings."""
    with (running.folder / "feed.csv").open("a") as file:
        file.write(lines(FIRST, FIRST + 100) + "no,sample,at,all\n")
    running.until(lambda: running.taken(FIRST + 100))
    running.until(lambda: running.metrics()["streambasis_malformed_rows_total"] == 1)
    shown = running.metrics()
    wanted = [f"{c.name}_total" for c in COUNTERS] + [g.name for g in (*GAUGES, *TIMES)]
    for name in [*wanted, "lag_seconds", "samples_per_second", "healthy"]:
        assert f"streambasis_{name}" in shown
    assert shown["streambasis_samples_total"] == FIRST + 100
    assert shown["streambasis_sample_timestamp_seconds"] == 1772409600 + FIRST + 99
    assert 0 < shown["streambasis_spe_limit"] < 1000
    assert shown["streambasis_snapshot_bytes"] > 1000
    assert shown["process_resident_memory_bytes"] > 1e6


def test_a_daemon_at_work_is_healthy(running: Daemon) -> None:
    """200 and no reasons."""
    status, body = running.get("healthz")
    assert (status, json.loads(body)) == (200, {"status": "ok", "reasons": []})


def hang_up(daemon: Daemon, config: str, answer: str) -> None:
    """Change the config, send SIGHUP and wait for a line about it."""
    (daemon.folder / "watch.toml").write_text(config)
    line = f"streambasis: {answer.format(daemon.folder / 'watch.toml')}\n"
    before = daemon.err.count(line)
    daemon.send(signal.SIGHUP)
    daemon.until(lambda: daemon.err.count(line) == before + 1)


def test_a_hang_up_takes_over_what_may_change_and_names_what_may_not(running: Daemon) -> None:
    """What the daemon is told live works at once; the rest is said to need another start."""
    hang_up(
        running,
        CONFIG.replace("1h", "20ms", 1).replace(f"baseline = {BASELINE}", "baseline = 300"),
        "read the settings again: silent-after; only another start changes baseline",
    )
    assert running.hear().startswith("RELOADING=1\nMONOTONIC_USEC=")
    assert running.hear() == "READY=1"
    running.until(lambda: running.get("healthz")[0] == 503)
    (reason,) = json.loads(running.get("healthz")[1])["reasons"]
    assert reason.startswith("feed: nothing has come for")
    assert running.metrics()["streambasis_healthy"] == 0
    hang_up(running, CONFIG, "read the settings again: silent-after")
    running.until(lambda: running.get("healthz")[0] == 200)


def test_a_hang_up_changes_how_often_the_run_is_kept(running: Daemon) -> None:
    """From once an hour to at once: the snapshot is written again though nothing has come."""
    before = running.metrics()["streambasis_snapshot_timestamp_seconds"]
    hang_up(
        running,
        CONFIG.replace('[500, "1h"]', '[500, "20ms"]'),
        "read the settings again: snapshot-every",
    )
    running.until(lambda: running.metrics()["streambasis_snapshot_timestamp_seconds"] > before)
    hang_up(running, CONFIG, "read the settings again: snapshot-every")


def test_a_hang_up_with_a_broken_config_changes_nothing(running: Daemon) -> None:
    """The error is named and everything stays as it was; a config that works again is taken."""
    hang_up(
        running,
        CONFIG + "silent_aftr = 3\n",
        "{}: no setting 'silent_aftr' (did you mean 'silent-after'?); everything stays as it was",
    )
    hang_up(running, CONFIG, "read the settings again: nothing new")


def test_a_daemon_that_waits_for_its_feed_stops_when_asked(running: Daemon) -> None:
    """SIGTERM: exit code 0, the manager told, everything taken kept, nothing left running."""
    taken = running.metrics()["streambasis_samples_total"]
    assert running.stop() == cli.OK
    while (said := running.hear()) != "STOPPING=1":
        assert said == "READY=1" or said.startswith("RELOADING=1")
    state = read_state(running.folder / "run" / "state.arrow")
    assert state.parts["core"].facts["count"] == taken
    assert "Traceback" not in running.err


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_a_daemon_that_still_compiles_stops_when_asked(
    tmp_path: Path, number: signal.Signals
) -> None:
    """Asked while it warms up with nothing compiled, a daemon ends well and has taken nothing."""
    feed, cache = write_feed(tmp_path), str(tmp_path / "cache")
    home = tmp_path / "run"
    with Daemon(tmp_path, feed, "--home", home, STREAMBASIS_CACHE_DIR=cache) as daemon:
        daemon.until((home / "lock").exists)
        assert daemon.stop(number) == cli.OK
        assert daemon.err == ""
    assert not (home / "state.arrow").exists()


def test_a_pipe_that_says_nothing_keeps_nobody_from_stopping(tmp_path: Path) -> None:
    """READY=1 comes before the first sample; SIGTERM ends the wait for it."""
    with Daemon(tmp_path, "-", managed=True) as daemon:
        assert daemon.hear() == "READY=1"
        assert daemon.stop() == cli.OK
        assert daemon.hear() == "STOPPING=1"
        assert daemon.err == ""


def test_without_a_config_a_hang_up_is_survived(tmp_path: Path) -> None:
    """A service without a file of settings says that there is none, and goes on."""
    with Daemon(tmp_path, "-", managed=True) as daemon:
        assert daemon.hear() == "READY=1"
        daemon.send(signal.SIGHUP)
        daemon.until(lambda: "there is no --config to read again" in daemon.err)
        assert daemon.stop() == cli.OK


def test_a_terminal_that_is_closed_ends_the_run_well(tmp_path: Path) -> None:
    """SIGHUP without a config and on a terminal keeps what was taken, with exit code 0."""
    feed, home = write_feed(tmp_path), tmp_path / "run"
    parent, child = pty.openpty()
    command = [sys.executable, "-m", "streambasis", "watch", str(feed), "--follow", "--quiet"]
    command += ["--home", str(home), "--baseline", str(BASELINE), "--snapshot-every", "200ms"]
    # a run of the tests that outlives its own terminal would hand that on
    earlier = signal.signal(signal.SIGHUP, signal.SIG_DFL)
    try:
        process = subprocess.Popen(command, stdout=child, stderr=child, cwd=ROOT)
    finally:
        signal.signal(signal.SIGHUP, earlier)
    os.close(child)
    try:
        deadline = time.monotonic() + PATIENCE
        state = home / "state.arrow"
        while not (state.exists() and read_state(state).parts["core"].facts["count"] == FIRST):
            assert time.monotonic() < deadline
            time.sleep(0.05)
        process.send_signal(signal.SIGHUP)
        assert process.wait(PATIENCE) == cli.OK
    finally:
        process.kill()
        process.wait()
    os.close(parent)


SECRET = "hush-7f3a"


def payloads(first: int, last: int) -> list[str]:
    """Return samples as JSON objects with a time."""
    return [
        json.dumps({"time": 1.0 + n, **dict(zip(CHANNELS, row, strict=True))})
        for n, row in enumerate(rows(first, last), first)
    ]


def test_a_topic_is_watched_from_end_to_end_and_its_secret_kept(tmp_path: Path) -> None:
    """Messages to decisions over two runs of one home: each once, and no password anywhere."""
    passwords, login = tmp_path / "passwords", tmp_path / "login"
    command = [program("mosquitto_passwd"), "-b", "-c", str(passwords), "me", SECRET]
    subprocess.run(command, check=True)
    passwords.chmod(0o644)
    login.write_text(f"me\n{SECRET}\n")
    home = tmp_path / "run"
    seen = ""
    settings = f"allow_anonymous false\npassword_file {passwords}\nlog_type all\n"
    with Mosquitto(tmp_path, settings) as broker:
        arguments = [broker.url(), "--home", home, "--credentials", login, "--metrics", ":0"]
        arguments += ["--baseline", str(BASELINE)]
        with Publisher(broker.port, user="me", password=SECRET) as publisher:
            for first, last in ((0, 500), (500, 900)):
                with Daemon(tmp_path, *arguments, managed=True) as daemon:
                    assert daemon.hear() == "READY=1"
                    if first == 0:
                        # a broker keeps messages from the first subscription on
                        log = tmp_path / "mosquitto.log"
                        daemon.until(lambda log=log: "SUBACK" in log.read_text())
                    publisher.publish(payloads(first, last))
                    daemon.until(lambda daemon=daemon, last=last: daemon.taken(last))
                    seen += daemon.get("metrics")[1] + daemon.get("healthz")[1]
                    seen += Path(f"/proc/{daemon.process.pid}/cmdline").read_text()
                    assert daemon.stop() == cli.OK
                    seen += daemon.err
    state = read_state(home / "state.arrow")
    assert state.parts["core"].facts["count"] == 900
    assert seen.count("streambasis_samples_total 900.0") == 1
    assert "streambasis_restarts_total 1.0" in seen
    kept = b"".join(path.read_bytes() for path in home.rglob("*") if path.is_file())
    assert SECRET not in seen
    assert SECRET.encode() not in kept


def test_one_thread_computes_unless_the_environment_says_otherwise(tmp_path: Path) -> None:
    """The linear algebra library starts with one thread, or as many as the user wants."""
    feed = write_feed(tmp_path)
    code = (
        "import sys; from streambasis.cli import main; from threadpoolctl import threadpool_info; "
        f"assert main(['watch', {str(feed)!r}, '--baseline', '200', '--quiet']) == 0; "
        "print([p['num_threads'] for p in threadpool_info() if p['user_api'] == 'blas'])"
    )
    free = {k: v for k, v in os.environ.items() if not k.endswith("_NUM_THREADS")}
    for wanted, threads in (({}, "[1]"), ({"OPENBLAS_NUM_THREADS": "2"}, "[2]")):
        shown = subprocess.run(
            [sys.executable, "-c", code],
            capture_output=True,
            text=True,
            check=True,
            cwd=ROOT,
            env={**free, **wanted},
            timeout=PATIENCE,
        )
        # a machine of one processor has no second thread to give
        assert shown.stdout.strip() in (threads, "[1]" if os.cpu_count() == 1 else threads)


def test_an_address_that_is_taken_is_one_line_and_an_exit_code(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """The line names the address; nothing was run."""
    with socket.create_server(("127.0.0.1", 0)) as taken:
        where = f"127.0.0.1:{taken.getsockname()[1]}"
        feed = str(write_feed(tmp_path))
        assert cli.main(["watch", feed, "--metrics", where]) == cli.OUTPUT
    shown = capsys.readouterr()
    assert shown.out == ""
    assert shown.err == (
        f"streambasis: metrics {where}: cannot be served there (Address already in use); choose "
        "another address\n"
    )


def test_an_address_that_others_can_reach_is_warned_of(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Quiet or not; the loopback address is no reason to warn."""
    feed = str(write_feed(tmp_path))
    common = ["watch", feed, "--baseline", "200", "--quiet", "--metrics"]
    assert cli.main([*common, "0.0.0.0:0"]) == cli.OK
    (line,) = capsys.readouterr().err.splitlines()
    assert line.startswith("streambasis: warning: http://0.0.0.0:")
    assert "can be read by whoever reaches this machine" in line
    assert cli.main([*common, "0"]) == cli.OK
    assert capsys.readouterr() == ("", "")
