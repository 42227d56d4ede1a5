"""Feeds: files, pipes and brokers, read as batches of named samples in bounded memory."""

from __future__ import annotations

from streambasis.feeds.broker import Broker
from streambasis.feeds.files import open_feed
from streambasis.feeds.keys import Keys
from streambasis.feeds.reading import (
    BATCH_ROWS,
    Batch,
    Feed,
    FeedOptions,
    Malformed,
    Position,
)

__all__ = [
    "BATCH_ROWS",
    "Batch",
    "Broker",
    "Feed",
    "FeedOptions",
    "Keys",
    "Malformed",
    "Position",
    "open_feed",
]
