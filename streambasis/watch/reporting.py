"""What a run says of itself: to whoever wants to hear how it goes, and at its end."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

from streambasis.monitor import Event


class Reporter(Protocol):
    """Whoever wants to hear how a run goes."""

    def opened(self, event: Event) -> None:
        """Hear that an event has opened."""

    def closed(self, event: Event) -> None:
        """Hear that an event has closed."""

    def adopted(self, event: Event) -> None:
        """Hear that an event lasted so long that it counts as known behaviour from now on."""

    def advance(self, samples: int) -> None:
        """Hear how many samples have been read."""

    def warned(self, warning: str) -> None:
        """Hear what somebody must know, though it does not end the run."""


@dataclass(frozen=True, slots=True)
class Summary:
    """What a run came to.

    Attributes
    ----------
    samples : int
        Samples read.
    first_time, last_time : int or None
        Their first and last time in nanoseconds, where the feed has times.
    rank : int
        Directions of the basis at the end.
    noise : float
        Variance per residual dimension, in units of each channel's own noise.
    drift : float
        Largest principal angle between the baseline's subspace and today's, in radians.
    events, repeats, adopted : int
        Events, those that repeat an earlier one, and those adopted as known behaviour.
    seconds : float
        Time taken.
    orthogonality : float
        Orthogonality defect of the basis, |VVᴴ - I|₁ / (n·u); the contract is below 3.
    before : int
        Samples that the run held when it went on.
    """

    samples: int
    first_time: int | None
    last_time: int | None
    rank: int
    noise: float
    drift: float
    events: int
    repeats: int
    adopted: int
    seconds: float
    orthogonality: float
    before: int = 0
