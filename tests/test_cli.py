"""The command line: help, exit codes, one-line errors, pipes."""

from __future__ import annotations

import importlib.abc
import importlib.machinery
import json
import os
import subprocess
import sys
from pathlib import Path

import click
import numpy as np
import pytest

from streambasis import __version__, cli
from streambasis.commands import streambasis as group
from streambasis.errors import NumericalError

ROOT = Path(__file__).parent.parent
SHIPPED = ROOT / "examples" / "pump_station.csv"


def run(*arguments: str | Path, **options: object) -> subprocess.CompletedProcess[str]:
    """Run the command in a process of its own."""
    command = [sys.executable, "-m", "streambasis", *map(str, arguments)]
    return subprocess.run(  # type: ignore[call-overload, no-any-return]
        command, capture_output=True, text=True, check=False, cwd=ROOT, **options
    )


def plain_feed(folder: Path, rows: int, name: str = "feed.csv") -> Path:
    """Write a feed of two sources in six channels with noise."""
    rng = np.random.default_rng(11)
    values = rng.standard_normal((rows, 2)) @ rng.standard_normal((2, 6))
    values += 0.1 * rng.standard_normal(values.shape)
    path = folder / name
    np.savetxt(path, values, fmt="%.4f", delimiter=",", header=",".join("abcdef"), comments="")
    return path


def test_help_shows_example_exit_codes_and_caution() -> None:
    """The help of the command and of each of its commands says what a user must know."""
    for arguments in (["--help"], *([name, "--help"] for name in group.commands)):
        shown = run(*arguments)
        text = " ".join(shown.stdout.split())
        assert shown.returncode == cli.OK
        assert "safety-instrumented" in text, arguments
        assert "Exit codes:" in text, arguments
        assert "Example:" in text, arguments


def test_every_command_and_option_has_help() -> None:
    """A command without a line of help, or an option without one, does not pass."""
    assert set(group.commands) == set(cli.SUMMARIES)
    for name, command in group.commands.items():
        assert command.get_short_help_str(200) == cli.SUMMARIES[name]
        for parameter in command.params:
            if isinstance(parameter, click.Option):
                assert parameter.help, f"{name} {parameter.opts}"


def test_help_loads_nothing_heavy() -> None:
    """The help needs click; numpy, numba, pyarrow and rich stay out."""
    code = (
        "import sys; from streambasis.cli import main; main(['watch', '--help']); "
        "print([m for m in ('numpy', 'numba', 'pyarrow', 'rich') if m in sys.modules])"
    )
    shown = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=ROOT
    )
    assert shown.stdout.splitlines()[-1] == "[]"


def test_version_is_the_package_version() -> None:
    """``--version`` prints the one version there is."""
    assert run("--version").stdout == f"streambasis {__version__}\n"


class NoClick(importlib.abc.MetaPathFinder):
    """An installation without the watch extra."""

    def find_spec(self, name: str, *_: object) -> importlib.machinery.ModuleSpec | None:
        """Find no click."""
        if name == "click":
            raise ModuleNotFoundError("No module named 'click'", name="click")
        return None


@pytest.mark.parametrize(
    ("arguments", "code"),
    [
        (["--help"], cli.OK),
        ([], cli.OK),
        (["--version"], cli.OK),
        (["watch", "feed.csv"], cli.EXTRA),
    ],
)
def test_without_the_extra_the_command_says_what_to_install(
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    arguments: list[str],
    code: int,
) -> None:
    """The core alone answers help and version, and names the extra for everything else."""
    for module in [m for m in sys.modules if m.partition(".")[0] == "click"]:
        monkeypatch.delitem(sys.modules, module)
    monkeypatch.delitem(sys.modules, "streambasis.commands")
    monkeypatch.setattr(sys, "meta_path", [NoClick(), *sys.meta_path])
    assert cli.main(arguments) == code
    shown = capsys.readouterr()
    if arguments != ["--version"]:
        assert "pip install 'streambasis[watch]'" in shown.out + shown.err


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["watch", "feed.csv", "--no-such-option"], "No such option '--no-such-option'"),
        (["watch", "feed.csv", "other.csv"], "unexpected extra argument (other.csv)"),
        (["watch", "feed.csv", "--baseline", "0"], "--baseline: 0 is not a whole number"),
        (["watch", "feed.csv", "--snapshot-every", "0"], "--snapshot-every: '0' is not a number"),
        (["wach"], "Did you mean 'watch'?"),
        (["show"], "Missing argument 'FILE'"),
        (["report", "run1"], "nothing to write"),
    ],
)
def test_what_cannot_be_used_is_one_line(
    capsys: pytest.CaptureFixture[str], arguments: list[str], message: str
) -> None:
    """A wrong command, option or value is named on one line, with the exit code of such errors."""
    assert cli.main(arguments) == cli.USAGE
    shown = capsys.readouterr()
    assert shown.out == ""
    assert message in shown.err
    assert shown.err.startswith("streambasis: ")
    assert len(shown.err.splitlines()) == 1


def test_the_command_alone_shows_its_help(capsys: pytest.CaptureFixture[str]) -> None:
    """Without arguments the help appears on standard output: commands in the order of use."""
    assert cli.main([]) == cli.OK
    shown = capsys.readouterr()
    assert shown.err == ""
    places = [shown.out.index(f"\n  {name} ") for name in cli.SUMMARIES]
    assert places == sorted(places)


@pytest.mark.parametrize(
    ("words", "completed"),
    [
        ("streambasis wa", "plain,watch"),
        ("streambasis watch --fal", "plain,--false-alarm"),
        ("streambasis watch fe", "file,fe"),
        ("streambasis watch --home ru", "dir,ru"),
    ],
)
def test_a_shell_completes(words: str, completed: str) -> None:
    """Commands, options, files and folders are completed as click does it."""
    asked = {
        "_STREAMBASIS_COMPLETE": "bash_complete",
        "COMP_WORDS": words,
        "COMP_CWORD": str(words.count(" ")),
    }
    assert run(env=os.environ | asked).stdout.split() == [completed]


REFUSED = [
    (["none.csv"], "none.csv: no such file", cli.FEED),
    (["empty.csv"], "empty.csv: the file is empty", cli.FEED),
    (["feed.csv", "--channels", "a,bb"], "no column 'bb' (did you mean 'b'?)", cli.FEED),
    (["feed.csv", "--time", "when"], "no column 'when'", cli.FEED),
    (["words.csv"], "column 'b' is not numeric (text)", cli.FEED),
    (["feed.csv"], "300 samples, fewer than the baseline of 2000", cli.FEED),
    (["infinite.csv", "--baseline", "200", "--strict"], "is not finite", cli.FEED),
    (["feed.csv", "--false-alarm", "2"], "--false-alarm: 2 is not a probability", cli.USAGE),
    (["feed.csv", "--half-life", "0.5"], "--half-life: 0.5 is not a number of samples", cli.USAGE),
    (["feed.csv", "--home", "feed.csv/x"], "feed.csv/x: cannot be written", cli.OUTPUT),
    (["feed.csv", "--home", "full"], "holds an earlier run", cli.OUTPUT),
]


@pytest.mark.parametrize(("arguments", "message", "code"), REFUSED, ids=[r[1] for r in REFUSED])
def test_a_refusal_is_one_line_and_an_exit_code(
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    arguments: list[str],
    message: str,
    code: int,
) -> None:
    """Whatever a user gets wrong is named on one line of standard error, without a traceback."""
    monkeypatch.chdir(tmp_path)
    feed = plain_feed(tmp_path, 300)
    Path("empty.csv").touch()
    Path("words.csv").write_text("a,b\n1,on\n2,off\n")
    lines = feed.read_text().splitlines()
    Path("infinite.csv").write_text("\n".join([*lines[:250], "1,2,inf,4,5,6"]) + "\n")
    (tmp_path / "full" / "decisions").mkdir(parents=True)
    (tmp_path / "full" / "events.jsonl").write_text("{}\n")
    assert cli.main(["watch", *arguments]) == code
    shown = capsys.readouterr()
    assert shown.out == ""
    assert message in shown.err
    assert shown.err.startswith("streambasis: ")
    assert len(shown.err.splitlines()) == 1


def test_debug_adds_the_traceback(capsys: pytest.CaptureFixture[str]) -> None:
    """With ``--debug`` the line comes after the traceback of the error."""
    assert cli.main(["watch", "none.csv", "--debug"]) == cli.FEED
    shown = capsys.readouterr().err
    assert "Traceback" in shown
    assert shown.splitlines()[-1] == "streambasis: none.csv: no such file"


@pytest.mark.parametrize("error", [RuntimeError("odd"), NumericalError("odd")])
def test_an_error_inside_is_told_apart(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], error: Exception
) -> None:
    """What no input should cause is a bug: exit code 1, one line, no traceback."""

    def fail(*_: object, **__: object) -> None:
        raise error

    monkeypatch.setattr("streambasis.watch.service.open_feed", fail)
    assert cli.main(["watch", str(SHIPPED)]) == cli.BUG
    assert len(capsys.readouterr().err.splitlines()) == 1


def test_json_goes_to_standard_output_and_the_rest_to_standard_error(
    capsys: pytest.CaptureFixture[str],
) -> None:
    """With ``--json`` standard output holds JSON lines only; ``--quiet`` silences the rest."""
    assert cli.main(["watch", str(SHIPPED), "--json"]) == cli.OK
    shown = capsys.readouterr()
    assert [json.loads(line)["event"] for line in shown.out.splitlines()] == [0, 1, 2, 3, 4]
    assert "orthogonality" in shown.err
    assert cli.main(["watch", str(SHIPPED), "--json", "--quiet"]) == cli.OK
    assert capsys.readouterr() == (shown.out, "")


def test_quiet_shows_nothing(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """``--quiet`` alone leaves both streams empty."""
    assert cli.main(["watch", str(plain_feed(tmp_path, 2500)), "--quiet"]) == cli.OK
    assert capsys.readouterr() == ("", "")


def test_no_progress_bar_in_a_pipe() -> None:
    """Piped output is plain lines: no control character, no carriage return."""
    shown = run("watch", SHIPPED)
    assert shown.returncode == cli.OK
    assert shown.stderr == ""
    assert "orthogonality" in shown.stdout
    assert not {"\x1b", "\r"} & set(shown.stdout)


def test_a_progress_bar_on_a_terminal() -> None:
    """On a terminal the bar is drawn, the events stay readable, and the bar goes away."""
    import pty

    parent, child = pty.openpty()
    with subprocess.Popen(
        [sys.executable, "-m", "streambasis", "watch", str(SHIPPED)],
        stdout=child,
        stderr=child,
        cwd=ROOT,
        env={**os.environ, "TERM": "xterm", "COLUMNS": "100"},
    ) as process:
        os.close(child)
        shown = b""
        while True:
            try:
                piece = os.read(parent, 65536)
            except OSError:  # Linux's end of file on a terminal whose other side is closed
                break
            if not piece:
                break
            shown += piece
    os.close(parent)
    assert process.returncode == cli.OK
    assert b"\x1b[" in shown
    assert b"samples" in shown
    assert b"event 0 opened" in shown
    assert b"orthogonality" in shown


def test_a_reader_that_goes_away_ends_the_run_quietly() -> None:
    """``| head -1`` gets its line; the command ends without a traceback."""
    with subprocess.Popen(
        [sys.executable, "-m", "streambasis", "watch", str(SHIPPED)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        cwd=ROOT,
    ) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.close()
        error = process.stderr.read()
    assert process.returncode == cli.PIPE
    assert error == b""
