"""A real daemon for tests: ``watch`` in a process of its own, with those it talks to."""

from __future__ import annotations

import os
import re
import signal
import socket
import subprocess
import sys
import time
import urllib.error
import urllib.request
from collections.abc import Callable
from pathlib import Path

from prometheus_client.openmetrics.parser import text_string_to_metric_families

from tests.brokers import Held

ROOT = Path(__file__).parent.parent
PATIENCE = 60.0
"""Seconds for what takes tenths of one on a machine with nothing else to do."""


class Daemon(Held):
    """A daemon and, where wanted, the socket of a service manager.

    Parameters
    ----------
    folder : Path
        Where its output goes, to ``out`` and ``err``.
    *arguments : str or Path
        Of the command line, behind ``watch``.
    managed : bool
        Listen as a service manager does.
    **environment : str
        Added to that of the tests.
    """

    def __init__(
        self, folder: Path, *arguments: str | Path, managed: bool = False, **environment: str
    ) -> None:
        self.folder = folder
        self._socket = None
        if managed:
            self._socket = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
            self._socket.bind(f"\0streambasis-test-{os.getpid()}-{id(self)}")
            name = self._socket.getsockname().decode()
            environment["NOTIFY_SOCKET"] = name.replace("\0", "@")
            self._socket.settimeout(PATIENCE)
        command = [sys.executable, "-m", "streambasis", "watch", *map(str, arguments)]
        with (folder / "out").open("wb") as out, (folder / "err").open("wb") as err:
            self.process = subprocess.Popen(
                command,
                stdin=subprocess.PIPE,
                stdout=out,
                stderr=err,
                cwd=ROOT,
                env={**os.environ, **environment},
            )

    @property
    def err(self) -> str:
        """What it has written to standard error."""
        return (self.folder / "err").read_text()

    def hear(self) -> str:
        """Return what it tells the service manager next."""
        assert self._socket is not None
        return self._socket.recv(200).decode()

    def until(self, condition: Callable[[], object]) -> None:
        """Wait until a condition holds; fail if the daemon ends before."""
        deadline = time.monotonic() + PATIENCE
        while not condition():
            assert self.process.poll() is None, f"the daemon has ended: {self.err}"
            assert time.monotonic() < deadline, f"waited in vain: {self.err}"
            time.sleep(0.02)

    def url(self, page: str = "metrics") -> str:
        """Return the address of a page, as the daemon names it."""
        pattern = re.compile(r"metrics at (http://\S+)/metrics\n")
        self.until(lambda: pattern.search(self.err))
        found = pattern.search(self.err)
        assert found is not None
        return f"{found[1]}/{page}"

    def get(self, page: str) -> tuple[int, str]:
        """Return status and content of a page."""
        try:
            with urllib.request.urlopen(self.url(page), timeout=PATIENCE) as answer:
                return answer.status, answer.read().decode()
        except urllib.error.HTTPError as error:
            with error:
                return error.code, error.read().decode()

    def metrics(self) -> dict[str, float]:
        """Return what the metrics show, by name."""
        families = text_string_to_metric_families(self.get("metrics")[1])
        return {s.name: s.value for family in families for s in family.samples}

    def taken(self, samples: int) -> bool:
        """Return whether so many samples have been taken."""
        return self.metrics()["streambasis_samples_total"] >= samples

    def send(self, number: signal.Signals) -> None:
        """Send a signal."""
        self.process.send_signal(number)

    def stop(self, number: signal.Signals = signal.SIGTERM) -> int:
        """Ask it to stop and return its exit code."""
        self.send(number)
        return self.process.wait(PATIENCE)

    def close(self) -> None:
        """End it, however it is."""
        self.process.kill()
        self.process.wait()
        assert self.process.stdin is not None
        self.process.stdin.close()
        if self._socket is not None:
            self._socket.close()
