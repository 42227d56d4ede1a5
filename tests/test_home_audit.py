"""A monitor that goes wrong in memory: found by an audit, never committed, repaired or ended."""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from runs import Watched, results, write_feed

from streambasis.audit import ORTHOGONALITY_LIMIT
from streambasis.errors import NumericalError
from streambasis.monitor import NoveltyMonitor
from streambasis.snapshot import load
from streambasis.watch import loop as loop_module

ROWS = 16_000
HURT_AT = 9_216


@pytest.fixture(scope="module")
def feed(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a feed without malformed rows."""
    return write_feed(tmp_path_factory.mktemp("feed") / "feed.csv", ROWS)


def test_a_sound_run_passes_its_audits(feed: Path, tmp_path: Path) -> None:
    """There is one before every commit, and the readings say what it found."""
    watched = Watched(feed, tmp_path / "home")()
    assert (watched.vitals.failed_audits, watched.vitals.unsound) == (0, None)
    assert watched.vitals.audits > 2
    assert 0 < watched.vitals.orthogonality < ORTHOGONALITY_LIMIT


def hurt_basis(monitor: NoveltyMonitor) -> None:
    """Flip a bit of the exponent of a number in the basis that learns on."""
    directions = monitor.basis._core.core.directions
    directions.view(np.int64)[0, 2] ^= 1 << 54


def hurt_scoring(monitor: NoveltyMonitor) -> None:
    """Change a direction that samples are judged by until the block ends."""
    assert monitor._judge is not None
    monitor._judge.model.vectors[1] *= 1 + 1e-9


def hurt_known(monitor: NoveltyMonitor) -> None:
    """Turn a direction of adopted behaviour."""
    known = monitor.known._core.directions
    assert len(known)
    known[0, 3] += 0.25


def hurt_mean(monitor: NoveltyMonitor) -> None:
    """Lose a number of the mean."""
    assert monitor._judge is not None
    monitor._judge.model.mean[3] = math.nan


HURTS = [hurt_basis, hurt_scoring, hurt_known, hurt_mean]


class Harm:
    """Hurts the monitor of a run once it has come so far, once or every time."""

    def __init__(self, hurt: Callable[[NoveltyMonitor], None], *, again: bool = False) -> None:
        self.hurt, self.again = hurt, again
        self.done = 0
        self.watched: Watched | None = None

    def __call__(self, samples: int) -> None:
        """Hurt it."""
        assert self.watched is not None
        if samples >= HURT_AT and (self.again or not self.done):
            self.done += 1
            self.hurt(self.watched.run._monitor)


@pytest.fixture
def often(monkeypatch: pytest.MonkeyPatch) -> None:
    """Have an audit after every batch, whatever it costs, so that harm is found at once."""
    monkeypatch.setattr(loop_module, "AUDIT_SHARE", math.inf)


def harmed(feed: Path, folder: Path | None, harm: Harm, *, reopens: bool = True) -> Watched:
    """Return a run that is going to be harmed."""
    # adoption soon: there is known behaviour when the harm is done
    harm.watched = Watched(feed, folder, harm, reopens=reopens, adopt_after=60, audit_every=0.0)
    return harm.watched


@pytest.fixture(scope="module")
def sound(feed: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, bytes]:
    """Return the results of a run like the harmed ones, without harm."""
    folder = tmp_path_factory.mktemp("sound") / "home"
    Watched(feed, folder, adopt_after=60)()
    return results(folder)


@pytest.mark.usefixtures("often")
@pytest.mark.parametrize("hurt", HURTS)
def test_a_run_goes_back_to_what_was_sound(
    feed: Path, sound: dict[str, bytes], tmp_path: Path, hurt: Callable[[NoveltyMonitor], None]
) -> None:
    """The harm is never committed, and the results are those of a run without it."""
    watched = harmed(feed, tmp_path / "home", Harm(hurt))()
    assert results(tmp_path / "home") == sound
    assert watched.vitals.failed_audits == 1
    assert watched.vitals.unsound is None
    (warning,) = watched.ear.warnings
    assert f"at sample {HURT_AT} " in warning
    assert "went back to the last commit" in warning


@pytest.mark.usefixtures("often")
def test_a_run_that_cannot_go_back_ends_and_keeps_what_is_sound(
    feed: Path, sound: dict[str, bytes], tmp_path: Path
) -> None:
    """The error says what was found; the next run goes on from the last commit, to the same end."""
    folder = tmp_path / "home"
    watched = harmed(feed, folder, Harm(hurt_basis), reopens=False)
    with pytest.raises(NumericalError, match=f"at sample {HURT_AT} an audit found"):
        watched()
    assert watched.vitals.unsound is not None
    assert 0 < load(folder / "state.arrow").count < HURT_AT
    Watched(feed, folder, adopt_after=60)()
    assert results(folder) == sound


@pytest.mark.usefixtures("often")
def test_harm_that_comes_again_ends_the_run(feed: Path, tmp_path: Path) -> None:
    """It would go back for ever otherwise."""
    watched = harmed(feed, tmp_path / "home", Harm(hurt_basis, again=True))
    with pytest.raises(NumericalError, match="once more after going back to sample"):
        watched()
    assert watched.vitals.failed_audits > 1


@pytest.mark.usefixtures("often")
def test_without_a_home_the_run_ends_at_the_next_audit(feed: Path) -> None:
    """Nothing is kept that could be gone back to."""
    watched = harmed(feed, None, Harm(hurt_basis))
    with pytest.raises(NumericalError, match=r"defect of .*, which is sound below 3"):
        watched()


def test_audits_take_no_more_than_their_share(feed: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """An audit of one second, asked for every second, comes at most every fifty."""
    clock = SimpleNamespace(now=0.0)
    module = SimpleNamespace(
        monotonic=lambda: clock.now, perf_counter=lambda: clock.now, time=lambda: clock.now
    )
    monkeypatch.setattr(loop_module, "time", module)
    audit = NoveltyMonitor.audit

    def slow(monitor: NoveltyMonitor) -> object:
        clock.now += 1.0
        return audit(monitor)

    monkeypatch.setattr(NoveltyMonitor, "audit", slow)

    def after(samples: int) -> None:
        clock.now += samples / 100 - clock.batches
        clock.batches = samples / 100

    clock.batches = 0.0
    watched = Watched(feed, None, after, audit_every=1.0)()
    most = clock.now * loop_module.AUDIT_SHARE + 1
    assert 2 <= watched.vitals.audits <= most
