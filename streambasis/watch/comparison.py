"""``streambasis compare``: how far two snapshots are apart, and on which channels."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any, TextIO

import numpy as np
from rich.console import Console
from rich.table import Table

from streambasis.basis import StreamBasis
from streambasis.compare import channel_shares, principal_angles, subspace_distance
from streambasis.errors import SnapshotError
from streambasis.monitor import NoveltyMonitor
from streambasis.principal import PrincipalBasis
from streambasis.snapshot import load
from streambasis.watch.show import plain_console

MOST_CHANNELS = 10
MOST_ANGLES = 20
"""How many are shown to people; JSON has all of them."""


def compare(first: Path, second: Path, out: TextIO, *, as_json: bool) -> None:
    """Write how two snapshots differ.

    Parameters
    ----------
    first, second : Path
        Snapshots of bases or monitors with the same channels.
    out : text file
        Where to.
    as_json : bool
        One JSON object, instead of text made for reading.

    Raises
    ------
    SnapshotError
        If one is no sound snapshot, holds no basis yet, or their channels differ.
    """
    content = differences(first, second)
    if as_json:
        out.write(json.dumps(content, ensure_ascii=False) + "\n")
    else:
        _print(content, plain_console(out))


def differences(first: Path, second: Path) -> dict[str, Any]:
    """Return how two snapshots differ, as plain numbers, text, lists and dicts.

    Raises
    ------
    SnapshotError
        As :func:`compare`.

    Notes
    -----
    Where the two have different inner products (monitors scale channels by their noise), that of
    the first counts.
    """
    objects = [load(first), load(second)]
    a, b = (_basis(obj, path) for obj, path in zip(objects, (first, second), strict=True))
    if a.channels != b.channels:
        raise SnapshotError(_other_channels(a.channels, b.channels, second))
    # as vectors in channel units, the second is seen in the inner product of the first
    vectors = b.vectors
    angles, shares = principal_angles(a, vectors), channel_shares(a, vectors)
    order = np.argsort(-shares, kind="stable")
    return {
        "files": [str(first), str(second)],
        "kinds": [type(obj).__name__ for obj in objects],
        "samples": [obj.count for obj in objects],
        "ranks": [a.rank, b.rank],
        "noise": [_noise(obj) for obj in objects],
        "angles_degrees": np.degrees(angles).tolist(),
        "distance": subspace_distance(a, vectors),
        "channels": {a.channels[i]: float(shares[i]) for i in order if shares[i] > 0},
    }


def _basis(obj: Any, path: Path) -> StreamBasis | PrincipalBasis:
    if isinstance(obj, NoveltyMonitor):
        if not obj.baseline_done:
            raise SnapshotError(f"{path}: its baseline is not complete, so it holds no basis yet")
        return obj.basis
    basis: StreamBasis | PrincipalBasis = obj
    return basis


def _noise(obj: Any) -> float | None:
    noise = getattr(obj, "noise", None)
    return None if noise is None or not np.isfinite(noise) else float(noise)


def _other_channels(a: tuple[str, ...], b: tuple[str, ...], second: Path) -> str:
    missing = [name for name in a if name not in set(b)]
    further = [name for name in b if name not in set(a)]
    parts = [
        f"{what} {', '.join(repr(name) for name in names[:4])}"
        + (f" and {len(names) - 4} more" if len(names) > 4 else "")
        for what, names in (("without", missing), ("with", further))
        if names
    ]
    return f"{second}: its channels differ: {' and '.join(parts) or 'another order'}"


def _print(content: dict[str, Any], console: Console) -> None:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("")
    for path in content["files"]:
        table.add_column(path, justify="right")
    table.add_row("kind", *content["kinds"])
    table.add_row("samples", *(f"{count:,}" for count in content["samples"]))
    table.add_row("rank", *map(str, content["ranks"]))
    if content["noise"] != [None, None]:
        shown = ("" if noise is None else f"{noise:.4g}" for noise in content["noise"])
        table.add_row("noise floor", *shown)
    console.print(table)
    console.print()
    angles = content["angles_degrees"]
    more = f" and {len(angles) - MOST_ANGLES} more" if len(angles) > MOST_ANGLES else ""
    largest = sorted(angles, reverse=True)[:MOST_ANGLES]
    text = ", ".join(f"{angle:.4g}°" for angle in largest)
    console.print(f"principal angles, largest first: {text or 'none'}{more}", soft_wrap=True)
    extra = content["ranks"][1] - content["ranks"][0]
    if extra:
        which = content["files"][int(extra > 0)]
        directions = "direction" if abs(extra) == 1 else "directions"
        console.print(f"{which} has {abs(extra)} more {directions}", soft_wrap=True)
    channels = list(content["channels"].items())
    if not channels:
        console.print("no difference beyond rounding")
        return
    console.print()
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("channels that differ most")
    table.add_column("share", justify="right")
    for name, share in channels[:MOST_CHANNELS]:
        table.add_row(name, f"{100 * share:.1f} %")
    console.print(table)
