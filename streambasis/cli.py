"""The ``streambasis`` command: arguments in, exit code out.

This module imports nothing but the standard library, so that the help appears at once and a
missing extra can be named instead of shown as a traceback.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Sequence

from streambasis._version import __version__

CAUTION = (
    "streambasis is advisory. It is not a protective or safety-instrumented function; machine "
    "protection, alarms and trips follow the applicable local codes and standards and the "
    "judgement of licensed practitioners."
)

OK, BUG, USAGE, FEED, OUTPUT, EXTRA, SNAPSHOT, PIPE = 0, 1, 2, 3, 4, 5, 6, 141
EXIT_CODES = (
    (OK, "done, or stopped by Ctrl-C or SIGTERM with everything so far kept"),
    (BUG, "an error inside streambasis; --debug shows where"),
    (USAGE, "an argument or a setting that cannot be used"),
    (FEED, "the feed or kept run cannot be read, does not fit, or is shorter than the baseline"),
    (OUTPUT, "a file or the folder of --home cannot be used, or --metrics cannot be served"),
    (EXTRA, "a package that the command needs is not installed"),
    (SNAPSHOT, "a snapshot is missing or damaged, or does not fit the one it is compared with"),
    (PIPE, "whoever read the output went away"),
)

SUMMARIES = {
    "watch": "Watch a feed and report what it has not shown before.",
    "report": "Draw what a run has kept, on one page or as pictures.",
    "show": "Show what a snapshot holds.",
    "check": "Check a file of settings without running.",
    "compare": "Show how far two snapshots are apart, and on which channels.",
}
"""The commands, each with its one line of help, in the order in which one meets them."""


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line and return its exit code.

    Parameters
    ----------
    arguments : sequence of str, optional
        Instead of those of the process.
    """
    given = list(sys.argv[1:] if arguments is None else arguments)
    try:
        from streambasis.commands import run
    except ModuleNotFoundError as error:
        if error.name is None or error.name.partition(".")[0] == "streambasis":
            raise
        return _without_extra(given, error.name)
    try:
        code = run(given)
        sys.stdout.flush()
    except BrokenPipeError:
        # the interpreter flushes standard output once more at exit; let that go nowhere
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return PIPE
    return code


def _without_extra(given: list[str], missing: str) -> int:
    """Answer as far as that goes without the packages of the ``watch`` extra."""
    advice = f"the commands need {missing!r}: pip install 'streambasis[watch]'"
    if given == ["--version"]:
        print(f"streambasis {__version__}")
        return OK
    if not given or given[0] in ("--help", "-h"):
        commands = "\n".join(f"  {name:<8} {line}" for name, line in SUMMARIES.items())
        print(f"usage: streambasis COMMAND [OPTIONS]\n\n{commands}\n\n{advice}\n\n{CAUTION}")
        return OK
    print(f"streambasis: {advice}", file=sys.stderr)
    return EXTRA
