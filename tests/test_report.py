"""The report: true to what was kept, honest about what was not, legible at every size."""

from __future__ import annotations

import base64
import datetime as dt
import io
import json
import re
import shutil
import sys
from html.parser import HTMLParser
from itertools import combinations, pairwise
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib.axes._base import _AxesBase
from matplotlib.colors import to_rgba
from matplotlib.figure import Figure
from matplotlib.image import imread
from matplotlib.text import Text

from streambasis import cli, save
from streambasis.errors import RecordError
from streambasis.monitor.verdict import NO_EVENT
from streambasis.report import canvas, courses, tables
from streambasis.report import pictures as pictures_module
from streambasis.report.dates import MOST_TICKS, date_ticks
from streambasis.report.making import make_report
from streambasis.report.pictures import Picture, pictures
from streambasis.report.reading import STRONGEST, KeptRun, read_run
from streambasis.report.thinning import NO_TIME, Envelope
from streambasis.snapshot import read_state
from streambasis.state import State
from streambasis.watch.segment import Segment
from tests.homes import START, make_home, names_of
from tests.promises import DECISION_COLUMNS

SHIPPED = Path(__file__).parent.parent / "examples" / "pump_station.csv"
MADE = dt.datetime(2026, 3, 9, 8, 7, 6, tzinfo=dt.UTC)
NAMES = [
    "spe", "t2", "rank-noise", "energies", "drift", "contributions", "cosines",
]  # fmt: skip
HOSTILE = [
    "<script>alert(1)</script>",
    'x" onload="alert(1)',
    "&lt;b&gt;&amp;",
    r"$\frac{1}{$ \unknown",
    "温度 №1 🌡",
    "line\nbreak\ttab\x00\x1b[31m",
    "turn\u202egnp.exe",
    "a very long name of a channel that nobody would ever want to read in full " * 4,
]
VOID = {"meta", "img", "br", "hr", "link", "input"}


class Page(HTMLParser):
    """A page as its elements; fails where they are not well nested."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.stack: list[str] = []
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.text: list[str] = []
        self.cells: list[list[str]] = []
        self.sections: dict[str, str] = {}
        self.feed(text)
        self.close()
        assert self.stack == []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        """Note an element."""
        self.elements.append((tag, dict(attrs)))
        if tag == "tr":
            self.cells.append([])
        if tag in ("td", "th"):
            self.cells[-1].append("")
        if tag not in VOID:
            self.stack.append(tag)

    def handle_endtag(self, tag: str) -> None:
        """Check that what closes is what was opened last."""
        assert self.stack.pop() == tag

    def handle_data(self, data: str) -> None:
        """Note text that a reader sees."""
        if self.stack and self.stack[-1] not in ("style", "title"):
            self.text.append(data)
            if self.stack[-1] == "h2":
                self.sections[data] = ""
            elif self.sections:
                self.sections[list(self.sections)[-1]] += data
            if self.stack[-1] in ("td", "th"):
                self.cells[-1][-1] += data

    @property
    def words(self) -> str:
        """All text, each run of blanks as one."""
        return " ".join(" ".join(self.text).split())


def report_on(home: Path, folder: Path) -> tuple[Page, str, list[str]]:
    """Write the report on a home; return the page, its source and the lines told."""
    out = folder / "report.html"
    lines = make_report(home, out=out, png=None, caution=cli.CAUTION, made=MADE)
    source = out.read_text(encoding="utf-8")
    return Page(source), source, lines


@pytest.fixture(scope="module")
def hostile(tmp_path_factory: pytest.TempPathFactory) -> tuple[Page, str, list[str]]:
    """Return the report on a run whose names and labels mean harm."""
    folder = tmp_path_factory.mktemp("hostile")
    home = make_home(folder / "home", 2500, 8, 8, names=HOSTILE, label="<img src=x onerror=y>")
    return report_on(home, folder)


def test_page_needs_nothing_from_elsewhere(hostile: tuple[Page, str, list[str]]) -> None:
    """No element or style refers to anything but the page; a policy forbids the rest."""
    page, source, _ = hostile
    tags = {tag for tag, _ in page.elements}
    assert not tags & {"script", "link", "iframe", "object", "embed", "base", "form", "a", "svg"}
    for tag, attributes in page.elements:
        assert not [name for name in attributes if name.startswith("on")], tag
        assert not {"href", "srcset", "background", "style"} & set(attributes), tag
    sources = [attributes["src"] for tag, attributes in page.elements if tag == "img"]
    assert len(sources) == len(NAMES)
    assert all(src is not None and src.startswith("data:image/png;base64,") for src in sources)
    style = re.search(r"<style>(.*?)</style>", source, re.DOTALL)
    assert style is not None
    assert "url(" not in style[1]
    assert "@import" not in style[1]
    policies = [a.get("content") or "" for _, a in page.elements if "http-equiv" in a]
    assert [policy.split(";")[0] for policy in policies] == ["default-src 'none'"]


def test_pictures_are_pictures(hostile: tuple[Page, str, list[str]]) -> None:
    """Each picture on the page is a PNG file of the size stated, described, and not blank."""
    page, _, _ = hostile
    for tag, attributes in page.elements:
        if tag == "img":
            data = base64.b64decode((attributes["src"] or "").partition(",")[2])
            dots = imread(io.BytesIO(data))
            shown = int(attributes["width"] or 0), int(attributes["height"] or 0)
            ratio = 96 / canvas.DPI
            assert shown == (round(dots.shape[1] * ratio), round(dots.shape[0] * ratio))
            assert dots[..., :3].std() > 0.02
            assert len(attributes["alt"] or "") > 20


def test_hostile_names_and_labels_are_text(hostile: tuple[Page, str, list[str]]) -> None:
    """Markup in names comes out as the text it was; what misleads a reader is replaced."""
    page, source, _ = hostile
    assert "<script" not in source.replace("&lt;script", "")
    label = [row[-1] for row in page.cells if len(row) == 9][1:]
    assert label == ["<img src=x onerror=y>"] * 8
    named = " ".join(row[6] for row in page.cells if len(row) == 9)
    for name in HOSTILE[:5]:
        assert name in named, name
    assert not {"\x00", "\x1b", "\u202e"} & set(source)


def test_legible_text_is_one_short_line_that_the_font_has() -> None:
    """Names in pictures are cut in the middle, on one line, without missing glyphs."""
    glyphs = {chr(code) for code in canvas._glyphs()}
    for name in HOSTILE:
        shown = canvas.legible(name)
        assert 0 < len(shown) <= 26
        assert set(shown) <= glyphs
        assert "\n" not in shown
    assert canvas.legible("flow_a (m³/h)") == "flow_a (m³/h)"


def test_page_carries_caution_and_provenance(hostile: tuple[Page, str, list[str]]) -> None:
    """The caution, version, folder, feed, samples, dates and settings stand on the page."""
    page, _, lines = hostile
    assert " ".join(cli.CAUTION.split()) in page.words
    told = {row[0]: row[1] for row in page.cells if len(row) == 2}
    assert told["made"].startswith("2026-03-09 08:07:06 UTC by streambasis ")
    assert told["feed"] == "mill.parquet"
    assert told["folder"].endswith("/home")
    assert told["channels"] == "8"
    assert told["samples"] == "2,500 (numbers 0 to 2,499)"
    assert told["dates"] == "2026-03-02 00:00:00 to 2026-03-02 00:41:39"
    assert told["judged"] == "2,250"
    assert told["events"] == "8, 1 of them repeating an earlier one"
    assert told["baseline"] == "250 samples"
    assert told["false-alarm probability"] == "0.0001 for each limit"
    assert lines[-1].endswith("report.html: 7 pictures, 8 events")


def test_times_in_seconds_stay_seconds(tmp_path: Path) -> None:
    """A feed that counts seconds gets no date, neither in the settings nor among the events."""
    home = make_home(tmp_path / "home", 600, 5, 1, progress=False, snapshot=False)
    for path in (home / "decisions").iterdir():
        table = pa.ipc.open_file(path).read_all()
        time = pa.array(table["time"].to_numpy().view(np.int64) - START, pa.timestamp("ns"))
        table = table.set_column(1, "time", time)
        with pa.ipc.new_file(path, table.schema) as file:
            file.write_table(table)
    event = json.loads((home / "events.jsonl").read_text())
    event |= {"start_time": "1970-01-01T00:01:40.500000000", "end_time": "soon"}
    (home / "events.jsonl").write_text(json.dumps(event) + "\n")
    page, _, _ = report_on(home, tmp_path)
    told = {row[0]: row[1] for row in page.cells if len(row) == 2}
    assert told["time"] == "0 s to 599 s"
    assert "dates" not in told
    assert page.cells[-1][1:3] == ["100.5 s", "soon"]


def absent(page: Page) -> dict[str, str]:
    """Return title and sentence of what the page shows no picture of."""
    pictured = [a["alt"] or "" for tag, a in page.elements if tag == "img"]
    return {
        title: text.strip()
        for title, text in page.sections.items()
        if title != "Events" and not any(alt.startswith(title) for alt in pictured)
    }


def test_missing_readings_and_snapshot_are_said(tmp_path: Path) -> None:
    """Without them four pictures are sentences that name the file, and the rest is drawn."""
    home = make_home(tmp_path / "home", 600, 5, 2, progress=False, snapshot=False)
    page, _, lines = report_on(home, tmp_path)
    said = absent(page)
    assert set(said) == {"Energies", "Drift angle", "Likeness of events"}
    assert "progress.arrow" in said["Energies"]
    assert "progress.arrow" in said["Drift angle"]
    assert "state.arrow" in said["Likeness of events"]
    assert "The noise floor is missing" in page.words
    assert "not kept in this folder (no snapshot, state.arrow)" in page.words
    assert sum(line.startswith("left out: ") for line in lines) == 3


def test_a_run_without_events_says_so(tmp_path: Path) -> None:
    """No event: no heat map, no cosines, no table, each said; the rest is drawn."""
    page, _, _ = report_on(make_home(tmp_path / "home", 600, 5, 0), tmp_path)
    nothing = "No event has closed in this run."
    assert absent(page) == dict.fromkeys(
        ("Channels that carry each event", "Likeness of events"), nothing
    )
    assert page.words.endswith(f"Events {nothing}")


def test_a_basis_without_directions_says_so(tmp_path: Path) -> None:
    """Channels that share nothing have no T², no energies and no drift; one event no likeness."""
    home = make_home(tmp_path / "home", 600, 5, 1, rank=0)
    page, _, _ = report_on(home, tmp_path)
    said = absent(page)
    assert set(said) == {
        "Hotelling's T² against its control limit", "Energies", "Drift angle", "Likeness of events"
    }  # fmt: skip
    assert "nothing in common" in said["Energies"]
    assert said["Likeness of events"] == "There is one event, and none to compare it with."


def test_a_run_within_its_baseline_says_so(tmp_path: Path) -> None:
    """Before any sample is judged there is nothing to draw, and the page says why."""
    home = make_home(tmp_path / "home", 500, 5, 0, baseline=500, progress=False, snapshot=False)
    page, _, _ = report_on(home, tmp_path)
    said = absent(page)
    assert len(said) == len(NAMES)
    assert said["Rank and noise floor"].startswith("None of the 500 samples kept has a score")


def test_a_home_before_its_first_segment_is_reported(tmp_path: Path) -> None:
    """A run that has just begun has a folder and no file in it: a page without pictures."""
    (tmp_path / "home" / "decisions").mkdir(parents=True)
    page, _, _ = report_on(tmp_path / "home", tmp_path)
    assert len(absent(page)) == len(NAMES)
    assert "There is no events.jsonl" in page.words


def test_a_line_that_is_no_event_is_left_out_and_said(tmp_path: Path) -> None:
    """A half-written last line costs that line alone; its event counts as not closed."""
    home = make_home(tmp_path / "home", 900, 5, 3)
    path = home / "events.jsonl"
    path.write_text(path.read_text()[:-40])
    run = read_run(home, 100)
    assert [event.event for event in run.events] == [0, 1]
    assert run.notes == ["Line 3 of events.jsonl is no event and was left out."]
    assert list(run.unclosed) == [2]
    page, _, _ = report_on(home, tmp_path)
    assert "Event 2 has no line in events.jsonl" in page.words


@pytest.mark.parametrize(
    "changes",
    [{"peak": "high"}, {"peak": float("nan")}, {"label": 3}, {"channels": None}, {"start": None},
     {"contributions": []}, {"contributions": {"a": "x"}}],
    ids=str,
)  # fmt: skip
def test_events_of_the_wrong_kind_are_left_out(tmp_path: Path, changes: dict[str, object]) -> None:
    """A value that no event can have is never drawn."""
    home = make_home(tmp_path / "home", 300, 5, 1, progress=False, snapshot=False)
    fields = json.loads((home / "events.jsonl").read_text())
    (home / "events.jsonl").write_text(json.dumps({**fields, **changes}) + "\n")
    run = read_run(home, 100)
    assert run.events == []
    assert len(run.notes) == 1


def test_decisions_that_fill_no_file_yet_are_read(tmp_path: Path) -> None:
    """What a run that goes on holds in its snapshot follows what its files hold, each once."""
    whole = read_run(make_home(tmp_path / "whole", 140_000, 5, 6), 700)
    home = make_home(tmp_path / "home", 140_000, 5, 6)
    file = sorted((home / "decisions").iterdir())[-1]
    late = pa.ipc.open_file(file).read_all()
    waiting = Segment(first=int(file.stem))
    unknown = {"time": NO_TIME, "event": NO_EVENT}
    for name in late.column_names:
        values = getattr(waiting.columns, name)
        column = late[name].combine_chunks()
        if name == "time":
            column = column.cast(pa.int64())
        if column.null_count:
            column = column.fill_null(unknown.get(name, float("nan")))
        values[: len(late)] = column.to_numpy(zero_copy_only=False)
    waiting.count = len(late)
    parts = {"core": read_state(home / "state.arrow"), "decisions": waiting.to_state()}
    save(State("Run", {}, {}, parts), home / "state.arrow")
    for gone in (False, True):
        if gone:
            file.unlink()
        run = read_run(home, 700)
        assert run.counts == whole.counts
        assert run.notes == []
        assert run.facts == whole.facts
        for name in ("spe", "t2", "rank"):
            np.testing.assert_array_equal(whole.envelope.high[name], run.envelope.high[name])


@pytest.mark.parametrize("name", ["progress.arrow", "state.arrow"])
def test_damaged_extras_are_said(tmp_path: Path, name: str) -> None:
    """A file that cannot be trusted is named, and the report goes on without it."""
    home = make_home(tmp_path / "home", 300, 5, 1)
    path = home / name
    path.write_bytes(path.read_bytes()[:-200])
    run = read_run(home, 100)
    assert len(run.notes) == 1
    assert run.notes[0].startswith(f"{name} cannot be read")


def test_reading_agrees_with_the_decisions(tmp_path: Path) -> None:
    """Counts and the peaks of every series over many segments are those of the whole table."""
    home = make_home(tmp_path / "home", 150_000, 6, 9)
    files = sorted((home / "decisions").iterdir())
    assert len(files) == 3
    whole = pa.concat_tables([pa.ipc.open_file(path).read_all() for path in files])
    # one segment as Parquet, as a run may write on request
    pq.write_table(pa.ipc.open_file(files[1]).read_all(), files[1].with_suffix(".parquet"))
    files[1].unlink()
    run = read_run(home, 500)
    assert run.counts == {
        "samples": 150_000,
        "judged": 135_000,
        "novel": sum(whole["novel"].to_pylist()),
        "extreme": sum(whole["extreme"].to_pylist()),
    }
    assert run.first_judged == 15_000
    for name in ("spe", "t2"):
        values = whole[name].to_numpy()
        expected = [np.nan if np.isnan(c).all() else np.nanmax(c) for c in values.reshape(500, -1)]
        np.testing.assert_array_equal(expected, run.envelope.high[name])
    assert (run.envelope.begin[0], run.envelope.end[-1]) == (START, START + 149_999 * 10**9)


def test_the_strongest_events_are_kept_by_channel(tmp_path: Path) -> None:
    """Of many events the shares of the strongest are held, and all are listed."""
    run = read_run(make_home(tmp_path / "home", 4000, 8, 90), 100)
    assert len(run.events) == 90
    strongest = sorted(run.events, key=lambda event: -event.peak)[:STRONGEST]
    assert {event.event for event in strongest} == set(run.shares)
    assert [event.event for event in run.strongest] == sorted(run.shares)
    shown = tables.shares(run)
    assert shown.channels == names_of(8)
    for column, event in enumerate(shown.events):
        np.testing.assert_array_equal(
            [run.shares[event.event][name] for name in shown.channels], shown.values[:, column]
        )


def test_cosines_are_those_of_the_directions(tmp_path: Path) -> None:
    """The table holds |cos| of the angle between directions; a repetition comes near 1."""
    run = read_run(make_home(tmp_path / "home", 4000, 8, 12), 100)
    events, table = tables.cosines(run)
    assert len(events) == 12
    for (i, a), (j, b) in combinations(enumerate(events), 2):
        left, right = run.directions[a.event], run.directions[b.event]
        assert abs(table[i, j] - abs(left @ right)) < 1e-12
        if b.repeats == a.event:
            assert b.cosine is not None
            assert abs(table[i, j] - b.cosine) < 1e-12


def beyond_columns(figure: Figure) -> set[int]:
    """Return the columns of an envelope of 100 in which the mark of what is beyond is drawn."""
    found: set[int] = set()
    for drawn in figure.axes[1].collections:
        if np.allclose(drawn.get_edgecolor()[0], to_rgba(canvas.BEYOND)):
            for path in drawn.get_paths():
                found |= set(np.round(path.vertices[:, 0]).astype(int).tolist())
    return found


def test_only_columns_with_such_samples_are_marked_beyond(tmp_path: Path) -> None:
    """What is marked as beyond the limit is what the decisions say, one sample alone included."""
    home = make_home(tmp_path / "home", 100, 5, 0, baseline=10, step=None, rank=0)
    path = home / "decisions" / "000000000000.arrow"
    table = pa.ipc.open_file(path).read_all()
    novel = np.zeros(100, np.bool_)
    novel[[40, 70, 71, 72]] = True
    limit = table["limit"][50].as_py()
    spe = np.where(novel, 3.0 * limit, 0.3 * limit)
    # a sample with fewer channels has a lower limit, and is no reason to mark its neighbours
    limits = np.where(np.arange(100) == 50, 0.31 * limit, limit)
    for name, values in (("spe", spe), ("limit", limits), ("novel", novel)):
        table = table.set_column(table.schema.get_field_index(name), name, pa.array(values))
    with pa.ipc.new_file(path, table.schema) as file:
        file.write_table(table)
    run = read_run(home, 100)
    with canvas.style():
        figure = courses.scores(run, canvas.course(run.envelope, None), courses.SPE)
    assert beyond_columns(figure) == {40, 70, 71, 72}
    alone = figure.axes[1].collections[-1].get_paths()[0].vertices
    np.testing.assert_allclose(alone, [[40, limit], [40, 3.0 * limit]])


def test_segments_out_of_order_are_refused(tmp_path: Path) -> None:
    """A file of another run in the folder is an error that names it."""
    home = make_home(tmp_path / "home", 70_000, 5, 0)
    stray = home / "decisions" / "000000065000.arrow"
    shutil.copy(home / "decisions" / "000000000000.arrow", stray)
    with pytest.raises(RecordError, match=r"000000065000\.arrow: samples out of order"):
        read_run(home, 100)


def test_a_missing_segment_is_said_and_left_open(tmp_path: Path) -> None:
    """Samples without a decision are counted, and no line is drawn across them."""
    home = make_home(tmp_path / "home", 200_000, 5, 0, step=None)
    (home / "decisions" / f"{1 << 16:012d}.arrow").unlink()
    run = read_run(home, 100)
    assert run.notes == ["65,536 samples between the first and the last have no decision."]
    assert np.isnan(run.envelope.high["spe"][34:64]).all()


REFUSED = [
    ("none", "none: no such folder"),
    ("file", "file: not a folder"),
    ("empty", "empty: holds no run"),
    ("garbage", "000000000000.arrow: cannot be read as decisions"),
    ("other", "000000000000.arrow: no column 'sample'"),
    ("words", "000000000000.arrow: a column of the wrong kind"),
]


@pytest.mark.parametrize(("name", "message"), REFUSED, ids=[r[0] for r in REFUSED])
def test_what_is_no_home_is_one_line_and_an_exit_code(
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    name: str,
    message: str,
) -> None:
    """A folder without a run, or with files that are no decisions, is named; nothing is written."""
    monkeypatch.chdir(tmp_path)
    Path("file").touch()
    Path("empty").mkdir()
    for folder in ("garbage", "other", "words"):
        Path(folder, "decisions").mkdir(parents=True)
    Path("garbage/decisions/000000000000.arrow").write_bytes(b"nothing that Arrow wrote")
    word = {key: ["x"] for key in DECISION_COLUMNS} | {"sample": [0]}
    for folder, table in (("other", pa.table({"a": [1]})), ("words", pa.table(word))):
        with pa.ipc.new_file(f"{folder}/decisions/000000000000.arrow", table.schema) as file:
            file.write_table(table)
    assert cli.main(["report", name, "--out", "report.html"]) == cli.FEED
    shown = capsys.readouterr()
    assert shown.out == ""
    assert message in shown.err
    assert len(shown.err.splitlines()) == 1
    assert not Path("report.html").exists()


def test_without_the_extra_the_command_says_what_to_install(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """An installation without matplotlib names the extra that brings it."""
    for module in [name for name in sys.modules if name.startswith("streambasis.report")]:
        monkeypatch.delitem(sys.modules, module)
    monkeypatch.setitem(sys.modules, "matplotlib", None)
    assert cli.main(["report", "anything", "--out", "report.html"]) == cli.EXTRA
    assert "pip install 'streambasis[report]'" in capsys.readouterr().err


def test_nothing_to_write_is_a_usage_error(capsys: pytest.CaptureFixture[str]) -> None:
    """Without ``--out`` and ``--png`` the command says what to give."""
    assert cli.main(["report", "anything"]) == cli.USAGE
    assert "--out FILE.html" in capsys.readouterr().err


@pytest.mark.parametrize("option", [["--out", "file/x.html"], ["--png", "file/x"]])
def test_what_cannot_be_written_is_named(
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    option: list[str],
) -> None:
    """A place that takes no file is one line and the exit code of outputs."""
    make_home(tmp_path / "home", 300, 5, 0, progress=False, snapshot=False)
    monkeypatch.chdir(tmp_path)
    Path("file").touch()
    assert cli.main(["report", "home", *option]) == cli.OUTPUT
    shown = capsys.readouterr().err
    assert "cannot be written" in shown
    assert len(shown.splitlines()) == 1


def test_a_watched_feed_is_reported(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """What ``watch --home`` keeps is all that the report needs: seven pictures, every event."""
    home, folder = tmp_path / "home", tmp_path / "pictures"
    assert cli.main(["watch", str(SHIPPED), "--home", str(home), "--quiet"]) == cli.OK
    before = {path: path.read_bytes() for path in home.rglob("*") if path.is_file()}
    out = tmp_path / "report.html"
    assert cli.main(["report", str(home), "--out", str(out), "--png", str(folder)]) == cli.OK
    assert "left out" not in capsys.readouterr().out
    assert sorted(path.name for path in folder.iterdir()) == sorted(f"{n}.png" for n in NAMES)
    events = [json.loads(line) for line in (home / "events.jsonl").read_text().splitlines()]
    page = Page(out.read_text(encoding="utf-8"))
    # nothing is labelled, so the table has no such column
    rows = [row for row in page.cells if len(row) == 8][1:]
    assert [int(row[0]) for row in rows] == [event["event"] for event in events]
    assert [row[6].split(", ")[0] for row in rows] == [event["channels"][0] for event in events]
    assert "20,000 (numbers 0 to 19,999)" in page.words
    assert before == {path: path.read_bytes() for path in home.rglob("*") if path.is_file()}


# --- legible at every size: the texts of a picture never touch each other or its edges

SIZES = [(2000, 8, 3), (60_000, 32, 40), (200_000, 300, 200)]
"""Samples, channels, events; more samples change nothing but the width of a column."""

TOUCH = 0.5
"""Dots that two texts may share: rounding of their boxes."""


def texts(figure: Figure) -> list[Text]:
    """Return the texts that are drawn: not those of ticks beyond the ends of their axis."""
    hidden = set()
    # the second scale of an axis is no entry of figure.axes
    for axes in figure.findobj(_AxesBase):
        for axis in (axes.xaxis, axes.yaxis):
            low, high = sorted(axis.get_view_interval())
            for tick in (*axis.majorTicks, *axis.minorTicks):
                if not axes.axison or not low <= tick.get_loc() <= high:
                    hidden |= {id(tick.label1), id(tick.label2)}
    found = {id(text): text for text in figure.findobj(Text) if id(text) not in hidden}
    return [t for t in found.values() if t.get_visible() and t.get_text().strip()]


def check_legible(figure: Figure, name: str) -> None:
    """Assert that no two texts overlap and that all are inside the picture."""
    figure.canvas.draw()
    boxes = [(text.get_text(), text.get_window_extent()) for text in texts(figure)]
    assert len(boxes) > 5, name
    width, height = figure.canvas.get_width_height()
    for text, box in boxes:
        inside = -TOUCH <= box.x0 <= box.x1 <= width + TOUCH
        inside &= -TOUCH <= box.y0 <= box.y1 <= height + TOUCH
        assert inside, (name, text)
    for (a, first), (b, second) in combinations(boxes, 2):
        across = min(first.x1, second.x1) - max(first.x0, second.x0)
        up = min(first.y1, second.y1) - max(first.y0, second.y0)
        assert across <= TOUCH or up <= TOUCH, (name, a, b)


@pytest.fixture(scope="module", params=SIZES, ids=lambda s: f"{s[0]}x{s[1]}")
def sized(
    request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory
) -> tuple[KeptRun, dict[str, Figure]]:
    """Return a run of a certain size and the figures of its report, by name."""
    samples, channels, events = request.param
    home = make_home(tmp_path_factory.mktemp("sized") / "home", samples, channels, events)
    run = read_run(home, canvas.COLUMNS)
    figures: dict[str, Figure] = {}

    def held(name: str, title: str, text: str, draw: object) -> Picture:
        with canvas.style():
            figures[name] = draw()  # type: ignore[operator]
            figures[name].canvas.draw()
        return Picture(name, title, text, None)

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(pictures_module, "_drawn", held)
        list(pictures(run))
    return run, figures


def test_no_text_touches_another(sized: tuple[KeptRun, dict[str, Figure]]) -> None:
    """At three sizes of feed no text overlaps another or leaves the picture."""
    _, figures = sized
    assert list(figures) == NAMES
    with canvas.style():
        for name, figure in figures.items():
            check_legible(figure, name)


def test_every_axis_says_what_it_shows(sized: tuple[KeptRun, dict[str, Figure]]) -> None:
    """Each axis that is drawn has a name; those over the run share the horizontal one."""
    _, figures = sized
    for name, figure in figures.items():
        for axes in figure.axes:
            if axes.axison:
                assert axes.get_ylabel(), name
        lowest = [axes for axes in figure.axes if axes.axison and axes.get_xlabel()]
        assert lowest, name


def test_limits_of_legibility_are_kept(sized: tuple[KeptRun, dict[str, Figure]]) -> None:
    """Heat map and cosine table hold at most 40 channels and events."""
    run, figures = sized
    shown = tables.shares(run)
    assert len(shown.channels) <= tables.MOST_CHANNELS
    assert len(shown.channels) + shown.left_out == len(run.channels)
    if shown.left_out:
        assert shown.values.max(axis=1).min() >= tables.LEAST_SHARE
    else:
        assert shown.channels == run.channels
    assert len(shown.events) == min(len(run.events), STRONGEST)
    ticks = figures["cosines"].axes[0].get_yticklabels()
    assert len(ticks) == len(shown.events)


def test_the_peak_is_in_the_picture(sized: tuple[KeptRun, dict[str, Figure]]) -> None:
    """The axis of the SPE reaches beyond the highest sample of the run."""
    run, figures = sized
    top = figures["spe"].axes[1].get_ylim()[1]
    assert top > np.nanmax(run.envelope.high["spe"])


def test_shades_are_told_apart_in_grey() -> None:
    """Lightness falls all along the map of the shares, and differs among the marked areas."""

    def light(colour: object) -> float:
        from matplotlib.colors import to_rgb

        return float(np.dot((0.2126, 0.7152, 0.0722), to_rgb(colour)))  # type: ignore[arg-type]

    steps = [light(tables._MAP(x)) for x in np.linspace(0, 1, 33)]
    assert max(np.diff(steps)) < -0.01
    least = 0.2
    for a, b in combinations((canvas.ORDINARY, canvas.BEYOND, canvas.SHADE), 2):
        assert abs(light(a) - light(b)) > least


# --- the horizontal axis


def envelope_at(times: np.ndarray) -> Envelope:
    """Return an envelope of samples at given times in nanoseconds."""
    envelope = Envelope(0, len(times), 50, ["spe"])
    envelope.take(np.arange(len(times)), times, {"spe": np.ones(len(times))})
    return envelope


def test_times_of_the_feed_place_the_samples() -> None:
    """Dates where the feed has them; seconds in a fitting unit; else sample numbers."""
    step = np.arange(1000) * 10**9
    dates = canvas.course(envelope_at(START + step), None)
    assert dates.origin == START
    assert "2026-03-02 00:00:00 to 2026-03-02 00:16:39" in dates.name
    seconds = canvas.course(envelope_at(step), None)
    assert (seconds.origin, seconds.name) == (None, "time (min)")
    assert abs(seconds.at(600.0) - 10.0) < 0.2
    early = canvas.course(envelope_at(step), "timestamps")
    assert early.origin == 0
    for times in (np.full(1000, NO_TIME), -step, np.zeros(1000, np.int64)):
        course = canvas.course(envelope_at(times), None)
        assert course.name == "sample (number)"
        np.testing.assert_array_equal(course.x, course.samples)


def test_a_gap_in_time_is_left_open() -> None:
    """Where the feed stood still, lines and areas break."""
    times = START + np.concatenate([np.arange(500), 40_000 + np.arange(500)]) * 10**9
    course = canvas.course(envelope_at(times), "timestamps")
    x, values = course.broken(course.x, np.ones(50))
    assert np.flatnonzero(np.isnan(values)).tolist() == [25]
    assert len(x) == 51


@given(st.integers(-(10**18), 8 * 10**18), st.integers(0, 62), st.floats(0.5, 1.0))
def test_dates_on_an_axis_are_round_and_few(first: int, power: int, part: float) -> None:
    """From nanoseconds to centuries: ascending, inside, one to nine, no label twice in a row."""
    last = min(first + int(part * 2**power), 2**63 - 1)
    moments, labels = date_ticks(first, last)
    assert len(moments) == len(labels) <= MOST_TICKS
    assert all(first <= moment <= last for moment in moments)
    assert all(a < b for a, b in pairwise(moments))
    assert all(a != b for a, b in pairwise(labels))
    assert len(moments) >= 3 or last - first < 3


@given(
    st.lists(st.floats(0, 1), min_size=1, max_size=12),
    st.floats(0.01, 0.2),
)
def test_labels_move_apart_as_little_as_needed(places: list[float], least: float) -> None:
    """Labels keep their order, their distance and the ends; what fits already stays."""
    moved = canvas.spaced(places, least, 0.0, 1.0)
    allowed = min(least, 1.0 / max(len(places) - 1, 1))
    order = np.argsort(places, kind="stable")
    steps = np.diff(np.array(moved)[order])
    slack = 1e-9
    assert np.all(steps >= allowed - slack)
    assert min(moved) >= -slack
    assert max(moved) <= 1.0 + slack
    if np.all(np.diff(np.sort(places)) >= allowed):
        np.testing.assert_allclose(moved, places, atol=slack)


def test_scores_of_zero_and_infinite_limits_are_drawn(tmp_path: Path) -> None:
    """A score of zero and a limit of infinity have no place on the axis and do not break it."""
    run = read_run(make_home(tmp_path / "home", 500, 5, 1), 100)
    run.envelope.low["spe"][60] = run.envelope.high["spe"][60] = 0.0
    run.envelope.low["limit"][:] = run.envelope.high["limit"][:] = np.inf
    axis = canvas.course(run.envelope, None)
    with canvas.style():
        figure = courses.scores(run, axis, courses.SPE)
        check_legible(figure, "spe")
        low, high = figure.axes[1].get_ylim()
    assert 0 < low < high < np.inf
