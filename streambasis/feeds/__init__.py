"""Feeds: files of samples, read as batches of named values in bounded memory."""

from __future__ import annotations

from streambasis.feeds.files import open_feed
from streambasis.feeds.reading import BATCH_ROWS, Batch, Feed

__all__ = ["BATCH_ROWS", "Batch", "Feed", "open_feed"]
