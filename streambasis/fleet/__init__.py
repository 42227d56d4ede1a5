"""Fleets: a monitor for each of many feeds, told apart by a key."""

from __future__ import annotations

from streambasis.fleet.fleet import Fleet

__all__ = ["Fleet"]
