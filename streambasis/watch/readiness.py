"""Telling a service manager how a daemon is, by the protocol of ``sd_notify``.

Reference: the manual pages sd_notify(3) and sd_watchdog_enabled(3) of systemd: datagrams of
``NAME=VALUE`` lines to the socket that NOTIFY_SOCKET names.
"""

from __future__ import annotations

import os
import socket
import threading
import time
from collections.abc import Callable, Mapping
from types import TracebackType
from typing import Self

from streambasis.watch.vitals import Vitals

SOCKET, WATCHDOG, WATCHDOG_PROCESS = "NOTIFY_SOCKET", "WATCHDOG_USEC", "WATCHDOG_PID"
_READY = "READY=1"
_SEND_SECONDS = 1.0


class Readiness:
    """Tells a service manager what it asked to be told; without one does nothing.

    Parameters
    ----------
    vitals : Vitals
        Whether the loop is at work, and since when.
    warned : callable
        Told once if the manager cannot be reached; that ends no run.
    environment : mapping
        Where the manager says how it wants to be told.

    Notes
    -----
    The watchdog is fed from a thread of its own, since the loop may wait for the feed for hours,
    but not while the loop has been at work on one batch for longer than the watchdog's time.
    """

    def __init__(
        self,
        vitals: Vitals,
        warned: Callable[[str], None],
        environment: Mapping[str, str] = os.environ,
    ) -> None:
        self._vitals = vitals
        self._warned = warned
        self._address = environment.get(SOCKET, "")
        self._told: set[str] = set()
        self._over = threading.Event()
        self._period = _watchdog_seconds(environment) if self._address else 0.0
        self._thread: threading.Thread | None = None

    def ready(self) -> None:
        """Say, once, that the daemon has started."""
        self._once(_READY)

    def stopping(self) -> None:
        """Say, once, that the daemon has begun to end."""
        self._once("STOPPING=1")

    def reloading(self) -> None:
        """Say that the config is being read again, which :meth:`reloaded` ends."""
        if _READY in self._told:
            self._send(f"RELOADING=1\nMONOTONIC_USEC={time.monotonic_ns() // 1000}")

    def reloaded(self) -> None:
        """Say that the config has been read."""
        if _READY in self._told:
            self._send(_READY)

    def _once(self, message: str) -> None:
        if message not in self._told:
            self._told.add(message)
            self._send(message)

    def _send(self, message: str) -> None:
        if not self._address:
            return
        # a name that begins with @ is one of Linux's abstract names
        address = f"\0{self._address[1:]}" if self._address[0] == "@" else self._address
        try:
            with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_CLOEXEC) as sender:
                sender.settimeout(_SEND_SECONDS)
                sender.sendto(message.encode(), address)
        except OSError as error:
            if "unreachable" not in self._told:
                self._told.add("unreachable")
                self._warned(f"{SOCKET}: cannot be reached ({error.strerror or error})")

    def _feed_watchdog(self) -> None:
        while not self._over.wait(self._period / 2):
            busy_since = self._vitals.busy_since
            if busy_since is None or time.monotonic() - busy_since < self._period:
                self._send("WATCHDOG=1")

    def __enter__(self) -> Self:
        if self._period:
            self._thread = threading.Thread(
                target=self._feed_watchdog, name="watchdog", daemon=True
            )
            self._thread.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.stopping()
        self._over.set()
        if self._thread is not None:
            self._thread.join()


def _watchdog_seconds(environment: Mapping[str, str]) -> float:
    """Return within how many seconds the watchdog wants to hear of us; 0 for none."""
    wanted, process = environment.get(WATCHDOG, ""), environment.get(WATCHDOG_PROCESS, "")
    if not wanted.isdecimal() or process not in ("", str(os.getpid())):
        return 0.0
    return int(wanted) / 1e6
