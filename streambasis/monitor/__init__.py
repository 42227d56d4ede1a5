"""The novelty monitor: channel scaling, a basis, control limits, events and recurrence."""

from streambasis.monitor.events import Event
from streambasis.monitor.novelty import NoveltyMonitor
from streambasis.monitor.verdict import Verdict

__all__ = ["Event", "NoveltyMonitor", "Verdict"]
