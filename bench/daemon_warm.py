"""Imported once by the server of processes, so that each of its children is at work at once."""

from __future__ import annotations

import streambasis.watch.loop  # noqa: F401 - what the children need
from streambasis import NoveltyMonitor, warm_up

warm_up(NoveltyMonitor)
