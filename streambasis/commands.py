"""The commands behind :mod:`streambasis.cli`, as click describes them.

Each one imports what it needs when it runs: the help needs click alone.
"""

from __future__ import annotations

import datetime as dt
import os
import sys
import traceback
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, TypeVar

import click
from click.core import ParameterSource
from click.shell_completion import shell_complete

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
    MetricsError,
    RecordError,
    SampleError,
    SettingError,
    SnapshotError,
    StreambasisError,
)
from streambasis.watch.config import read_config
from streambasis.watch.options import FEED as FEED_NAME
from streambasis.watch.options import OPTIONS, spelled
from streambasis.watch.settings import Settings, settings_of
from streambasis.watch.stopping import Signals

_CODES = "\b\nExit codes:\n" + "\n".join(f"  {code:<4} {what}" for code, what in EXIT_CODES)
_Command = TypeVar("_Command", bound=Callable[..., Any])
_debug = click.option(
    "--debug", is_flag=True, expose_value=False, help="Show a traceback with an error."
)
_COMPLETE = "_STREAMBASIS_COMPLETE"
_LIVE = ", ".join(spelled(name) for name, option in OPTIONS.items() if option.live)
_THREADS = ("OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
_CONTEXT = {"help_option_names": ["-h", "--help"], "max_content_width": 100}


class _InOrder(click.Group):
    """Commands in the order in which one meets them, not that of the alphabet."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Return the names of the commands."""
        del ctx
        return list(SUMMARIES)


@click.group(
    cls=_InOrder,
    context_settings=_CONTEXT,
    help="Know what a multi-channel feed has shown before, and see at once what is new.",
    epilog=f"""\b
Example:
  streambasis watch feed.csv                    events, and a summary at the end
  streambasis watch feed.csv --home run1        the same, and keep everything in run1
  streambasis report run1 --out run1.html       the pictures of it on one page
  streambasis show run1                         the basis that was learned, audited
  streambasis check press.toml                  what a file of settings would run
  streambasis watch --config press.toml         run it, as a service

\b
The first 2,000 samples must show ordinary running (--baseline). If there are fewer, or if too much
or too little is reported, look at --baseline, --channels and --false-alarm: streambasis watch
--help. README.md explains decisions, events and pictures, and how to use it in a program.

{_CODES}

{CAUTION}""",
)
@_debug
@click.version_option(__version__, message="streambasis %(version)s")
def streambasis() -> None:
    """Hold the commands together."""


def _settings(command: _Command) -> _Command:
    """Give a command an option for each setting."""
    defaults = Settings()
    for name, option in reversed(OPTIONS.items()):
        if name == FEED_NAME:
            continue
        default = getattr(defaults, name)
        spelling = f"--{spelled(name)}"
        how: dict[str, Any] = {"metavar": option.metavar, "multiple": option.many}
        if option.metavar in ("FILE", "DIR"):
            # a shell completes it; what it must be is checked by the settings
            how["type"] = click.Path(file_okay=option.metavar == "FILE")
        if option.switch:
            spelling, how = f"{spelling}/--no-{spelled(name)}", {"default": default}
        elif default is not None:
            # where several may be given click wants several for a default
            text = f"{default:g}" if isinstance(default, float) else str(default)
            how |= {"default": [text] if option.many else text, "show_default": True}
        command = click.option(spelling, name, help=option.help, **how)(command)
    return command


@streambasis.command(
    "watch",
    short_help=SUMMARIES["watch"],
    help="""Watch FEED and report each event: a stretch whose samples are not explained by what the
    feed has shown before, with its time, its strength relative to the control limit, the channels
    that carry it, and the earlier event it repeats.

    FEED is a file (CSV or JSON lines, also packed with gzip; Parquet; Arrow IPC), a folder of such
    files, - for standard input, or mqtt://HOST:PORT/TOPIC, mqtts://HOST:PORT/TOPIC.

    The first samples are the baseline: ordinary running, from which scales, limits and the first
    basis are taken. Every later sample within its limit refines them.""",
    epilog=f"""\b
Example:
  streambasis watch examples/pump_station.csv --home run1
  streambasis watch feed.parquet --channels speed,flow --channels temp --json | jq .channels
  streambasis watch mqtt://broker:1883/plant/press --home /var/lib/press --metrics 9464
  streambasis watch --config press.toml

\b
Settings in a file (--config): TOML; a key is an option without its dashes, or feed; the command
line wins; a relative path is taken from the folder of the file. streambasis check looks at one.

\b
Signals:
  SIGTERM, SIGINT  keep what was taken and end; with the same --home the run goes on there
  SIGHUP           read the file of --config again; {_LIVE} change at once

\b
In the folder of --home:
  decisions/       Arrow IPC files (--parquet: Parquet), one row per sample: sample, time, spe, t2,
                   limit, t2_limit, novel, extreme, rank, event
  events.jsonl     one JSON object per event: event, start, end, start_time, end_time, peak,
                   channels, contributions, repeats, cosine, label
  malformed.jsonl  rows that hold no sample
  progress.arrow   noise floor, drift and energies over the run, for the report
  state.arrow      a snapshot of the run, from which it goes on (--key: fleet.arrow and feeds/)

{_CODES}

{CAUTION}""",
)
@click.argument("feed", required=False, type=click.Path(allow_dash=True))
@click.option(
    "--config", type=click.Path(path_type=Path), metavar="FILE.toml", help="Settings from a file."
)
@_settings
@_debug
def watch(config: Path | None, **given: Any) -> None:
    """Run a monitor over a feed."""
    _use_one_thread()
    context = click.get_current_context()
    typed = {
        name: value
        for name, value in given.items()
        if context.get_parameter_source(name) is ParameterSource.COMMANDLINE
    }

    def read() -> Settings:
        written = {} if config is None else read_config(config)
        return settings_of(typed, written, config)

    settings = read()
    # heard while the rest is still being loaded
    with Signals(hang_up_stops=config is None and sys.stderr.isatty()) as signals:
        from streambasis.watch.service import serve

        serve(settings, sys.stdout, sys.stderr, signals, None if config is None else read)


def _use_one_thread() -> None:
    """Keep the linear algebra of the daemon to one thread, unless the environment says otherwise.

    The products of one batch are small: further threads would be waited for, and spin meanwhile.
    """
    if not any(name in os.environ for name in (*_THREADS, "OMP_NUM_THREADS")):
        # read by the library when numpy loads it, which is after this
        os.environ.update(dict.fromkeys(_THREADS, "1"))


@streambasis.command(
    "check",
    short_help=SUMMARIES["check"],
    help="""Check the settings in FILE as 'watch --config FILE' would read them, and show what it
    would run; nothing is run, read to its end, or written. Of a broker only the address and the
    files that the connection needs are looked at.""",
    epilog=f"""\b
Example:
  streambasis check examples/watch.toml

{_CODES}

{CAUTION}""",
)
@click.argument("file", type=click.Path(path_type=Path))
@_debug
def check(file: Path) -> None:
    """Check a file of settings."""
    written = read_config(file)
    settings = settings_of({}, written, file)
    from streambasis.watch.checking import check as write

    write(settings, set(written), sys.stdout)


@streambasis.command(
    "show",
    short_help=SUMMARIES["show"],
    help="""Show what the snapshot in FILE holds: channels, samples, rank, energies, noise floor,
    events, and an audit of its directions. The file is verified first. Of a folder of --home it is
    state.arrow.""",
    epilog=f"""\b
Example:
  streambasis show run1
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

    write(_snapshot(file), sys.stdout, as_json=as_json)


@streambasis.command(
    "compare",
    short_help=SUMMARIES["compare"],
    help="""Show how far the snapshots A and B are apart: the principal angles between their
    subspaces, and the channels on which they differ most. The channels must be the same. Of a
    folder of --home it is state.arrow.""",
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

    write(_snapshot(a), _snapshot(b), sys.stdout, as_json=as_json)


def _snapshot(path: Path) -> Path:
    """Return the snapshot that is meant: of the home of a run the one in it."""
    if (path / "fleet.arrow").exists():
        raise SnapshotError(
            f"{path}: holds many feeds (--key), and a snapshot is of one; save that of a feed from "
            "a program, as Fleet(..., home=...)[key]"
        )
    return path / "state.arrow" if path.is_dir() else path


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


def run(arguments: Sequence[str]) -> int:
    """Run a command line and return its exit code; an error is one line on standard error."""
    completing = os.environ.get(_COMPLETE)
    if completing:
        return shell_complete(streambasis, {}, streambasis.name or "", _COMPLETE, completing)
    try:
        with streambasis.make_context("streambasis", list(arguments)) as context:
            streambasis.invoke(context)
    except click.exceptions.Exit as stop:
        return stop.exit_code
    except click.exceptions.NoArgsIsHelpError as error:
        click.echo(error.format_message())
        return OK
    except click.UsageError as error:
        path = error.ctx.command_path if error.ctx else "streambasis"
        return _failed(error, f"{error.format_message()} (see '{path} --help')", USAGE, arguments)
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
    except (HomeError, MetricsError) as error:
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
