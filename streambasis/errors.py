"""What can go wrong, by name.

Every error of the package derives from :class:`StreambasisError` and from the builtin a caller
would expect, so both ``except ValueError`` and ``except StreambasisError`` work.
"""

from __future__ import annotations


class StreambasisError(Exception):
    """Root of every error this package raises on purpose."""


class SampleError(StreambasisError, ValueError):
    """A sample or a batch of samples that cannot be taken; nothing was changed."""


class SampleTypeError(StreambasisError, TypeError):
    """Samples of a kind that cannot be converted, such as complex values for a real basis."""


class SettingError(StreambasisError, ValueError):
    """A setting outside its range; the message names the setting, the value and the range."""


class UnknownSampleError(StreambasisError, KeyError):
    """A sample id that was never given out or has already left the window."""

    def __str__(self) -> str:
        # KeyError would show the repr of the message, quotes and all
        return str(self.args[0]) if self.args else ""


class NumericalError(StreambasisError, ArithmeticError):
    """A computation that cannot give a sound result; the message says what to change."""


class SnapshotError(StreambasisError, ValueError):
    """A snapshot that cannot be trusted; the message names the file and what is wrong."""


class SnapshotFileError(SnapshotError, OSError):
    """A snapshot that the operating system would not read or write; the old file is untouched.

    Parameters
    ----------
    errno, strerror, filename
        As of an OSError.
    """

    def __init__(self, errno: int | None, strerror: str, filename: str) -> None:
        # ValueError comes before OSError among the bases and would leave these three unset
        super().__init__(errno, strerror, filename)
        self.errno, self.strerror, self.filename = errno, strerror, filename

    def __str__(self) -> str:
        return f"{self.filename}: {self.strerror}"


class SnapshotMissingError(SnapshotFileError, FileNotFoundError):
    """A snapshot that is not there."""


class FeedError(StreambasisError, ValueError):
    """A feed that cannot be read; the message names the file, the column or the row."""


class HomeError(StreambasisError, OSError):
    """The folder that keeps a run cannot be used; the message names it and the way out."""


class MetricsError(StreambasisError, OSError):
    """The address for metrics cannot be used; the message names it and the way out."""


class RecordError(StreambasisError, ValueError):
    """A kept run that cannot be read; the message names the folder or file and what is wrong."""


class FleetError(StreambasisError, RuntimeError):
    """A fleet that cannot go on: it is closed, or stopped in the middle of a batch."""


class EngineError(StreambasisError, RuntimeError):
    """An engine such as Apache Spark that lacks what it needs; the message says what to install."""
