"""A real broker for tests: Debian's mosquitto on a free loopback port, and a line to cut."""

from __future__ import annotations

import shutil
import signal
import socket
import subprocess
import threading
import time
from abc import ABC, abstractmethod
from collections.abc import Iterable
from pathlib import Path
from typing import Any, Self

import paho.mqtt.client as paho
import pytest
from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties

LOOPBACK = "127.0.0.1"
START_SECONDS = 10.0


def program(name: str) -> str:
    """Return the path of a program; without it the test is skipped (a failure in ``.ci/run``)."""
    found = shutil.which(name, path="/usr/sbin:/usr/bin:/usr/local/sbin:/usr/local/bin")
    if found is None:
        pytest.skip(f"{name} is not installed: apt-get install mosquitto openssl")
    return found


def free_port() -> int:
    """Return a port of the loopback address that nobody listens on."""
    with socket.socket() as probe:
        probe.bind((LOOPBACK, 0))
        return int(probe.getsockname()[1])


class Held(ABC):
    """Something that ends with the block that holds it, however that ends."""

    @abstractmethod
    def close(self) -> None:
        """End it."""

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


class Mosquitto(Held):
    """A broker with a configuration and a folder of its own.

    Parameters
    ----------
    folder : Path
        Where it keeps its configuration and its sessions.
    settings : str
        Lines of configuration beside the usual ones.
    """

    def __init__(self, folder: Path, settings: str = "allow_anonymous true\n") -> None:
        self.port = free_port()
        self._folder = folder
        self._config = folder / "mosquitto.conf"
        self._config.write_text(
            f"listener {self.port} {LOOPBACK}\nuser root\npersistence true\n"
            f"persistence_location {folder}/\nmax_queued_messages 100000\n{settings}"
        )
        self.start()

    def start(self) -> None:
        """Start it and wait until it listens."""
        command = [program("mosquitto"), "-c", str(self._config)]
        self._log = (self._folder / "mosquitto.log").open("ab")
        self._process = subprocess.Popen(command, stderr=self._log, stdout=self._log)
        deadline = time.monotonic() + START_SECONDS
        while True:
            try:
                socket.create_connection((LOOPBACK, self.port), 1).close()
            except OSError:
                log = (self._folder / "mosquitto.log").read_text()
                assert self._process.poll() is None, f"mosquitto ended: {log}"
                assert time.monotonic() < deadline, f"mosquitto does not listen: {log}"
                time.sleep(0.02)
            else:
                return

    def close(self) -> None:
        """End it as a service manager does, so that it keeps its sessions."""
        self._process.send_signal(signal.SIGTERM)
        self._process.wait(10)
        self._log.close()

    def url(self, topic: str = "plant", port: int | None = None, scheme: str = "mqtt") -> str:
        """Return the address of a topic."""
        return f"{scheme}://{LOOPBACK}:{port or self.port}/{topic}"


class Publisher(Held):
    """A client that publishes with QoS 1 and waits until the broker has it."""

    def __init__(self, port: int, client: str = "publisher", **login: str) -> None:
        self._client = paho.Client(
            CallbackAPIVersion.VERSION2,
            client_id=client,
            clean_session=False,
            protocol=MQTTProtocolVersion.MQTTv311,
        )
        if login:
            self._client.username_pw_set(login["user"], login["password"])
        self._client.reconnect_delay_set(1, 1)
        self._client.max_queued_messages_set(0)
        self._client.connect(LOOPBACK, port, 5)
        self._client.loop_start()

    def send(
        self, payloads: Iterable[str | bytes], topic: str = "plant", *, retain: bool = False
    ) -> list[paho.MQTTMessageInfo]:
        """Publish without waiting."""
        return [self._client.publish(topic, p, qos=1, retain=retain) for p in payloads]

    def publish(self, payloads: Iterable[str | bytes], topic: str = "plant", **how: bool) -> None:
        """Publish and wait until the broker has all of it."""
        for info in self.send(payloads, topic, **how):
            info.wait_for_publish(20)
            assert info.is_published()

    def close(self) -> None:
        """Disconnect."""
        self._client.disconnect()
        self._client.loop_stop()


def make_session(port: int, client: str, topic: str = "plant", *, version: str = "5") -> None:
    """Have a broker keep a session, so that what is published from now on waits for us."""
    five = version == "5"
    subscriber = paho.Client(
        CallbackAPIVersion.VERSION2,
        client_id=client,
        clean_session=None if five else False,
        protocol=MQTTProtocolVersion.MQTTv5 if five else MQTTProtocolVersion.MQTTv311,
    )
    done = threading.Event()
    subscriber.on_subscribe = lambda *_: done.set()
    given: dict[str, Any] = {}
    if five:
        given["properties"] = Properties(PacketTypes.CONNECT)
        given["properties"].SessionExpiryInterval = 3600
        given["clean_start"] = False
    subscriber.connect(LOOPBACK, port, **given)
    subscriber.loop_start()
    subscriber.subscribe(topic, qos=1)
    assert done.wait(5)
    subscriber.disconnect()
    subscriber.loop_stop()


class Line(Held):
    """A line between a client and a broker that can be frozen: nothing passes, nothing closes."""

    def __init__(self, port: int) -> None:
        self._to = port
        self._open = threading.Event()
        self._open.set()
        self._sockets: list[socket.socket] = []
        self._listener = socket.create_server((LOOPBACK, 0))
        self.port = int(self._listener.getsockname()[1])
        threading.Thread(target=self._accept, daemon=True).start()

    def freeze(self) -> None:
        """Let nothing pass."""
        self._open.clear()

    def thaw(self) -> None:
        """Let everything pass again."""
        self._open.set()

    def _accept(self) -> None:
        while True:
            try:
                near, _ = self._listener.accept()
                far = socket.create_connection((LOOPBACK, self._to), 5)
            except OSError:
                return
            self._sockets += [near, far]
            for one, other in ((near, far), (far, near)):
                threading.Thread(target=self._pass, args=(one, other), daemon=True).start()

    def _pass(self, one: socket.socket, other: socket.socket) -> None:
        try:
            while data := one.recv(1 << 16):
                self._open.wait()
                other.sendall(data)
            other.shutdown(socket.SHUT_WR)
        except OSError:
            # either side has gone away, which is what a line is there to pass on
            other.close()

    def close(self) -> None:
        """Close it and all that runs through it."""
        self._open.set()
        self._listener.close()
        for end in self._sockets:
            end.close()
