"""What readers of decisions and events are promised: names, order and types."""

from __future__ import annotations

import pyarrow as pa

DECISION_COLUMNS = {
    "sample": pa.int64(),
    "time": pa.timestamp("ns"),
    "spe": pa.float64(),
    "t2": pa.float64(),
    "limit": pa.float64(),
    "t2_limit": pa.float64(),
    "novel": pa.bool_(),
    "extreme": pa.bool_(),
    "rank": pa.int32(),
    "event": pa.int64(),
}
EVENT_KEYS = [
    "event", "start", "end", "start_time", "end_time", "peak", "channels", "contributions",
    "repeats", "cosine", "label",
]  # fmt: skip
