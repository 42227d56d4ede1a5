"""Every example runs at a small size, prints what it promises, and draws its picture."""

from __future__ import annotations

import importlib.util
import json
import re
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest

from streambasis import load, to_bytes

EXAMPLES = Path(__file__).parent.parent / "examples"
HERE = ("asyncio_daemon", "bearings", "dictionary", "novelty")
PNG = b"\x89PNG\r\n\x1a\n"


def script(name: str) -> ModuleType:
    """Return an example as a module."""
    spec = importlib.util.spec_from_file_location(name, EXAMPLES / f"{name}.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_every_example_is_run_by_a_test() -> None:
    """A script that nobody runs in a test is no example."""
    here = Path(__file__)
    others = " ".join(p.read_text() for p in here.parent.glob("test_*.py") if p != here)
    for path in EXAMPLES.glob("*.py"):
        assert path.stem in HERE or path.stem in others, path.name


@pytest.mark.parametrize("name", HERE)
def test_help_says_what_it_is_for(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    """``--help`` starts with the first sentence of the script, and every option is explained."""
    module = script(name)
    with pytest.raises(SystemExit) as done:
        module.main(["--help"])
    assert done.value.code == 0
    shown = " ".join(capsys.readouterr().out.split())
    assert " ".join((module.__doc__ or "").split("\n\n")[0].split()) in shown


def test_a_dictionary_certifies_what_is_dependent(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """All patterns become words, sums of them get whole weights, spoiled reports no word."""
    out = tmp_path / "certificates.jsonl"
    options = ["--features", "24", "--words", "6", "--records", "300", "--out", str(out)]
    assert script("dictionary").main(options) == 0
    shown = capsys.readouterr().out
    certificates = [json.loads(line) for line in out.read_text().splitlines()]
    found = re.search(r"300 reports: 6 words, (\d+) certificates, (\d+) set aside", shown)
    assert found is not None
    assert int(found[1]) == len(certificates) == 294 - int(found[2])
    assert int(found[2]) == shown.count("set aside: all that is new is in bin") > 0
    weights = [weight for each in certificates for weight in each["words"].values()]
    np.testing.assert_allclose(weights, np.round(weights), atol=1e-9)
    assert set(np.round(weights)) == {1.0, 2.0, 3.0}


def test_bearings_are_followed(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Two and three sources are counted and found to a twentieth of a beam, and drawn."""
    out = tmp_path / "bearings.png"
    options = ["--sensors", "12", "--snapshots", "6000", "--out", str(out)]
    assert script("bearings").main([*options, "--half-life", "30"]) == 0
    shown = capsys.readouterr().out
    right = re.search(r"counted right in (\d+) of 120", shown)
    error = re.search(r"median error of a bearing then ([\d.]+) degrees", shown)
    assert right is not None
    assert error is not None
    assert int(right[1]) > 110
    assert float(error[1]) < 0.05 * np.degrees(2 / 12)
    assert out.read_bytes().startswith(PNG)


def test_roots_are_the_bearings() -> None:
    """From the exact subspace of sources the polynomial gives their bearings to rounding."""
    bearings = np.array([-60.0, -5.0, 0.0, 41.0])
    phases = np.pi * np.sin(np.radians(bearings))[:, None] * np.arange(10)
    vectors = np.linalg.qr(np.exp(1j * phases).T)[0].T
    found = script("bearings").bearings_of(vectors)
    # a root on the circle is double: rounding moves it by its square root
    np.testing.assert_allclose(found, bearings, atol=1e-4)


def test_novelty_labels_recur_and_a_change_is_adopted(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """The fault is named by its channels, its label comes back, the new regime is explained."""
    out = tmp_path / "novelty.png"
    assert script("novelty").main(["--samples", "4000", "--out", str(out)]) == 0
    shown = capsys.readouterr().out.splitlines()
    events = [line for line in shown if line.startswith("event")]
    assert [line.endswith('"lube oil"') for line in events] == [False, False, True, False, True]
    assert "oil_bar" in events[0]
    assert "valve_pct" in events[1]
    assert "repeats event 0" in events[2]
    assert events[3].endswith("it lasts, and is adopted")
    adopted = re.search(r"hold ([\d.]+) ± 1\.\d noise units", shown[-1])
    assert adopted is not None
    # what was planted: 5, 4, 4 and 3 units of noise on four channels
    assert abs(float(adopted[1]) - np.sqrt(25 + 16 + 16 + 9)) < 1.0
    assert out.read_bytes().startswith(PNG)


def test_a_daemon_goes_on_where_it_stopped(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Two runs with other packets leave the state of one, bit for bit, and report each event."""
    daemon = script("asyncio_daemon")
    once, twice = tmp_path / "once.arrow", tmp_path / "twice.arrow"
    assert daemon.main(["--samples", "5400", "--state", str(once)]) == 0
    whole = capsys.readouterr().out
    halves = ["--state", str(twice), "--commit", "1000"]
    assert daemon.main(["--samples", "5100", "--packet", "50", *halves]) == 0
    assert daemon.main(["--samples", "300", "--packet", "7", *halves]) == 0
    parts = capsys.readouterr().out
    for shown in (whole, parts):
        assert shown.count("event 0 opened at sample 5000: ['7']") == 1
        assert shown.count("event 0 closed at sample 5149") == 1
    assert "ready at sample 5100" in parts
    assert to_bytes(load(once)) == to_bytes(load(twice))


def test_a_daemon_stops_at_a_signal_with_everything_saved(tmp_path: Path) -> None:
    """What the acquisition had delivered when the signal came is judged and saved."""
    daemon = script("asyncio_daemon")
    state = tmp_path / "state.arrow"
    signals = daemon.signal

    class Told(daemon.Daemon):  # type: ignore[misc, name-defined]
        async def _save(self) -> None:
            await super()._save()
            signals.raise_signal(signals.SIGTERM)

    told = Told(state, 1000)
    daemon.asyncio.run(told.run(10**9, 100, 0.0))
    assert told.monitor.count < 10**5
    assert load(state).count == told.monitor.count
