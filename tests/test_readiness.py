"""Readiness: a real socket in the place of a service manager's."""

from __future__ import annotations

import contextlib
import os
import socket
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from streambasis.watch.readiness import Readiness
from streambasis.watch.vitals import Vitals

WAIT = 5.0
"""Seconds for what comes in milliseconds."""


@pytest.fixture(params=["path", "abstract"])
def manager(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[tuple[socket.socket, str]]:
    """Give a socket that hears notifications, and its name as the environment has it."""
    name = str(tmp_path / "notify")
    if request.param == "abstract":
        name = f"@streambasis-{os.getpid()}"
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as listener:
        listener.bind(name.replace("@", "\0") if name[0] == "@" else name)
        listener.settimeout(WAIT)
        yield listener, name


def no_warning(text: str) -> None:
    """Fail: nothing is to be warned of."""
    raise AssertionError(text)


def test_ready_and_stopping_are_each_told_once(manager: tuple[socket.socket, str]) -> None:
    """READY=1 when the daemon has started, STOPPING=1 when it begins to end."""
    listener, name = manager
    with Readiness(Vitals(), no_warning, {"NOTIFY_SOCKET": name}) as readiness:
        readiness.ready()
        readiness.ready()
    readiness.stopping()
    assert [listener.recv(100) for _ in range(2)] == [b"READY=1", b"STOPPING=1"]
    listener.setblocking(False)
    with pytest.raises(BlockingIOError):
        listener.recv(100)


def test_reading_the_config_again_is_told_with_the_time(
    manager: tuple[socket.socket, str],
) -> None:
    """RELOADING=1 carries the monotonic clock in microseconds, as sd_notify(3) asks for."""
    listener, name = manager
    readiness = Readiness(Vitals(), no_warning, {"NOTIFY_SOCKET": name})
    readiness.reloading()
    readiness.reloaded()
    # what is read again before all is ready says nothing of being ready
    readiness.ready()
    assert listener.recv(100) == b"READY=1"
    before = time.monotonic_ns() // 1000
    readiness.reloading()
    readiness.reloaded()
    first, second = listener.recv(100).decode().split("\n")
    assert first == "RELOADING=1"
    assert before <= int(second.removeprefix("MONOTONIC_USEC=")) <= time.monotonic_ns() // 1000
    assert listener.recv(100) == b"READY=1"


def test_the_watchdog_is_fed_while_the_loop_waits_and_not_while_it_hangs(
    manager: tuple[socket.socket, str],
) -> None:
    """A loop that waits for its feed is well; one that is at work for too long is not."""
    listener, name = manager
    vitals = Vitals()
    asked = {"NOTIFY_SOCKET": name, "WATCHDOG_USEC": "40000", "WATCHDOG_PID": str(os.getpid())}
    with Readiness(vitals, no_warning, asked):
        assert [listener.recv(100) for _ in range(3)] == [b"WATCHDOG=1"] * 3
        vitals.busy_since = time.monotonic() - 1.0
        time.sleep(0.1)
        listener.setblocking(False)
        with contextlib.suppress(BlockingIOError):
            # what was on its way when the loop began to hang
            while listener.recv(100):
                pass
        time.sleep(0.1)
        with pytest.raises(BlockingIOError):
            listener.recv(100)
        vitals.busy_since = None
        listener.settimeout(WAIT)
        assert listener.recv(100) == b"WATCHDOG=1"


@pytest.mark.parametrize(
    "asked", [{"WATCHDOG_USEC": "9000"}, {"WATCHDOG_USEC": "x"}, {"WATCHDOG_PID": "1"}, {}]
)
def test_a_watchdog_that_nobody_here_is_asked_for_is_not_fed(asked: dict[str, str]) -> None:
    """Without a socket, a time, or with another process's number, there is no thread."""
    other = {"NOTIFY_SOCKET": "/nowhere"} if "WATCHDOG_PID" in asked else {}
    with Readiness(Vitals(), no_warning if not other else str, {**asked, **other}) as readiness:
        assert readiness._thread is None


def test_a_manager_that_is_gone_is_warned_of_once(tmp_path: Path) -> None:
    """The run goes on."""
    warnings: list[str] = []
    asked = {"NOTIFY_SOCKET": str(tmp_path / "gone")}
    with Readiness(Vitals(), warnings.append, asked) as readiness:
        readiness.ready()
    assert warnings == ["NOTIFY_SOCKET: cannot be reached (No such file or directory)"]


def test_without_a_manager_nothing_is_told() -> None:
    """A run by hand has nobody to tell."""
    with Readiness(Vitals(), no_warning, {}) as readiness:
        readiness.ready()
        readiness.reloading()
        readiness.reloaded()
