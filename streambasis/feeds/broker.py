"""How to reach a broker: its address, who we are, and how much it may send ahead."""

from __future__ import annotations

import hashlib
import os
import platform
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

from streambasis.errors import FeedError

PORTS = {"mqtt": 1883, "mqtts": 8883}
USER = "STREAMBASIS_MQTT_USER"
PASSWORD = "STREAMBASIS_MQTT_PASSWORD"
CREDENTIALS = "STREAMBASIS_MQTT_CREDENTIALS"
WHEN_FULL = ("block", "drop-oldest")
VERSIONS = ("5", "3.1.1")

_URL = re.compile(r"(mqtts?)://(\[[^\]]*\]|[^:/\[\]]*)(?::(\d{1,5}))?/(.+)", re.DOTALL)
_PLAIN_ACKNOWLEDGED = 20


@dataclass(frozen=True, slots=True)
class Address:
    """Where a feed of messages comes from.

    Attributes
    ----------
    host, port
        Of the broker.
    topic : str
        The topic, with wildcards or without.
    tls : bool
        Whether the connection is encrypted and the broker proves its name.
    """

    host: str
    port: int
    topic: str
    tls: bool


def address_of(url: str) -> Address:
    """Return the parts of ``mqtt://host:port/topic`` or ``mqtts://host:port/topic``.

    Raises
    ------
    FeedError
        If it is no such address, or holds a user or a password; a message never repeats those.
    """
    scheme, _, rest = url.partition("://")
    if "@" in rest.partition("/")[0]:
        raise FeedError(
            f"{scheme}://...@{rest.partition('/')[0].rpartition('@')[2]}: a user and a password "
            "do not belong into an address, which others can see; set "
            f"{USER} and {PASSWORD}, or {CREDENTIALS} to a file that holds them"
        )
    match = _URL.fullmatch(url)
    if match is None or not match.group(2).strip("[]"):
        raise FeedError(f"{url}: not an address of the form {scheme}://host:port/topic")
    host, port, topic = match.group(2).strip("[]"), match.group(3), match.group(4)
    number = PORTS[match.group(1)] if port is None else int(port)
    if not 0 < number < 1 << 16:
        raise FeedError(f"{url}: port {number} is not between 1 and 65535")
    levels = topic.split("/")
    if (
        "\x00" in topic
        or len(topic.encode()) >= 1 << 16
        or "#" in levels[:-1]
        or any(len(level) > 1 and ("#" in level or "+" in level) for level in levels)
    ):
        raise FeedError(
            f"{url}: {topic!r} is no topic; '+' stands for one whole level, '#' for all at the end"
        )
    return Address(host, number, topic, match.group(1) == "mqtts")


@dataclass(frozen=True, slots=True)
class Broker:
    """How to reach a broker.

    Attributes
    ----------
    user, password : str or None
        Who we are; the password is never shown. Without TLS both travel in the clear.
    client : str or None
        The name under which the broker keeps our session: the same in every run, and no other
        client's: two of one name take the session from each other, which shows as a number of
        connections that keeps growing. None makes one of the machine's name and the address.
    version : str
        "5" or "3.1.1".
    queue : int
        Messages held in memory, at most 65535.
    when_full : str
        "block": the broker is not sent for more until there is room, and keeps what it can.
        "drop-oldest": the oldest message in the queue makes room, and is counted.
    acknowledged : int or None
        Messages that the broker sends before the first of them is acknowledged. None is ``queue``
        in version 5, which tells the broker so; in version 3.1.1 the broker alone decides, and
        None takes 20, the default of mosquitto.
    session : int
        Seconds for which the broker keeps our session while we are away (version 5).
    keepalive : int
        Seconds of silence after which the connection is probed.
    patience : float
        Seconds in which the first connection must succeed; later ones are tried for ever.
    ca_file, certificate_file, key_file : path or None
        For TLS: whom to trust instead of the system's list, and our own certificate.
    """

    user: str | None = None
    password: str | None = field(default=None, repr=False)
    client: str | None = None
    version: str = "5"
    queue: int = 2048
    when_full: str = "block"
    acknowledged: int | None = None
    session: int = 7 * 86_400
    keepalive: int = 15
    patience: float = 30.0
    ca_file: Path | None = None
    certificate_file: Path | None = None
    key_file: Path | None = None

    def __post_init__(self) -> None:
        if self.version not in VERSIONS:
            raise FeedError(f"version {self.version!r} is none of {', '.join(VERSIONS)}")
        if self.when_full not in WHEN_FULL:
            raise FeedError(f"when_full {self.when_full!r} is none of {', '.join(WHEN_FULL)}")
        if not 1 <= self.queue < 1 << 16:
            raise FeedError(f"queue {self.queue}: between 1 and 65535 messages")
        if self.acknowledged is not None and not 1 <= self.acknowledged < 1 << 16:
            raise FeedError(f"acknowledged {self.acknowledged}: between 1 and 65535 messages")

    @property
    def ahead(self) -> int:
        """Messages that the broker sends before the first of them is acknowledged."""
        if self.acknowledged is not None:
            return self.acknowledged
        if self.version == "3.1.1":
            return _PLAIN_ACKNOWLEDGED
        # to drop what is old there must be more on its way than the queue holds
        return self.queue if self.when_full == "block" else min(2 * self.queue, (1 << 16) - 1)

    def client_name(self, url: str) -> str:
        """Return the name under which the broker keeps the session."""
        if self.client is not None:
            return self.client
        made = hashlib.blake2b(f"{platform.node()} {url}".encode(), digest_size=8).hexdigest()
        return f"streambasis-{made}"


def credentials_of(environment: Mapping[str, str] = os.environ) -> tuple[str | None, str | None]:
    """Return user and password from the environment, or from the file that it names.

    Raises
    ------
    FeedError
        If the file cannot be read, or is not two lines, user and password.
    """
    user, password = environment.get(USER), environment.get(PASSWORD)
    path = environment.get(CREDENTIALS)
    if path is not None:
        try:
            with open(path, encoding="utf-8") as file:
                lines = file.read(4096).splitlines()
        except (OSError, UnicodeDecodeError) as error:
            reason = error.strerror if isinstance(error, OSError) else "it is not UTF-8 text"
            raise FeedError(f"{CREDENTIALS}: {path} cannot be read ({reason})") from None
        if len(lines) != 2 or not all(lines):
            raise FeedError(f"{CREDENTIALS}: {path} must hold two lines, user and password")
        user, password = user or lines[0], password or lines[1]
    if password is not None and user is None:
        raise FeedError(f"{PASSWORD} is set, but {USER} is not")
    return user, password
