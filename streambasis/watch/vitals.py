"""How a running daemon is: the readings that metrics and the health check show."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(slots=True)
class Vitals:
    """Readings of a run, written by the loop after each batch and read by whoever asks.

    Attributes
    ----------
    samples, novel : int
        Samples taken, and those beyond the limit of the squared prediction error.
    batches : int
        Batches taken.
    events, open_events : int
        Events so far, and those still open.
    spe, limit : float
        Of the newest sample.
    rank : int
        Directions of the basis.
    noise : float
        Variance per residual dimension.
    orthogonality : float
        Orthogonality defect at the last audit.
    renewals, audits, failed_audits : int
        Renewals of the basis, audits made, and audits that failed.
    sample_time : float or None
        Time of the newest sample in seconds from the Unix epoch, where the feed has time stamps,
        or counts seconds and these make it less than a year old.
    taken_at : float or None
        Clock, in seconds from the Unix epoch, when the newest batch was taken.
    committed_at : float or None
        The same for the last commit.
    snapshot_bytes : int
        Size of the last snapshot.
    queue, dropped, duplicates, malformed : int
        Samples that wait, and how many were dropped, recognised as taken before, or unreadable.
    connections, sessions_lost : int
        Connections made to a broker, and how often it had forgotten us since the one before.
    restarts : int
        Earlier processes of this run.
    unkept : str or None
        Why the disk does not take what the run keeps; None while it does.
    unsound : str or None
        What the last audit found wrong and did not repair; None while all is well.
    busy_since : float or None
        Monotonic clock when the batch in hand was taken up; None while the loop waits for one.
    """

    samples: int = 0
    novel: int = 0
    batches: int = 0
    events: int = 0
    open_events: int = 0
    spe: float = 0.0
    limit: float = 0.0
    rank: int = 0
    noise: float = 0.0
    orthogonality: float = 0.0
    renewals: int = 0
    audits: int = 0
    failed_audits: int = 0
    sample_time: float | None = None
    taken_at: float | None = None
    committed_at: float | None = None
    snapshot_bytes: int = 0
    queue: int = 0
    dropped: int = 0
    duplicates: int = 0
    malformed: int = 0
    connections: int = 0
    sessions_lost: int = 0
    restarts: int = 0
    unkept: str | None = None
    unsound: str | None = None
    busy_since: float | None = None
