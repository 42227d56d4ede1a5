"""``streambasis show`` and ``streambasis compare`` say what snapshots hold and how they differ."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import streambasis
from streambasis import cli
from streambasis.compare import channel_shares, principal_angles
from streambasis.snapshot import save
from streambasis.state import State

NAMES = ("flow [l/s]", "pressure", "speed", ":smile:", "temperature")


def ask(capsys: pytest.CaptureFixture[str], *arguments: object) -> tuple[int, str, str]:
    """Run the command and return exit code, output and errors."""
    code = cli.main([str(argument) for argument in arguments])
    shown = capsys.readouterr()
    return code, shown.out, shown.err


def tilted(degrees: float) -> streambasis.StreamBasis:
    """Return the plane of the first and second channel, tilted about the first to the third."""
    angle = np.radians(degrees)
    basis = streambasis.StreamBasis(NAMES)
    basis.push([2.0, 0, 0, 0, 0])
    basis.push([0, 3 * np.cos(angle), 3 * np.sin(angle), 0, 0])
    return basis


def monitor(seed: int = 0, samples: int = 1500) -> streambasis.NoveltyMonitor:
    """Return a monitor of two sources, with a fault near the end."""
    rng = np.random.default_rng(seed)
    sources = np.random.default_rng(9).normal(size=(2, len(NAMES)))
    feed = rng.normal(size=(samples, 2)) @ sources + 0.1 * rng.normal(size=(samples, len(NAMES)))
    feed[1200:1250, 1] += 3
    found = streambasis.NoveltyMonitor(NAMES, baseline=500, false_alarm=1e-3)
    found.push_many(feed)
    return found


def test_show_tells_what_a_basis_holds(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Kind, channels as they are written, samples, rank, pivots, leading channels and audit."""
    path = tmp_path / "state.arrow"
    save(tilted(30), path)
    code, out, _ = ask(capsys, "show", path)
    assert code == cli.OK
    for text in (
        str(path),
        "streambasis-snapshot 1; digest verified",
        "StreamBasis, float64",
        "5: flow [l/s], pressure, speed, :smile:, temperature",
        "2, the newest is 1",
        "2 directions",
        "pressure 75 %, speed 25 %",
        "(sound below 3)",
    ):
        assert text in out


def test_show_gives_programs_everything(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The JSON object holds channels, counts, energies, noise and audit as numbers."""
    path = tmp_path / "state.arrow"
    basis = streambasis.PrincipalBasis(NAMES, rank=2, half_life=300)
    basis.push_many(np.random.default_rng(0).normal(size=(200, 5)) * [5, 3, 1, 1, 1])
    save(basis, path)
    code, out, _ = ask(capsys, "show", path, "--json")
    assert code == cli.OK
    shown = json.loads(out)
    assert shown["kind"] == "PrincipalBasis"
    assert shown["bytes"] == path.stat().st_size
    assert shown["channels"] == list(NAMES)
    assert shown["samples"] == 200
    assert shown["newest_sample"] == 199
    assert shown["half_life"] == pytest.approx(300)
    assert shown["noise"] == basis.noise
    assert [direction["energy"] for direction in shown["directions"]] == basis.energies.tolist()
    assert shown["audit"]["orthogonality"] == basis.audit().orthogonality
    assert shown["audit"]["coverage"] is None


@pytest.mark.parametrize(
    ("start", "oldest", "newest"),
    [
        (100.0, "12 (103 s)", "19 (104.75 s)"),
        (
            np.datetime64("2026-03-01T00:00:00"),
            "12 (2026-03-01T00:00:03.000000000)",
            "19 (2026-03-01T00:00:04.750000000)",
        ),
    ],
    ids=["seconds", "dates"],
)
def test_show_tells_the_window(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], start: Any, oldest: str, newest: str
) -> None:
    """The limits of the window, its oldest and newest sample and their times."""
    basis = streambasis.StreamBasis(NAMES, window=8, span=60)
    steps = np.arange(20) * 250
    at = start + steps / 1000 if isinstance(start, float) else start + steps.astype("m8[ms]")
    basis.push_many(np.random.default_rng(0).normal(size=(20, 5)), at=at)
    save(basis, tmp_path / "state.arrow")
    _, out, _ = ask(capsys, "show", tmp_path / "state.arrow")
    assert f"8 samples or 60 s; it holds 8, from sample {oldest} to {newest}" in out
    shown = json.loads(ask(capsys, "show", tmp_path / "state.arrow", "--json")[1])
    assert (shown["oldest_sample"], shown["newest_sample"]) == (12, 19)
    assert (shown["window"], shown["span_seconds"], shown["window_samples"]) == (8, 60.0, 8)


def test_of_a_home_its_snapshot_is_shown(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """``show`` and ``compare`` take the folder of a run for the snapshot in it."""
    basis = streambasis.StreamBasis(NAMES)
    basis.push(np.ones(len(NAMES)))
    save(basis, tmp_path / "state.arrow")
    assert ask(capsys, "show", tmp_path) == ask(capsys, "show", tmp_path / "state.arrow")
    code, out, _ = ask(capsys, "compare", tmp_path, tmp_path / "state.arrow")
    assert code == cli.OK
    assert "no difference beyond rounding" in out
    code, _, err = ask(capsys, "show", tmp_path.parent)
    assert code == cli.SNAPSHOT
    assert "state.arrow: snapshot cannot be read" in err


def test_show_tells_how_a_monitor_is_doing(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Baseline, drift in degrees and events are shown, in text and in JSON."""
    path = tmp_path / "state.arrow"
    watched = monitor()
    watched.label(0, "valve stuck")
    save(watched, path)
    _, out, _ = ask(capsys, "show", path)
    assert "500 samples, complete" in out
    assert "° since the baseline" in out
    assert "the last is 0 (valve stuck), peak" in out
    shown = json.loads(ask(capsys, "show", path, "--json")[1])
    assert shown["drift_degrees"] == np.degrees(watched.drift)
    assert shown["last_event"]["channels"] == ["pressure"]
    assert shown["rank"] == 2


def test_show_knows_an_unfinished_baseline_and_an_empty_basis(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """What has seen nothing yet is shown as such."""
    save(streambasis.NoveltyMonitor(NAMES), tmp_path / "monitor.arrow")
    save(streambasis.StreamBasis(NAMES), tmp_path / "basis.arrow")
    save(streambasis.PrincipalBasis(NAMES), tmp_path / "principal.arrow")
    _, out, _ = ask(capsys, "show", tmp_path / "monitor.arrow")
    assert "2,000 samples, not complete" in out
    for name in ("basis", "principal"):
        code, out, _ = ask(capsys, "show", tmp_path / f"{name}.arrow")
        assert code == cli.OK
        assert "none yet" in out
        assert "0 directions" in out
        assert json.loads(ask(capsys, "show", tmp_path / f"{name}.arrow", "--json")[1])["rank"] == 0


def test_show_finds_the_one_object_in_a_larger_state(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """A state that holds an object beside other things is shown as that object."""
    state = State("Position", {"row": 7}, {}, {"monitor": tilted(0).to_state()})
    save(state, tmp_path / "state.arrow")
    _, out, _ = ask(capsys, "show", tmp_path / "state.arrow")
    assert "StreamBasis" in out


@pytest.mark.parametrize("command", ["show", "compare"])
def test_bad_snapshots_end_with_one_line(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], command: str
) -> None:
    """A missing or damaged snapshot has an exit code of its own, and its name in the message."""
    good, missing, bad = (tmp_path / name for name in ("good.arrow", "none.arrow", "bad.arrow"))
    save(tilted(0), good)
    bad.write_bytes(good.read_bytes()[:-1])
    for path in (missing, bad):
        given = [path] if command == "show" else [good, path]
        code, out, err = ask(capsys, command, *given)
        assert code == cli.SNAPSHOT
        assert out == ""
        assert err.startswith(f"streambasis: {path}: ")
        assert err.count("\n") == 1


def test_compare_tells_angles_in_degrees_and_channels(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """A plane tilted by 30 degrees is told as that, on the two channels that it tilts between."""
    a, b = tmp_path / "a.arrow", tmp_path / "b.arrow"
    save(tilted(0), a)
    save(tilted(30), b)
    code, out, _ = ask(capsys, "compare", a, b)
    assert code == cli.OK
    assert "principal angles, largest first: 30°, 0°" in out
    assert "speed" in out.split("channels that differ most")[1]
    shown = json.loads(ask(capsys, "compare", a, b, "--json")[1])
    assert shown["angles_degrees"] == pytest.approx([0, 30])
    assert shown["distance"] == pytest.approx(0.5)
    # outside b, the direction e2 has e2 - cos(30°)·(cos, sin) = (1/4, -sqrt(3)/4); outside a, the
    # direction of b has sin(30°) on the third channel: squares 1/16 against 3/16 + 1/4
    assert shown["channels"] == pytest.approx({"speed": 7 / 8, "pressure": 1 / 8})


def test_compare_of_the_same_finds_nothing(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """A snapshot differs from itself by nothing beyond rounding."""
    path = tmp_path / "a.arrow"
    for obj in (tilted(30), monitor()):
        save(obj, path)
        _, out, _ = ask(capsys, "compare", path, path)
        assert "no difference beyond rounding" in out


def test_compare_of_monitors_with_other_scales(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Monitors whose baselines gave other scales are compared in those of the first."""
    one, other = monitor(1), monitor(2)
    save(one, tmp_path / "a.arrow")
    save(other, tmp_path / "b.arrow")
    code, out, _ = ask(capsys, "compare", tmp_path / "a.arrow", tmp_path / "b.arrow", "--json")
    assert code == cli.OK
    shown = json.loads(out)
    expected = np.degrees(principal_angles(one.basis, other.basis.vectors))
    assert shown["angles_degrees"] == expected.tolist()
    assert max(shown["angles_degrees"]) < 5


def test_compare_names_more_directions(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A direction that only one of the two has is told."""
    a, b = tmp_path / "a.arrow", tmp_path / "b.arrow"
    save(tilted(0), a)
    larger = tilted(0)
    larger.push([0, 0, 0, 1.0, 0])
    save(larger, b)
    _, out, _ = ask(capsys, "compare", a, b)
    assert f"{b} has 1 more direction\n" in out
    assert json.loads(ask(capsys, "compare", a, b, "--json")[1])["channels"] == {":smile:": 1.0}


@pytest.mark.parametrize(
    ("other", "message"),
    [
        (("flow [l/s]", "pressure", "speed", ":smile:", "level"), "without 'temperature' and with"),
        (NAMES[::-1], "another order"),
    ],
    ids=["names", "order"],
)
def test_compare_refuses_other_channels(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], other: Any, message: str
) -> None:
    """Snapshots of other channels are refused, and the difference is named."""
    a, b = tmp_path / "a.arrow", tmp_path / "b.arrow"
    save(tilted(0), a)
    save(streambasis.StreamBasis(other), b)
    code, _, err = ask(capsys, "compare", a, b)
    assert code == cli.SNAPSHOT
    assert str(b) in err
    assert message in err


def test_compare_refuses_an_unfinished_baseline(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """A monitor without a basis cannot be compared."""
    a, b = tmp_path / "a.arrow", tmp_path / "b.arrow"
    save(tilted(0), a)
    save(streambasis.NoveltyMonitor(NAMES), b)
    code, _, err = ask(capsys, "compare", a, b)
    assert code == cli.SNAPSHOT
    assert f"{b}: its baseline is not complete" in err


@pytest.mark.parametrize("dtype", ["float64", "complex128"])
def test_channel_shares_are_those_of_the_projections(dtype: str) -> None:
    """Added up they are the squared Frobenius norm of the difference of the two projections."""
    rng = np.random.default_rng(3)
    bases = []
    for count in (3, 4):
        rows = rng.normal(size=(6, count)) + (
            1j * rng.normal(size=(6, count)) if dtype[0] == "c" else 0
        )
        bases.append(np.linalg.qr(rows)[0].T.astype(dtype))
    a, b = bases
    first, second = a.conj().T @ a, b.conj().T @ b
    parts = [(np.eye(6) - second) @ first, (np.eye(6) - first) @ second]
    # column i of (1 - P)Q, summed over its rows in the coordinates of the other side
    squares = sum((np.abs(part) ** 2).sum(axis=1) for part in parts)
    assert squares.sum() == pytest.approx(np.linalg.norm(first - second) ** 2)
    assert channel_shares(a, b) == pytest.approx(squares / squares.sum())
    assert not channel_shares(a, a).any()
