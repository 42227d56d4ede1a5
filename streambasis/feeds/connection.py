"""A connection to a broker that is kept up: messages into a bounded queue, acknowledged on demand.

Delivery is QoS 1 with a persistent session and manual acknowledgement: what was not acknowledged
is sent again after a reconnect, by whichever side was away.
"""

from __future__ import annotations

import ssl
import threading
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import paho.mqtt.client as paho
from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties
from paho.mqtt.subscribeoptions import SubscribeOptions

from streambasis.errors import FeedError
from streambasis.feeds.broker import Address, Broker
from streambasis.feeds.payloads import MOST_PAYLOAD
from streambasis.feeds.sources import PATIENCE

QUEUE_BYTES = 1 << 26
"""Payload bytes held in memory; beyond that the connection waits, whatever the number."""

_PACKET_BYTES = MOST_PAYLOAD + (1 << 17)
_LONGEST_DELAY = 8


@dataclass(frozen=True, slots=True)
class Receipt:
    """What acknowledges a message, on the connection that it came by."""

    connection: int
    mid: int


@dataclass(frozen=True, slots=True)
class Message:
    """A message as it came; without a receipt where nothing is to be acknowledged."""

    topic: str
    payload: bytes
    receipt: Receipt | None


class Connection:
    """Subscribes to a topic and keeps the connection up until closed.

    Parameters
    ----------
    name : str
        What the feed is called in messages: its address.
    address : Address
        The parts of it.
    broker : Broker
        How to reach it.
    stop : threading.Event
        Set by whoever wants a waiting feed to end.
    known : bool
        The broker should know us from an earlier run.

    Raises
    ------
    FeedError
        If the TLS files cannot be used.

    Notes
    -----
    The network thread belongs to paho. Whatever goes wrong in a callback is caught, kept and
    raised where messages are taken; so is the end of the thread itself.
    """

    def __init__(
        self, name: str, address: Address, broker: Broker, stop: threading.Event, known: bool
    ) -> None:
        self._name, self._address, self._broker, self._stop = name, address, broker, stop
        self._change = threading.Condition()
        self._queue: deque[Message] = deque()
        self._bytes = 0
        self._connection = 0
        self._closed = False
        self._failure: FeedError | None = None
        self._trouble = ""
        self._known = known
        self.connections = self.dropped = self.retained = self.sessions_lost = 0
        self._client = self._made_client(broker.client_name(name))
        self._properties = None
        if broker.version == "5":
            self._properties = Properties(PacketTypes.CONNECT)  # type: ignore[no-untyped-call]
            self._properties.SessionExpiryInterval = broker.session
            self._properties.ReceiveMaximum = broker.ahead
            self._properties.MaximumPacketSize = _PACKET_BYTES
        self._thread = self._started(broker.client_name(name))

    def _made_client(self, client_name: str) -> paho.Client:
        broker = self._broker
        five = broker.version == "5"
        client = paho.Client(
            CallbackAPIVersion.VERSION2,
            client_id=client_name,
            # a persistent session; version 5 says so when it connects
            clean_session=None if five else False,
            protocol=MQTTProtocolVersion.MQTTv5 if five else MQTTProtocolVersion.MQTTv311,
            manual_ack=True,
        )
        if broker.user is not None:
            client.username_pw_set(broker.user, broker.password)
        if self._address.tls:
            client.tls_set_context(self._tls())
        client.reconnect_delay_set(1, _LONGEST_DELAY)
        client.on_connect = self._guarded(self._on_connect)
        client.on_connect_fail = self._guarded(self._on_connect_fail)
        client.on_disconnect = self._guarded(self._on_disconnect)
        client.on_subscribe = self._guarded(self._on_subscribe)
        client.on_message = self._guarded(self._on_message)
        return client

    def _tls(self) -> ssl.SSLContext:
        broker = self._broker
        try:
            context = ssl.create_default_context(cafile=broker.ca_file)
            if broker.certificate_file is not None:
                context.load_cert_chain(broker.certificate_file, broker.key_file)
        except (OSError, ssl.SSLError) as error:
            raise FeedError(f"{self._name}: the TLS files cannot be used ({error})") from None
        return context

    def _started(self, client_name: str) -> threading.Thread:
        host, port = self._address.host, self._address.port
        if self._broker.version == "5":
            self._client.connect_async(
                host, port, self._broker.keepalive, clean_start=False, properties=self._properties
            )
        else:
            self._client.connect_async(host, port, self._broker.keepalive)
        before = set(threading.enumerate())
        self._client.loop_start()
        (thread,) = (
            thread
            for thread in threading.enumerate()
            if thread not in before and client_name in thread.name
        )
        return thread

    def _guarded(self, callback: Callable[..., None]) -> Callable[..., None]:
        """Return a callback whose exceptions reach whoever takes messages, not paho's thread."""

        def call(*arguments: Any) -> None:
            try:
                callback(*arguments)
            except Exception as error:
                self._fail(
                    FeedError(f"{self._name}: {type(error).__name__} in a callback: {error}")
                )

        return call

    def _fail(self, error: FeedError) -> None:
        with self._change:
            self._failure = self._failure or error
            self._change.notify_all()

    # the callbacks, all of which run in the network thread

    def _on_connect(
        self, client: paho.Client, userdata: Any, flags: Any, reason: Any, properties: Any
    ) -> None:
        del userdata, properties
        if reason.is_failure:
            self._refused(f"the broker refuses the connection ({reason})")
            return
        with self._change:
            self._connection += 1
            self.sessions_lost += self._known and not flags.session_present
            self._known = True
        # retained messages are what was sent before anybody listened: no samples of now
        if self._broker.version == "5":
            options = SubscribeOptions(qos=1, retainHandling=SubscribeOptions.RETAIN_DO_NOT_SEND)
            client.subscribe(self._address.topic, options=options)
        else:
            client.subscribe(self._address.topic, qos=1)

    def _refused(self, reason: str) -> None:
        """Give up where the very first connection is refused; later ones are tried again."""
        with self._change:
            self._trouble = reason
        if not self.connections:
            self._fail(FeedError(f"{self._name}: {reason}"))

    def _on_connect_fail(self, client: paho.Client, userdata: Any) -> None:
        del client, userdata
        with self._change:
            self._trouble = f"nothing answers at {self._address.host}:{self._address.port}"

    def _on_subscribe(
        self, client: paho.Client, userdata: Any, mid: int, reasons: list[Any], properties: Any
    ) -> None:
        del client, userdata, mid, properties
        for reason in reasons:
            if reason.is_failure:
                self._refused(f"the broker refuses the topic {self._address.topic!r} ({reason})")
                return
            if reason.value < 1:
                self._refused(f"the broker grants {reason} only, and messages could be lost")
                return
        with self._change:
            self.connections += 1
            self._trouble = ""
            self._change.notify_all()

    def _on_disconnect(
        self, client: paho.Client, userdata: Any, flags: Any, reason: Any, properties: Any
    ) -> None:
        del client, userdata, flags, properties
        with self._change:
            # acknowledgements of what came by this connection are worth nothing from now on
            self._connection += 1
            self._trouble = self._trouble or f"the connection is lost ({reason})"
            self._change.notify_all()

    def _on_message(self, client: paho.Client, userdata: Any, message: paho.MQTTMessage) -> None:
        del client, userdata
        # of one that is too large, enough to see that it is
        payload = bytes(message.payload[: MOST_PAYLOAD + 1])
        with self._change:
            receipt = Receipt(self._connection, message.mid) if message.qos else None
            if message.retain:
                self.retained += 1
                self._acknowledge(receipt)
                return
            while self._full(len(payload)) and not self._closed:
                if self._broker.when_full == "drop-oldest":
                    oldest = self._queue.popleft()
                    self._bytes -= len(oldest.payload)
                    self.dropped += 1
                    self._acknowledge(oldest.receipt)
                else:
                    # longer than the keep-alive, and the broker drops the connection; it sends
                    # again whatever was not acknowledged
                    self._change.wait(PATIENCE)
            self._queue.append(Message(_topic_of(message), payload, receipt))
            self._bytes += len(payload)
            self._change.notify_all()

    def _full(self, more: int) -> bool:
        """Return whether there is no room; one message always has room."""
        return bool(self._queue) and (
            len(self._queue) >= self._broker.queue or self._bytes + more > QUEUE_BYTES
        )

    # what whoever takes messages calls

    def take(self, most: int, wait: float) -> list[Message]:
        """Return the oldest messages, in order; none when none came for a while.

        Parameters
        ----------
        most : int
            Messages at most.
        wait : float
            Seconds given to more messages once there is one.

        Raises
        ------
        FeedError
            If the broker refuses us, or the network thread has ended.
        """
        with self._change:
            if not self._queue:
                self._change.wait(PATIENCE)
            self._check()
            if not self._queue:
                return []
        self._stop.wait(wait)
        with self._change:
            taken = [self._queue.popleft() for _ in range(min(most, len(self._queue)))]
            self._bytes -= sum(len(message.payload) for message in taken)
            self._change.notify_all()
        return taken

    def _check(self) -> None:
        if self._failure is not None:
            raise self._failure
        if not self._thread.is_alive():
            raise FeedError(f"{self._name}: the network thread has ended")

    def wait_for_first(self) -> None:
        """Wait until the first connection stands.

        Raises
        ------
        FeedError
            If it does not within the broker's patience.
        """
        for _ in range(max(1, round(self._broker.patience / PATIENCE))):
            with self._change:
                self._change.wait_for(self._settled, PATIENCE)
                self._check()
                if self._settled() or self._stop.is_set():
                    return
        raise FeedError(
            f"{self._name}: no connection within {self._broker.patience:g} s "
            f"({self._trouble or 'no answer'})"
        )

    def _settled(self) -> bool:
        # a broker that knows us sends messages before it confirms the topic, perhaps more than
        # there is room for: nothing further is heard of it until some are taken
        return self.connections > 0 or bool(self._queue) or self._failure is not None

    def acknowledge(self, receipts: list[Receipt]) -> None:
        """Acknowledge messages; a receipt of an earlier connection is dropped."""
        with self._change:
            for receipt in receipts:
                self._acknowledge(receipt)

    def _acknowledge(self, receipt: Receipt | None) -> None:
        # under the lock, so that the connection cannot change in between
        if receipt is not None and receipt.connection == self._connection:
            self._client.ack(receipt.mid, 1)

    @property
    def queued(self) -> int:
        """Messages that wait to be taken."""
        return len(self._queue)

    @property
    def trouble(self) -> str:
        """What keeps the connection down; empty while it is up."""
        return self._trouble

    def close(self) -> None:
        """Disconnect; the broker keeps the session."""
        with self._change:
            self._closed = True
            self._change.notify_all()
        self._client.disconnect()
        self._client.loop_stop()


def _topic_of(message: paho.MQTTMessage) -> str:
    try:
        return message.topic
    except UnicodeDecodeError:
        # against the rules of the protocol, and no reason to end the feed
        return "(a topic that is not UTF-8)"
