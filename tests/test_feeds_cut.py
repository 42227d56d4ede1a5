"""Cutting pieces into batches: the same boundaries, everything once, every position right."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from streambasis.feeds.columns import Columns
from streambasis.feeds.reading import Batch, Malformed, Piece, Position, cut

ROWS = 8
COLUMNS = Columns(("a",), "time", 1)
# what a reader finds: True for a sample, False for a malformed row; pieces of them, and silence
FOUND = st.lists(st.none() | st.lists(st.booleans(), max_size=30), max_size=12)


def pieces_of(found: list[list[bool] | None], start: int) -> list[Piece | None]:
    """Return pieces whose positions count rows of both kinds, those before ``start`` left out."""
    pieces: list[Piece | None] = []
    first = 0
    for rows in found:
        if rows is None:
            pieces.append(None)
            continue
        kept = range(first, first + len(rows))[max(0, start - first) :]
        samples = [row for row in kept if rows[row - first]]
        faults = [
            (sum(sample < row for sample in samples), Malformed("feed", row, "bad", ""))
            for row in kept
            if not rows[row - first]
        ]
        end = first + len(rows)

        def place(count: int, samples: list[int] = samples, end: int = end) -> Position:
            return {"row": end if count == len(samples) else samples[count - 1] + 1}

        values = np.array(samples, float).reshape(-1, 1)
        pieces.append(Piece(values, np.array(samples, np.int64), place, faults))
        first = end
    return pieces


def given_by(found: list[list[bool] | None], start: int = 0, sample: int = 0) -> list[Batch]:
    """Return the batches of what is found from a row on."""
    return list(cut(pieces_of(found, start), COLUMNS, sample, ROWS))


@given(FOUND)
def test_everything_comes_once_and_in_order(found: list[list[bool] | None]) -> None:
    """Samples and malformed rows together are the rows that were found."""
    rows = [row for piece in found if piece is not None for row in piece]
    batches = given_by(found)
    samples = [int(value) for batch in batches for value in batch.values[:, 0]]
    faults = [fault.number for batch in batches for fault in batch.malformed]
    assert samples == [n for n, good in enumerate(rows) if good]
    assert faults == [n for n, good in enumerate(rows) if not good]
    for batch in batches:
        assert batch.times is not None
        assert batch.times.tolist() == batch.values[:, 0].tolist()


@given(FOUND)
def test_no_batch_reaches_over_a_multiple(found: list[list[bool] | None]) -> None:
    """Batches follow one another, and each ends at a multiple or where silence or the end is."""
    count = 0
    for batch in given_by(found):
        assert batch.first == count
        count += len(batch)
        assert batch.first // ROWS == (count - 1) // ROWS or len(batch) == 0
        assert batch.position["sample"] == count


@given(FOUND)
def test_the_rest_comes_from_every_position(found: list[list[bool] | None]) -> None:
    """Going on behind a batch gives the samples and malformed rows of all later batches."""
    whole = given_by(found)
    for done, batch in enumerate(whole, 1):
        rest = given_by(found, batch.position["row"], batch.position["sample"])
        assert np.concatenate([b.values for b in rest] or [np.empty((0, 1))]).tolist() == (
            np.concatenate([b.values for b in whole[done:]] or [np.empty((0, 1))]).tolist()
        )
        assert [f for b in rest for f in b.malformed] == [
            f for b in whole[done:] for f in b.malformed
        ]
