"""Keep a dictionary of independent feature vectors, with a certificate for every other one.

    python examples/dictionary.py --features 48 --words 12 --records 400 --out CERTIFICATES.jsonl

Test rigs report feature vectors: counts in 48 bins, say, for each thing they were made to do. Some
reports show something for the first time; most are made of what was reported before ("twice the
start-up and one emergency stop"). A StreamBasis takes each report as it comes. An independent one
becomes a word of the dictionary. Of a dependent one `explain` says which words it is made of, and
how much of each: a certificate that anyone can check with the words alone, and that this script
does check with NumPy. A report that is new in a single bin only is set aside as spoiled: `residual`
shows which bin. Reports, bins and figures are made up.
"""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np

from streambasis import StreamBasis

FIRST_SHOWN = 6
SPOILED_SHARE = 0.01
TOLERANCE = 1e-10
"""Counts are exact: whatever lies further outside than this is new."""


def reports(features: int, words: int, count: int, seed: int) -> Iterator[np.ndarray]:
    """Yield invented reports: sums of up to four of ``words`` patterns, one in a hundred spoiled.

    A pattern is a few peaks of whole counts; it is reported once by itself before it is in use.
    """
    rng = np.random.default_rng(seed)
    patterns = np.zeros((words, features))
    for pattern in patterns:
        peaks = rng.choice(features, size=max(2, features // 8), replace=False)
        pattern[peaks] = rng.integers(1, 10, size=len(peaks))
    in_use = 0
    for i in range(count):
        if in_use < min(words, 1 + i * 2 * words // count):
            yield patterns[in_use]
            in_use += 1
            continue
        parts = rng.choice(in_use, size=min(in_use, int(rng.integers(1, 5))), replace=False)
        report = rng.integers(1, 4, size=len(parts)) @ patterns[parts]
        if rng.random() < SPOILED_SHARE:
            report[rng.integers(features)] += 1.0
        yield report


def spoiled_bin(basis: StreamBasis, outside: np.ndarray) -> int | None:
    """Return the bin that alone makes a report new, or None where it takes more than one.

    If the rest of the report is in the span, what is outside is what the span leaves of that bin.
    """
    found = int(np.abs(outside).argmax())
    alone = basis.residual(np.eye(len(outside))[found])
    cosine = abs(alone @ outside) / (np.linalg.norm(alone) * np.linalg.norm(outside))
    return found if basis.rank and 1.0 - cosine < TOLERANCE else None


def certificate(basis: StreamBasis, report: np.ndarray) -> dict[int, float]:
    """Return the words that a dependent report is made of, by number, with their weights."""
    numbers, weights, _ = basis.explain(report)
    least = TOLERANCE * np.abs(weights).max()
    return {
        int(number): float(weight)
        for number, weight in zip(numbers, weights, strict=True)
        if abs(weight) > least
    }


def main(arguments: list[str] | None = None) -> int:
    """Read invented reports and say what each is made of."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").split("\n\n")[0])
    parser.add_argument("--features", type=int, default=48, help="bins of a report")
    parser.add_argument("--words", type=int, default=12, help="independent patterns behind them")
    parser.add_argument("--records", type=int, default=400, help="reports to read")
    parser.add_argument("--seed", type=int, default=3, help="of the random numbers")
    parser.add_argument("--out", type=Path, help="file for the certificates (JSON lines)")
    options = parser.parse_args(arguments)

    basis = StreamBasis(options.features, rtol=TOLERANCE)
    words: dict[int, np.ndarray] = {}  # the reports that became words, by the basis's number
    certificates: list[dict[str, Any]] = []
    spoiled, worst, shown = 0, 0.0, 0
    feed = reports(options.features, options.words, options.records, options.seed)
    for i, report in enumerate(feed):
        outside = basis.residual(report)
        share = float(np.linalg.norm(outside) / np.linalg.norm(report))
        if share > TOLERANCE and (found := spoiled_bin(basis, outside)) is not None:
            spoiled += 1
            print(f"report {i:4d}  set aside: all that is new is in bin {found}")
            continue
        decision = basis.push(report)
        if decision.grew:
            words[decision.sample] = report
            print(f"report {i:4d}  is word {decision.rank:2d}, {share:6.1%} of it new")
            continue
        parts = certificate(basis, report)
        error = np.linalg.norm(report - sum(w * words[number] for number, w in parts.items()))
        worst = max(worst, float(error / decision.norm))
        order = list(words)
        named = {order.index(number) + 1: weight for number, weight in parts.items()}
        certificates.append({"report": i, "words": named})
        if len(parts) > 2 and shown < FIRST_SHOWN:
            shown += 1
            text = " + ".join(f"{weight:.6g}·word {word}" for word, weight in named.items())
            print(f"report {i:4d}  = {text}")
    audit = basis.audit()
    print(
        f"\n{options.records} reports: {basis.rank} words, {len(certificates)} certificates, "
        f"{spoiled} set aside"
    )
    print(f"worst error of a certificate, checked with the words alone: {worst:.1e} of the report")
    print(f"condition of the words {audit.condition:.3g}, orthogonality {audit.orthogonality:.2f}")
    if options.out:
        lines = [json.dumps(each) + "\n" for each in certificates]
        options.out.write_text("".join(lines), encoding="ascii")
    return 0


if __name__ == "__main__":
    sys.exit(main())
