"""Settings: from the command line, from a file, and where the two meet."""

from __future__ import annotations

import os
import tomllib
from dataclasses import fields
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from streambasis import cli
from streambasis.errors import SettingError
from streambasis.feeds.broker import WHEN_FULL, Broker
from streambasis.monitor.novelty import LEAST_BASELINE
from streambasis.watch.config import MOST_BYTES, read_config
from streambasis.watch.options import FEED, OPTIONS, spelled
from streambasis.watch.service import broker_of, feed_options
from streambasis.watch.settings import Settings, changed, settings_of
from streambasis.watch.values import SNAPSHOT_EVERY, Endpoint, Every

# each setting as it is typed, as a file has it, and as the daemon uses it
GIVEN: list[tuple[str, Any, str, Any]] = [
    ("feed", "feed.csv", 'feed = "feed.csv"', "feed.csv"),
    ("feed", "-", 'feed = "-"', "-"),
    ("feed", "mqtt://h/t", 'feed = "mqtt://h/t"', "mqtt://h/t"),
    ("channels", ("a,b", '"c, d"'), 'channels = ["a", "b", "c, d"]', ("a", "b", "c, d")),
    ("channels", ("a",), 'channels = "a"', ("a",)),
    ("time", "when", 'time = "when"', "when"),
    ("key", "pump", 'key = "pump"', "pump"),
    ("format", "json", 'format = "json"', "json"),
    ("follow", True, "follow = true", True),
    ("strict", True, "strict = true", True),
    ("baseline", "500", "baseline = 500", 500),
    ("false_alarm", "1e-3", "false-alarm = 1e-3", 1e-3),
    ("half_life", "0", "half-life = 0", 0.0),
    ("adopt_after", "0", "adopt-after = 0", 0),
    ("home", "/var/lib/x", 'home = "/var/lib/x"', Path("/var/lib/x")),
    ("snapshot_every", ("500",), "snapshot-every = 500", Every(500, SNAPSHOT_EVERY.seconds)),
    ("snapshot_every", ("2min",), 'snapshot-every = "2min"', Every(SNAPSHOT_EVERY.samples, 120)),
    ("snapshot_every", ("500", "1s"), 'snapshot-every = [500, "1s"]', Every(500, 1.0)),
    ("snapshot_every", ("500,1.5s",), 'snapshot-every = "500, 1.5 s"', Every(500, 1.5)),
    ("parquet", True, "parquet = true", True),
    ("metrics", "0.0.0.0:9464", 'metrics = "0.0.0.0:9464"', Endpoint("0.0.0.0", 9464)),
    ("metrics", "[::1]:9464", 'metrics = "[::1]:9464"', Endpoint("::1", 9464)),
    ("metrics", "9464", "metrics = 9464", Endpoint("127.0.0.1", 9464)),
    ("metrics", ":0", 'metrics = ":0"', Endpoint("127.0.0.1", 0)),
    ("silent_after", "500ms", 'silent-after = "500ms"', 0.5),
    ("silent_after", "30", "silent-after = 30", 30.0),
    ("on_overload", "drop", 'on-overload = "drop"', "drop"),
    ("credentials", "/etc/x", 'credentials = "/etc/x"', Path("/etc/x")),
    ("client", "press-7", 'client = "press-7"', "press-7"),
    ("mqtt_version", "3.1.1", 'mqtt-version = "3.1.1"', "3.1.1"),
    ("queue", "9", "queue = 9", 9),
    ("ca_file", "/etc/ca", 'ca-file = "/etc/ca"', Path("/etc/ca")),
    ("json", True, "json = true", True),
    ("quiet", True, "quiet = true", True),
]
PAIRED = {"certificate_file", "key_file"}
"""Settings that are given together."""


def test_every_setting_has_an_option_and_a_default_that_is_valid() -> None:
    """The table of options and the fields of the settings are the same, in the same order."""
    assert [field.name for field in fields(Settings)] == list(OPTIONS)
    assert {name for name, *_ in GIVEN} | PAIRED == set(OPTIONS)


@pytest.mark.parametrize(("name", "typed", "written", "expected"), GIVEN)
def test_typed_and_written_are_the_same(name: str, typed: Any, written: str, expected: Any) -> None:
    """What the command line can say a file can say, with the same result."""
    from_line = settings_of({name: typed})
    from_file = settings_of({}, {name: next(iter(tomllib.loads(written).values()))})
    assert getattr(from_line, name) == expected
    assert type(getattr(from_line, name)) is type(expected)
    assert from_line == from_file


def test_the_command_line_wins(tmp_path: Path) -> None:
    """A value of the file is replaced by the one typed, also by the default when it is typed."""
    file = tmp_path / "a.toml"
    file.write_text("baseline = 500\nstrict = true\nquiet = true\n")
    settings = settings_of({"baseline": "2000", "strict": False}, read_config(file), file)
    assert (settings.baseline, settings.strict, settings.quiet) == (2000, False, True)


def test_the_command_line_wins_in_the_command_too(tmp_path: Path) -> None:
    """A default that was typed counts as typed; one that was not does not."""
    rows = "\n".join(f"{i % 7},{i % 5},{i % 3}" for i in range(600))
    feed, file = tmp_path / "feed.csv", tmp_path / "a.toml"
    feed.write_text(f"a,b,c\n{rows}\n")
    file.write_text('baseline = 100\nquiet = true\nfeed = "feed.csv"\n')
    assert cli.main(["watch", "--config", str(file)]) == cli.OK
    # with the default of 2,000 the feed is too short
    assert cli.main(["watch", "--config", str(file), "--baseline", "2000"]) == cli.FEED


def test_paths_of_a_file_are_beside_it(tmp_path: Path) -> None:
    """A relative path is taken from the file's folder, an absolute one and an address stay."""
    file = tmp_path / "a.toml"
    written = {"feed": "feed.csv", "home": "run", "credentials": "/etc/secret"}
    settings = settings_of({}, written, file)
    assert settings.feed == str(tmp_path / "feed.csv")
    assert settings.home == tmp_path / "run"
    assert settings.credentials == Path("/etc/secret")
    assert settings_of({}, {"feed": "mqtt://h/t"}, file).feed == "mqtt://h/t"
    assert settings_of({}, {"feed": "-"}, file).feed == "-"
    assert settings_of({"home": "run"}, {}, file).home == Path("run")


def test_underscores_are_dashes_and_twice_is_an_error(tmp_path: Path) -> None:
    """Python's spelling of a key is taken; both spellings of one key are refused."""
    file = tmp_path / "a.toml"
    file.write_text("false_alarm = 1e-3\n")
    assert read_config(file) == {"false_alarm": 1e-3}
    file.write_text("false_alarm = 1e-3\nfalse-alarm = 1e-2\n")
    with pytest.raises(SettingError, match="false-alarm stands there twice"):
        read_config(file)


REFUSED = [
    ("basline = 500", "no setting 'basline' (did you mean 'baseline'?)"),
    ("Follow = true", "no setting 'Follow' (did you mean 'follow'?)"),
    ("snapshot-evry = 5", "no setting 'snapshot-evry' (did you mean 'snapshot-every'?)"),
    ("qqqqqq = 5", "no setting 'qqqqqq' (there are feed, channels"),
    ("[watch]\nbaseline = 500", "no setting 'watch'"),
    ('password = "hush"', "password: names and passwords do not belong here"),
    ('baseline = "500"', "baseline: '500' is not a whole number of at least 32"),
    ("baseline = 500.0", "baseline: 500.0 is not a whole number"),
    ("baseline = true", "baseline: true is not a whole number"),
    ("baseline = 31", "baseline: 31 is not a whole number of at least 32"),
    ("baseline = 0x" + "f" * 5000, "baseline: a very long number is not"),
    ("false-alarm = 0.5", "false-alarm: 0.5 is not a probability above 0 and up to 0.2"),
    ("false-alarm = nan", "false-alarm: nan is not a probability"),
    ("half-life = inf", "half-life: inf is not a number of samples"),
    ("half-life = -1", "half-life: -1 is not a number of samples"),
    ("follow = 1", "follow: 1 is not true or false"),
    ("follow = 'yes'", "follow: 'yes' is not true or false"),
    ('format = "xml"', "format: 'xml' is not csv or json"),
    ("channels = []", "channels: an array is not one or more names"),
    ("channels = [1, 2]", "channels: an array is not the name of a column, or such names"),
    ('channels = ["a", "a"]', "channels: an array is not one or more names, none of them twice"),
    ("channels = {a = 1}", "channels: a table is not names separated by commas"),
    ("home = 5", "home: 5 is not the path of a file or folder"),
    ('home = ""', "home: '' is not the path"),
    ("snapshot-every = 0", "snapshot-every: 0 is not a number of samples such as 50000"),
    ('snapshot-every = "0s"', "snapshot-every: '0s' is not a number of samples"),
    ('snapshot-every = ["1s", "2s"]', "snapshot-every: an array is not a number of samples"),
    ("snapshot-every = []", "snapshot-every: an array is not a number of samples"),
    ('silent-after = "soon"', "silent-after: 'soon' is not a length of time"),
    ("silent-after = -1", "silent-after: -1 is not a length of time"),
    ('metrics = "localhost"', "metrics: 'localhost' is not HOST:PORT"),
    ("metrics = 65536", "metrics: 65536 is not HOST:PORT"),
    ("metrics = 0x" + "f" * 5000, "metrics: a very long number is not HOST:PORT"),
    ("metrics = true", "metrics: true is not HOST:PORT"),
    ("time = 2026-03-02", "time: 2026-03-02 is not the name of a column"),
    ('client = "a\\nb"', "client: 'a\\\\nb' is not text of one line"),
    ('key-file = "k.pem"', "certificate-file and key-file: give both or none"),
    ("baseline = x", "not a TOML file (Invalid value (at line 1, column 12))"),
    ("a = " + "[" * 5000, "not a TOML file ("),
    ("a." * 50_000 + "a = 1", "holds a key of a hundred parts; a setting has one"),
    ("['a' . \"b\"" + ".c" * 200 + "]", "holds a key of a hundred parts"),
    ("a = 2026-99-99", "not a TOML file ("),
    ("baseline = " + "9" * 5000, "not a TOML file (Exceeds the limit"),
    ("#" + "x" * MOST_BYTES, "longer than the 524288 bytes that settings may take"),
]


@pytest.mark.parametrize(("content", "message"), REFUSED, ids=[m[:40] for _, m in REFUSED])
def test_a_file_that_cannot_be_used_is_named_with_its_key(
    tmp_path: Path, content: str, message: str
) -> None:
    """Each refusal names the file, the key and what is expected, or the nearest key there is."""
    file = tmp_path / "a.toml"
    file.write_text(content)
    with pytest.raises(SettingError) as caught:
        settings_of({}, read_config(file), file)
    assert message.replace("\\\\", "\\") in str(caught.value)
    if "give both" not in message:
        assert str(caught.value).startswith(f"{file}: ")
    assert "hush" not in str(caught.value)


def test_the_names_of_many_channels_have_room(tmp_path: Path) -> None:
    """Ten thousand names, with dots in them, are read."""
    names = [f"hall{i % 7}.line{i % 90}.sensor{i}" for i in range(10_000)]
    file = tmp_path / "a.toml"
    file.write_text("channels = [\n" + "".join(f'  "{name}",\n' for name in names) + "]\n")
    assert settings_of({}, read_config(file), file).channels == tuple(names)


def test_what_is_no_readable_file_is_refused(tmp_path: Path) -> None:
    """A missing file, a folder, a pipe that would never end, bytes that are no text."""
    os.mkfifo(tmp_path / "pipe")
    (tmp_path / "bytes").write_bytes(b"a = '\xff'")
    for name, message in [
        ("none", "cannot be read (No such file or directory)"),
        (".", "not a file"),
        ("pipe", "not a file"),
        ("bytes", "not UTF-8 text (byte 5)"),
    ]:
        with pytest.raises(SettingError) as caught:
            read_config(tmp_path / name)
        assert str(caught.value) == f"{tmp_path / name}: {message}"


def refused_or_read(file: Path, data: bytes) -> None:
    """Read settings from a file with this content; nothing but SettingError may come of it."""
    file.write_bytes(data)
    refusal = ""
    try:
        settings_of({}, read_config(file), file)
    except SettingError as error:
        refusal = str(error)
    assert refusal.isprintable()
    assert len(refusal) < 1000


WRITTEN = "\n".join({name: line for name, _, line, _ in GIVEN}.values()).encode()

SCALARS = (
    st.integers().map(str)
    | st.floats().map(repr)
    | st.booleans().map(lambda x: str(x).lower())
    | st.text(max_size=30).map(lambda x: '"' + x.encode("unicode_escape").decode() + '"')
    | st.sampled_from(["2026-03-02", "07:32:00", "[]", "{}", '["10s", 5]', '"10s"', '"[::1]:1"'])
)
ROWS = st.lists(
    st.tuples(st.sampled_from([spelled(name) for name in OPTIONS]) | st.text(max_size=10), SCALARS)
)


@given(ROWS)
def test_any_settings_are_read_or_refused(
    tmp_path_factory: pytest.TempPathFactory, rows: list[tuple[str, str]]
) -> None:
    """Values of any kind under keys of any kind: settings, or a SettingError of one line."""
    content = "\n".join(f"{key} = {value}" for key, value in rows)
    file = tmp_path_factory.getbasetemp() / "any.toml"
    refused_or_read(file, content.encode("utf-8", "surrogatepass"))


@given(st.lists(st.tuples(st.integers(0, len(WRITTEN)), st.binary(max_size=4)), max_size=8))
def test_mutated_settings_are_read_or_refused(
    tmp_path_factory: pytest.TempPathFactory, changes: list[tuple[int, bytes]]
) -> None:
    """A valid file with bytes replaced, inserted or cut out: settings, or a SettingError."""
    data = WRITTEN
    for at, piece in changes:
        data = data[:at] + piece + data[at + len(piece) % 3 :]
    refused_or_read(tmp_path_factory.getbasetemp() / "mutated.toml", data)


def test_bounds_agree_with_those_who_use_the_settings() -> None:
    """The bounds and words written down for the settings are those of monitor and broker."""
    with pytest.raises(ValueError, match=f"at least {LEAST_BASELINE}"):
        OPTIONS["baseline"].check(0)
    broker = broker_of(settings_of({"feed": "mqtt://h/t"}))
    assert (broker.queue, broker.version, broker.when_full) == (
        Broker.__dataclass_fields__["queue"].default,
        Broker.__dataclass_fields__["version"].default,
        WHEN_FULL[0],
    )
    dropping = broker_of(settings_of({"feed": "mqtt://h/t", "on_overload": "drop"}))
    assert dropping.when_full == WHEN_FULL[1]


def test_every_setting_of_a_connection_reaches_it(tmp_path: Path) -> None:
    """Broker and feed are opened as the settings say; who we are comes from the file."""
    login = tmp_path / "login"
    login.write_text("me\nhush\n")
    typed = {"credentials": str(login), "client": "mine", "mqtt_version": "3.1.1", "queue": "9"}
    typed |= {"ca_file": "ca", "certificate_file": "c", "key_file": "k", "on_overload": "drop"}
    assert broker_of(settings_of({"feed": "mqtts://h/t", **typed})) == Broker(
        user="me",
        password="hush",
        client="mine",
        version="3.1.1",
        queue=9,
        when_full="drop-oldest",
        ca_file=Path("ca"),
        certificate_file=Path("c"),
        key_file=Path("k"),
    )
    switches = {"follow": True, "strict": True}
    options = feed_options(settings_of({"feed": "f", "format": "json", **switches, **typed}))
    assert (options.follow, options.strict, options.format) == (True, True, "json")
    assert (options.when_full, options.queue, options.broker) == ("drop-oldest", 9, None)


def test_each_home_has_a_session_of_its_own() -> None:
    """Two runs of one topic keep two sessions; the same home has the same in every run."""

    def client(**typed: str) -> str | None:
        return broker_of(settings_of({"feed": "mqtt://h/t", **typed})).client

    assert client(home="one") == client(home="one")
    assert client(home="one") != client(home="two")
    assert client(home="one", client="mine") == "mine"
    assert client() is None


def test_what_may_change_live_is_told_from_what_may_not() -> None:
    """Two lists of names: what takes effect at once, and what needs another start."""
    before = settings_of({})
    after = settings_of({"quiet": True, "snapshot_every": ("5",), "baseline": "100"})
    assert changed(before, after) == (["snapshot_every", "quiet"], ["baseline"])
    assert changed(before, before) == ([], [])


def test_every_option_of_the_command_is_a_setting() -> None:
    """The command takes the settings, the file, help and debugging, and nothing else."""
    from streambasis.commands import watch

    names = {parameter.name for parameter in watch.params}
    assert names - {"config", "debug"} == set(OPTIONS)
    assert FEED in names
