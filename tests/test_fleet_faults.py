"""A commit of a fleet on a disk that fails at any operation, and through power cuts."""

from __future__ import annotations

import shutil
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from streambasis import Fleet, to_bytes
from streambasis.errors import HomeError
from tests.faults import Faults, PowerCut
from tests.fleets import CONFIG, feed, fleet_of, mixed, table_of

KEYS = ["north", "south", "west"]
MOST = 80


def states(fleet: Fleet) -> dict[Any, bytes]:
    """Return everything that every feed is."""
    return {key: to_bytes(fleet.monitor(key)) for key in fleet.keys}


@pytest.fixture(scope="module")
def begun(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, bytes], list[Any]]:
    """Return a home with one commit, what it holds, and the batches that follow."""
    home = tmp_path_factory.mktemp("begun") / "home"
    first, *rest = mixed(fleet_of(KEYS, 200), [300, 500], np.random.default_rng(0))
    with Fleet(CONFIG, key="pump", threads=1, home=home) as fleet:
        fleet.push_many(first)
        fleet.commit({"row": 1})
        return home, states(fleet), rest


@pytest.mark.parametrize(("forever", "cut"), [(False, False), (True, False), (True, True)])
def test_a_commit_is_all_or_nothing(
    forever: bool, cut: bool, begun: Any, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Whichever operation fails, the home holds the last commit or this one, never a mixture."""
    home, old, rest = begun
    met_error = 0
    for at in range(1, MOST):
        path = tmp_path / str(at)
        shutil.copytree(home, path)
        fleet = Fleet(CONFIG, key="pump", threads=1, live=2, home=path)
        fleet.push_many(rest[0])
        with monkeypatch.context() as patch:
            error = {"error": PowerCut} if cut else {}
            faults = Faults(patch, at, forever=forever, **error)
            failed = False
            try:
                fleet.commit({"row": 2})
            except (HomeError, PowerCut):
                failed = True
        if not cut:
            fleet.push_many(rest[1])
            fleet.commit({"row": 3})
            new = states(fleet)
        else:
            new = None
        fleet.close()
        with Fleet(CONFIG, key="pump", threads=1, home=path) as again:
            if cut:
                assert again.position in ({"row": 1}, {"row": 2})
                if again.position == {"row": 1}:
                    assert failed
                    assert states(again) == old
                    again.push_many(rest[0])
                assert {k: v.count for k, v in ((k, again[k]) for k in KEYS)} == counts(
                    rest[0], old
                )
            else:
                assert again.position == {"row": 3}
                assert states(again) == new
        shutil.rmtree(path)
        met_error += failed
        if not faults.met:
            break
    else:
        raise AssertionError(f"more than {MOST} operations in a commit")
    assert met_error >= 5


def counts(batch: Any, old: dict[str, bytes]) -> dict[str, int]:
    """Return how many samples each feed has after a batch."""
    from streambasis import from_bytes

    keys = batch["pump"].to_pylist()
    return {key: from_bytes(old[key]).count + keys.count(key) for key in KEYS}


def test_a_disk_that_is_full_leaves_feeds_in_memory(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A feed that cannot be parked stays, a warning says so, and nothing of its answers is lost."""
    values = feed(0, 200)
    with Fleet(CONFIG, key="pump", threads=1, live=1, home=tmp_path) as fleet:
        fleet.push_many(table_of(["north"] * 200, values))
        with monkeypatch.context() as patch:
            Faults(patch, 1, forever=True)
            with pytest.warns(RuntimeWarning, match="'north'.*stays in memory"):
                fleet.push_many(table_of(["south"] * 200, values))
        assert fleet.live == 2
        fleet.push_many(table_of(["west"] * 200, values))
        assert fleet.live == 1
        assert [fleet[key].count for key in KEYS] == [200, 200, 200]


def test_old_snapshots_are_removed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Files hold no more than twice what is needed, and a file more, however long it runs."""
    from streambasis.fleet import parking

    monkeypatch.setattr(parking, "FILE_BYTES", 200_000)
    values = feed(0, 400)
    with Fleet(CONFIG, key="pump", threads=1, live=1, home=tmp_path) as fleet:
        for start in range(0, 400, 10):
            part = values[start : start + 10]
            keys = [key for key in KEYS for _ in range(10)]
            fleet.push_many(table_of(keys, np.vstack([part] * 3)))
            if start % 50 == 0:
                fleet.commit(start)
        fleet.commit(400)
        fleet.commit(400)
        size = sum(file.stat().st_size for file in (tmp_path / "feeds").iterdir())
        needed = sum(len(data) for data in states(fleet).values())
        assert size <= 2 * needed + 2 * 200_000 + needed
