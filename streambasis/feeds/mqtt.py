"""Messages of an MQTT broker as a feed: acknowledged after the commit, duplicates told apart."""

from __future__ import annotations

import base64
from bisect import bisect_right
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from streambasis.errors import FeedError
from streambasis.feeds.broker import Broker, address_of, credentials_of
from streambasis.feeds.columns import Columns
from streambasis.feeds.connection import Connection, Message, Receipt
from streambasis.feeds.objects import RowError
from streambasis.feeds.payloads import ID_BYTES, Content, PayloadReader, columns_in
from streambasis.feeds.reading import (
    BATCH_ROWS,
    FeedOptions,
    Malformed,
    Piece,
    PieceFeed,
    Position,
    shortened,
    whole_number,
)
from streambasis.feeds.sources import PATIENCE

REMEMBERED = 4
"""Messages remembered per message sent ahead, beside all that are not acknowledged. A broker should
need 1; mosquitto 2.0.11 does not count what it sends again after a reconnect, and was seen to send
twice what it may, or any number in a session that somebody began without a limit."""

LEAST_REMEMBERED = 1024

KNOWN = 1 << 15
"""Messages remembered while the process lives, at least: a broker that was restarted was seen to
send again what had been acknowledged 1,700 messages before. The position holds fewer, since it is
written with every commit."""

MOST_LOOKED_AT = 100
"""Messages that are looked at for one that shows the channels."""


class MqttFeed(PieceFeed):
    """The messages of a topic, from the first that no earlier run has committed.

    Parameters
    ----------
    url : str
        ``mqtt://host:port/topic`` or ``mqtts://host:port/topic``.
    channels, time
        As of :func:`streambasis.feeds.open_feed`. What is left open is told by the first message,
        for which the opening waits; with a position and channels nothing is left open.
    options, position
        As of :class:`~streambasis.feeds.reading.PieceFeed`. Where the options name no user, the
        environment does.

    Raises
    ------
    FeedError
        If the broker cannot be reached or refuses us, or the first message does not fit.

    Notes
    -----
    At least once: a message is acknowledged when a position behind it is committed, and sent again
    until then. Exactly once where a payload has a time or a sequence number: the position holds
    what tells the newest messages apart. Acknowledgements go out in the order of the messages, so
    what can come again is what has not been acknowledged, or has been a moment ago; that, and four
    times as many as the broker may send before the first of them is acknowledged, are remembered
    (see REMEMBERED), and more than that while the process lives (see KNOWN).
    """

    kind = "messages"
    live = True
    queues = True

    def __init__(
        self,
        url: str,
        channels: Sequence[str] | None,
        time: str | None,
        options: FeedOptions,
        position: Position | None,
    ) -> None:
        address = address_of(url)
        super().__init__(url, options, position)
        broker = options.broker or Broker()
        if broker.user is None:
            user, password = credentials_of()
            broker = replace(broker, user=user, password=password)
        self._broker = broker
        self._serial = self._committed = 0
        self._ids = b""
        self._partial: tuple[bytes, int] | None = None
        if position is not None:
            self._go_on(position)
        # what was taken already, and by which message
        self._known = {
            self._ids[at : at + ID_BYTES]: self._serial for at in range(0, len(self._ids), ID_BYTES)
        }
        self._receipts: dict[int, list[Receipt]] = {}
        self._duplicates = 0
        self._looked_at: list[Message] = []
        self._connection = Connection(url, address, broker, options.stop, position is not None)
        try:
            self._connection.wait_for_first()
            if position is not None and channels is not None:
                self.columns = self._same_columns(position, channels)
            else:
                self.columns = self._first_columns(channels, time)
        except BaseException:
            self._connection.close()
            raise
        self._reader = PayloadReader(self.name, self.columns)

    def _go_on(self, position: Position) -> None:
        self._serial = self._committed = whole_number(self.name, position, "serial")
        try:
            self._ids = base64.b64decode(position["ids"], validate=True)
            partial = position["partial"]
            if partial is not None:
                rows = whole_number(self.name, dict(partial), "rows")
                self._partial = (bytes.fromhex(partial["id"]), rows)
        except (KeyError, TypeError, ValueError):
            raise FeedError(f"{self.name}: the position to go on from is damaged") from None
        self._ids = self._ids[: len(self._ids) // ID_BYTES * ID_BYTES]

    def _same_columns(self, position: Position, channels: Sequence[str]) -> Columns:
        """Return the columns of an earlier run."""
        time, unit = position.get("time"), position.get("unit")
        if not isinstance(time, str | None) or not isinstance(unit, int | None):
            raise FeedError(f"{self.name}: the position to go on from is damaged")
        return Columns(tuple(channels), time, unit)

    def _first_columns(self, channels: Sequence[str] | None, time: str | None) -> Columns:
        """Wait for the first message that shows the channels; keep all that came until then."""
        reason = "the feed was asked to stop before the first message came"
        while not self.options.stop.is_set() and len(self._looked_at) < MOST_LOOKED_AT:
            for message in self._connection.take(1, 0.0):
                self._looked_at.append(message)
                try:
                    return columns_in(self.name, message.payload, channels, time)
                except RowError as error:
                    reason = f"none of the first messages holds samples ({error})"
                    if self.options.strict:
                        raise FeedError(f"{self.name}, message 1: {error}") from None
        raise FeedError(f"{self.name}: {reason}")

    @property
    def due(self) -> bool:
        """Whether the broker may soon hold messages back until some are acknowledged."""
        return len(self._receipts) >= (self._broker.ahead + 1) // 2

    @property
    def counts(self) -> dict[str, int]:
        """Malformed rows, duplicates, dropped messages, messages in the queue, connections.

        A session is lost when the broker has forgotten us: what was sent meanwhile never comes.
        """
        connection = self._connection
        return {
            **super().counts,
            "duplicates": self._duplicates,
            "dropped": connection.dropped,
            "retained": connection.retained,
            "queued": connection.queued,
            "connections": connection.connections,
            "sessions_lost": connection.sessions_lost,
        }

    @property
    def trouble(self) -> str:
        """What keeps the connection down; empty while it is up."""
        return self._connection.trouble

    def commit(self, position: Position) -> None:
        """Acknowledge the messages up to a position, in the thread that reads the batches."""
        self._committed = max(self._committed, whole_number(self.name, position, "serial"))
        done = [serial for serial in self._receipts if serial <= self._committed]
        for serial in sorted(done):
            self._connection.acknowledge(self._receipts.pop(serial))

    def pieces(self) -> Iterator[Piece | None]:
        """Yield the samples as messages bring them."""
        wait = self.options.wait or PATIENCE
        messages, self._looked_at = self._looked_at, []
        while True:
            if messages:
                yield self._piece(messages)
            yield None
            if self.options.stop.is_set():
                return
            messages = self._connection.take(BATCH_ROWS, wait)

    def _piece(self, messages: list[Message]) -> Piece:
        remembered = self._remembered + len(messages)
        gathered = _Gathered(self._serial, self._ids, remembered, self.columns)
        for message in messages:
            try:
                content = self._reader.read(message.topic, message.payload)
            except RowError as error:
                self._note(message)
                gathered.add_fault(self._malformed_row(message, str(error)), self._serial)
                continue
            if self._is_known(content, message):
                continue
            self._note(message, content.id)
            skipped = self._skipped(content)
            gathered.add(content, self._serial, skipped)
            for before, reason in content.faults:
                if before >= skipped:
                    gathered.faults.append(
                        (
                            gathered.count - len(content.values) + before,
                            self._malformed_row(message, reason),
                        )
                    )
        piece = gathered.piece()
        self._ids = gathered.ids_behind(len(gathered.entries))
        return piece

    @property
    def _remembered(self) -> int:
        pending = self._serial - self._committed
        return pending + max(LEAST_REMEMBERED, REMEMBERED * self._broker.ahead)

    def _note(self, message: Message, identity: bytes | None = None) -> None:
        """Give a message its number, and keep what acknowledges it and what tells it again."""
        self._serial += 1
        if message.receipt is not None:
            self._receipts[self._serial] = [message.receipt]
        if identity is not None:
            self._known[identity] = self._serial
            while len(self._known) > max(KNOWN, self._remembered):
                del self._known[next(iter(self._known))]

    def _is_known(self, content: Content, message: Message) -> bool:
        """Return whether a message has come before; see that it is acknowledged with that one."""
        original = None if content.id is None else self._known.get(content.id)
        if original is None:
            return False
        self._duplicates += 1
        if message.receipt is not None:
            if original <= self._committed:
                self._connection.acknowledge([message.receipt])
            else:
                self._receipts.setdefault(original, []).append(message.receipt)
        return True

    def _skipped(self, content: Content) -> int:
        """Return how many samples of a message an earlier run has taken already."""
        if self._partial is None or content.id != self._partial[0]:
            return 0
        rows, self._partial = self._partial[1], None
        return min(rows, len(content.values))

    def _malformed_row(self, message: Message, reason: str) -> Malformed:
        if self.options.strict:
            raise FeedError(f"{self.name}, message {self._serial}: {shortened(reason.encode())}")
        text = "" if message.payload.startswith(b"\xff") else shortened(message.payload)
        # topic and reason may hold what somebody sent
        topic, reason = shortened(message.topic.encode()), shortened(reason.encode())
        return Malformed(topic, self._serial, reason, text, "message")

    def close(self) -> None:
        """Disconnect; the broker keeps what was not acknowledged."""
        self._connection.close()


class _Gathered:
    """Messages that make one piece, and where each of them ends."""

    def __init__(self, serial: int, ids: bytes, remembered: int, columns: Columns) -> None:
        self._columns = columns
        self._serial_before = serial
        self._ids_before = ids
        self._most = remembered * ID_BYTES
        self.entries: list[_Entry] = []
        self.faults: list[tuple[int, Malformed]] = []
        self.count = 0
        self._values: list[NDArray[np.float64]] = []
        self._times: list[NDArray[np.int64]] = []

    def add(self, content: Content, serial: int, skipped: int) -> None:
        values = content.values[skipped:]
        self._values.append(values)
        if content.times is not None:
            self._times.append(content.times[skipped:])
        self.entries.append(_Entry(serial, content.id, self.count, skipped))
        self.count += len(values)

    def add_fault(self, row: Malformed, serial: int) -> None:
        self.faults.append((self.count, row))
        self.entries.append(_Entry(serial, None, self.count, 0))

    def piece(self) -> Piece:
        values = np.concatenate([np.empty((0, len(self._columns.channels))), *self._values])
        times = None
        if self._columns.time is not None:
            times = np.concatenate([np.empty(0, np.int64), *self._times])
        return Piece(values, times, self._place, self.faults)

    def ids_behind(self, entries: int) -> bytes:
        """Return what tells the messages apart that were taken, so many of these included."""
        ids = b"".join(entry.id or b"" for entry in self.entries[:entries])
        return (self._ids_before + ids)[-self._most :]

    def _place(self, count: int) -> Position:
        whole = len(self.entries)
        partial = None
        if count < self.count:
            # the entry that the next sample is in
            whole = bisect_right(self.entries, count, key=lambda entry: entry.start) - 1
            entry = self.entries[whole]
            # malformed messages right before it are reported with it, and so come again with it
            while whole and self.entries[whole - 1].start == count:
                whole -= 1
            if count > entry.start and entry.id is not None:
                rows = count - entry.start + entry.skipped
                partial = {"id": entry.id.hex(), "rows": rows}
        serial = self.entries[whole - 1].serial if whole else self._serial_before
        ids = base64.b64encode(self.ids_behind(whole)).decode()
        return {
            "serial": serial,
            "ids": ids,
            "partial": partial,
            "time": self._columns.time,
            "unit": self._columns.unit,
        }


@dataclass(frozen=True, slots=True)
class _Entry:
    """A message in a piece: its number, its identity, its first sample, samples left out of it."""

    serial: int
    id: bytes | None
    start: int
    skipped: int
