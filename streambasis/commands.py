"""The commands behind :mod:`streambasis.cli`, as click describes them.

Each one imports what it needs when it runs: the help needs click alone.
"""

from __future__ import annotations

import csv
import datetime as dt
import io
import os
import sys
import traceback
from collections.abc import Sequence
from contextlib import ExitStack
from pathlib import Path

import click

from streambasis._version import __version__
from streambasis.cli import (
    BUG,
    CAUTION,
    EXIT_CODES,
    EXTRA,
    FEED,
    OK,
    OUTPUT,
    SNAPSHOT,
    SUMMARIES,
    USAGE,
)
from streambasis.errors import (
    FeedError,
    HomeError,
    RecordError,
    SampleError,
    SettingError,
    SnapshotError,
    StreambasisError,
)

_CODES = "\b\nExit codes:\n" + "\n".join(f"  {code:<4} {what}" for code, what in EXIT_CODES)
_debug = click.option(
    "--debug", is_flag=True, expose_value=False, help="Show a traceback with an error."
)
_SETTINGS = {"help_option_names": ["-h", "--help"], "max_content_width": 100}


@click.group(
    context_settings=_SETTINGS,
    help="Know what a multi-channel feed has shown before, and see at once what is new.",
    epilog=f"{CAUTION}\n\nExample: streambasis watch feed.csv\n\n{_CODES}",
)
@_debug
@click.version_option(__version__, message="streambasis %(version)s")
def streambasis() -> None:
    """Hold the commands together."""


@streambasis.command(
    "watch",
    short_help=SUMMARIES["watch"],
    help="""Watch the feed in FILE (CSV, Parquet or Arrow IPC) and report each event: a stretch
    whose samples are not explained by what the feed has shown before, with its time, its strength
    relative to the control limit, the channels that carry it, and the earlier event it repeats.

    The first samples are the baseline: ordinary running, from which scales, limits and the first
    basis are taken. Every later sample within its limit refines them.""",
    epilog=f"""\b
Example:
  streambasis watch examples/pump_station.csv --home run1
  streambasis watch feed.parquet --channels speed,flow --channels temp --json | jq .channels

\b
In the folder of --home:
  decisions/      Arrow IPC files, one row per sample: sample, time, spe, t2, limit, t2_limit,
                  novel, extreme, rank, event
  events.jsonl    one JSON object per event: event, start, end, start_time, end_time, peak,
                  channels, contributions, repeats, cosine, label
  progress.arrow  noise floor, drift and energies over the run, for the report
  state.arrow     a snapshot of the monitor at the end

{_CODES}

{CAUTION}""",
)
@click.argument("file", type=click.Path(path_type=Path))
@click.option(
    "--channels",
    multiple=True,
    metavar="NAMES",
    help="Columns to watch, separated by commas; may be given again. Default: all but the time.",
)
@click.option(
    "--time",
    metavar="COLUMN",
    help="The time column. Default: found by itself where there is one obvious candidate.",
)
@click.option(
    "--baseline",
    type=click.IntRange(min=1),
    default=2000,
    show_default=True,
    metavar="N",
    help="Samples of ordinary running at the start.",
)
@click.option(
    "--false-alarm",
    type=float,
    default=1e-4,
    show_default=True,
    metavar="P",
    help="Probability that an ordinary sample is beyond its limit.",
)
@click.option(
    "--half-life",
    type=click.FloatRange(min=0),
    default=5000,
    show_default=True,
    metavar="N",
    help="Samples after which the basis has forgotten half of what it saw, so that slow drift "
    "is followed; 0 never forgets.",
)
@click.option(
    "--adopt-after",
    type=click.IntRange(min=0),
    default=1000,
    show_default=True,
    metavar="N",
    help="An event still open after N samples is adopted as known behaviour; 0 never adopts.",
)
@click.option(
    "--home",
    type=click.Path(path_type=Path, file_okay=False),
    metavar="DIR",
    help="Keep decisions, events and the run itself in this folder; with the same folder again "
    "the run goes on where it stopped.",
)
@click.option("--json", "as_json", is_flag=True, help="Events as JSON lines on standard output.")
@click.option("--quiet", is_flag=True, help="Show nothing made for reading, errors excepted.")
@_debug
def watch(
    file: Path,
    channels: tuple[str, ...],
    time: str | None,
    baseline: int,
    false_alarm: float,
    half_life: float,
    adopt_after: int,
    home: Path | None,
    as_json: bool,
    quiet: bool,
) -> None:
    """Run a monitor over a file."""
    from streambasis.feeds import open_feed
    from streambasis.monitor import NoveltyMonitor
    from streambasis.watch.home import Home
    from streambasis.watch.loop import Run
    from streambasis.watch.stopping import asked_to_stop
    from streambasis.watch.terminal import Terminal

    memory = half_life or None
    with ExitStack() as held:
        kept = held.enter_context(Home(home)) if home is not None else None
        position = kept.position if kept is not None else None
        feed = held.enter_context(
            open_feed(file, channels=_names(channels), time=time, position=position)
        )
        names = feed.columns.channels
        if kept is not None:
            about = {"feed": os.path.realpath(file), "channels": list(names), "baseline": baseline}
            about |= {"false_alarm": false_alarm, "half_life": memory, "adopt_after": adopt_after}
            kept.begin(about)
        monitor = kept.monitor() if kept is not None else None
        if monitor is None:
            monitor = NoveltyMonitor(
                names, baseline=baseline, false_alarm=false_alarm, half_life=memory
            )
        shown = Terminal(sys.stdout, sys.stderr, total=feed.rows, as_json=as_json, quiet=quiet)
        with asked_to_stop() as asked, shown as terminal:
            summary = Run(feed, monitor, terminal, home=kept, adopt_after=adopt_after)(asked)
    shown.summary(summary)


@streambasis.command(
    "show",
    short_help=SUMMARIES["show"],
    help="""Show what the snapshot in FILE holds: channels, samples, rank, energies, noise floor,
    events, and an audit of its directions. The file is verified first.""",
    epilog=f"""\b
Example:
  streambasis show run1/state.arrow
  streambasis show run1/state.arrow --json | jq .rank

{_CODES}

{CAUTION}""",
)
@click.argument("file", type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Everything as one JSON object.")
@_debug
def show(file: Path, as_json: bool) -> None:
    """Show a snapshot."""
    from streambasis.watch.show import show as write

    write(file, sys.stdout, as_json=as_json)


@streambasis.command(
    "compare",
    short_help=SUMMARIES["compare"],
    help="""Show how far the snapshots A and B are apart: the principal angles between their
    subspaces, and the channels on which they differ most. The channels must be the same.""",
    epilog=f"""\b
Example:
  streambasis compare monday.arrow friday.arrow
  streambasis compare monday.arrow friday.arrow --json | jq .angles_degrees

{_CODES}

{CAUTION}""",
)
@click.argument("a", type=click.Path(path_type=Path))
@click.argument("b", type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Everything as one JSON object.")
@_debug
def compare(a: Path, b: Path, as_json: bool) -> None:
    """Compare two snapshots."""
    from streambasis.watch.comparison import compare as write

    write(a, b, sys.stdout, as_json=as_json)


@streambasis.command(
    "report",
    short_help=SUMMARIES["report"],
    help="""Draw what a run has kept in the folder HOME: scores against their limits with the
    events shaded, rank and noise floor, energies, drift, the channels that carry each event, and
    which events are alike; with a table of the events and the settings of the run.

    Nothing in HOME changes. Where HOME lacks what a picture needs, a sentence says so.""",
    epilog=f"""\b
Example:
  streambasis watch examples/pump_station.csv --home run1
  streambasis report run1 --out run1.html
  streambasis report run1 --png pictures

\b
Files of --png:
  spe.png  t2.png  rank-noise.png  energies.png  drift.png  contributions.png  cosines.png

{_CODES}

{CAUTION}""",
)
@click.argument("home", type=click.Path(path_type=Path))
@click.option(
    "--out",
    type=click.Path(path_type=Path, dir_okay=False),
    metavar="FILE.html",
    help="Write the report to this file: one page, pictures inside, nothing fetched.",
)
@click.option(
    "--png",
    type=click.Path(path_type=Path, file_okay=False),
    metavar="DIR",
    help="Write each picture to this folder as a PNG file.",
)
@_debug
def report(home: Path, out: Path | None, png: Path | None) -> None:
    """Draw a run that was kept."""
    from streambasis.report.making import make_report

    if out is None and png is None:
        raise click.UsageError("nothing to write: give --out FILE.html, --png DIR, or both")
    made = dt.datetime.now(dt.UTC)
    for line in make_report(home, out=out, png=png, caution=CAUTION, made=made):
        click.echo(line)


def _names(given: Sequence[str]) -> list[str] | None:
    """Return the names in lists separated by commas; a name with a comma stands in quotes."""
    if not given:
        return None
    rows = csv.reader(io.StringIO("\n".join(given)), skipinitialspace=True)
    return [name.strip() for row in rows for name in row]


def run(arguments: Sequence[str]) -> int:
    """Run a command line and return its exit code; an error is one line on standard error."""
    try:
        with streambasis.make_context("streambasis", list(arguments)) as context:
            streambasis.invoke(context)
    except click.exceptions.Exit as stop:
        return stop.exit_code
    except click.ClickException as error:
        error.show()
        return USAGE
    except (KeyboardInterrupt, click.Abort):
        click.echo("streambasis: interrupted", err=True)
        return OK
    except BrokenPipeError:
        raise
    except ModuleNotFoundError as error:
        extra = "report" if "matplotlib" in str(error.name) else "watch"
        return _failed(error, f"{error}: pip install 'streambasis[{extra}]'", EXTRA, arguments)
    except (FeedError, SampleError, RecordError) as error:
        return _failed(error, str(error), FEED, arguments)
    except SettingError as error:
        return _failed(error, str(error), USAGE, arguments)
    except SnapshotError as error:
        return _failed(error, str(error), SNAPSHOT, arguments)
    except HomeError as error:
        return _failed(error, str(error), OUTPUT, arguments)
    except StreambasisError as error:
        return _failed(error, str(error), BUG, arguments)
    except Exception as error:
        text = f"an error inside streambasis ({type(error).__name__}: {error}); see --debug"
        return _failed(error, text, BUG, arguments)
    return OK


def _failed(error: Exception, text: str, code: int, arguments: Sequence[str]) -> int:
    if "--debug" in arguments:
        traceback.print_exception(error)
    click.echo(f"streambasis: {text}", err=True)
    return code
