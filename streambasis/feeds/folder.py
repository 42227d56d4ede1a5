"""A folder of files as one feed, in the order of their names."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from typing import Any

from streambasis.errors import FeedError
from streambasis.feeds.reading import FeedOptions, Piece, PieceFeed, Position

Opener = Callable[[Path, Sequence[str] | None, str | None, Position | None], PieceFeed]


class FolderFeed(PieceFeed):
    """Files that continue one another, each opened when the one before it ends.

    Parameters
    ----------
    path : Path
        The folder. Files whose names begin with a dot are passed over, as are folders.
    channels, time
        As of :func:`streambasis.feeds.open_feed`; the first file decides what is left open.
    options, position
        As of :class:`~streambasis.feeds.reading.PieceFeed`.
    opener : callable
        Opens one of the files.

    Notes
    -----
    Going on from a position takes the file of that position and those behind it in the order of
    names; a file that was added before it is not read.
    """

    kind = "folder"

    def __init__(
        self,
        path: Path,
        channels: Sequence[str] | None,
        time: str | None,
        options: FeedOptions,
        position: Position | None,
        opener: Opener,
    ) -> None:
        super().__init__(str(path), options, position)
        self._opener = opener
        try:
            entries = list(path.iterdir())
        except OSError as error:
            raise FeedError(f"{path}: cannot be read ({error.strerror})") from None
        files = sorted(
            (file for file in entries if file.is_file() and not file.name.startswith(".")),
            key=lambda file: file.name,
        )
        if not files:
            raise FeedError(f"{path}: a folder without files")
        inside = None
        if position is not None:
            files, inside = self._behind(files, position)
        self._files = files
        self._open = opener(files[0], channels, time, inside)
        self.columns = self._open.columns
        if self._open.rows is not None:
            sizes = [file.stat().st_size for file in files]
            self.rows = round(self._open.rows * sum(sizes) / max(1, sizes[0]))

    def _behind(self, files: list[Path], position: Position) -> tuple[list[Path], Position]:
        """Return the files from a position on, and the place inside the first of them."""
        name, inside = position.get("file"), position.get("inside")
        names = [file.name for file in files]
        if not isinstance(name, str) or not isinstance(inside, dict):
            raise FeedError(f"{self.name}: the position to go on from is damaged")
        if name not in names:
            raise FeedError(f"{self.name}: the run left off in {name!r}, which is not there")
        counts: dict[str, Any] = {"sample": position["sample"], "malformed": 0}
        return files[names.index(name) :], {**inside, **counts}

    def pieces(self) -> Iterator[Piece | None]:
        """Yield the samples, file by file."""
        for file in self._files:
            if file is not self._files[0]:
                self._open = self._opener(file, self.columns.channels, self.columns.time, None)
            feed = self._open
            for piece in feed.pieces():
                yield piece and _inside(piece, file.name, feed.kind)
            feed.close()

    def close(self) -> None:
        """Close the file that is open."""
        super().close()
        self._open.close()


def _inside(piece: Piece, name: str, kind: str) -> Piece:
    """Return a piece whose places also say which file they are in."""

    def place(count: int) -> Position:
        return {"file": name, "inside": {**piece.place(count), "kind": kind}}

    return Piece(piece.values, piece.times, place, piece.malformed)
