"""A broker and a publisher on this machine, each a process of its own."""

from __future__ import annotations

import shutil
import socket
import subprocess
import sys
import time
from pathlib import Path
from typing import Self

LOOPBACK = "127.0.0.1"
TOPIC = "bench"
_PUBLISHER = """
import json, sys, time
import numpy as np
from paho.mqtt.client import MQTT_ERR_QUEUE_SIZE, Client
from paho.mqtt.enums import CallbackAPIVersion
host, topic = sys.argv[1:3]
port, count, rate, channels = map(int, sys.argv[3:])
client = Client(CallbackAPIVersion.VERSION2, client_id="bench-publisher", clean_session=False)
client.max_inflight_messages_set(0)
client.max_queued_messages_set(0)
client.reconnect_delay_set(1, 1)
client.connect(host, port)
client.loop_start()
rng = np.random.default_rng(1)
mixing = rng.normal(size=(3, channels))
rows = rng.normal(size=(1000, 3)) @ mixing + 0.3 * rng.normal(size=(1000, channels))
names = [f"c{i:02}" for i in range(channels)]
texts = [json.dumps(dict(zip(names, row.round(5).tolist())))[1:] for row in rows]
time.sleep(1)
start = time.perf_counter()
sent = 0
while sent < count:
    due = min(count, int((time.perf_counter() - start) * rate))
    while sent < due:
        head = f'{{"time": {time.time()}, "seq": {sent}, '
        if client.publish(topic, head + texts[sent % 1000], qos=1).rc == MQTT_ERR_QUEUE_SIZE:
            # an outage was so long that all of its 65,535 numbers wait for an answer
            break
        sent += 1
    time.sleep(0.0005)
print("sent", flush=True)
while client._out_messages:
    time.sleep(0.05)
"""


class Broker:
    """Debian's mosquitto on a free port, which keeps its sessions when it is ended.

    Parameters
    ----------
    folder : Path
        Where it keeps its configuration and its sessions.
    """

    def __init__(self, folder: Path) -> None:
        found = shutil.which("mosquitto", path="/usr/sbin:/usr/bin:/usr/local/sbin")
        if found is None:
            raise SystemExit("mosquitto is not installed: apt-get install mosquitto")
        with socket.socket() as probe:
            probe.bind((LOOPBACK, 0))
            self.port = int(probe.getsockname()[1])
        config = folder / "mosquitto.conf"
        config.write_text(
            f"listener {self.port} {LOOPBACK}\nallow_anonymous true\nuser root\n"
            f"persistence true\npersistence_location {folder}/\nmax_queued_messages 1000000\n"
        )
        self._command = [found, "-c", str(config)]
        self.start()

    @property
    def url(self) -> str:
        """Address of the topic."""
        return f"mqtt://{LOOPBACK}:{self.port}/{TOPIC}"

    def start(self) -> None:
        """Start it and wait until it listens."""
        self._process = subprocess.Popen(self._command, stderr=subprocess.DEVNULL)
        for _ in range(500):
            try:
                socket.create_connection((LOOPBACK, self.port), 1).close()
            except OSError:
                time.sleep(0.02)
            else:
                return
        raise SystemExit("mosquitto does not listen")

    def end(self) -> None:
        """End it as a service manager does."""
        self._process.terminate()
        self._process.wait()

    def publishing(self, count: int, rate: int, channels: int) -> subprocess.Popen[str]:
        """Start a process that publishes samples, each with its time and its number."""
        given = [LOOPBACK, TOPIC, str(self.port), str(count), str(rate), str(channels)]
        return subprocess.Popen(
            [sys.executable, "-c", _PUBLISHER, *given], stdout=subprocess.PIPE, text=True
        )

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.end()
