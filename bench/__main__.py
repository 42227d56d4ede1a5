"""``python -m bench [QUESTION ...] [--quick] [--out FOLDER]``: print tables, write one report.

Each question is a module of this package with ``run(quick: bool) -> list[Table]``.
"""

from __future__ import annotations

import argparse
import importlib
import os
import sys
import time
from pathlib import Path

# OpenBLAS kernels chosen for old processors would slow every side of a comparison
for name in ("OPENBLAS_CORETYPE", "OPENBLAS_L2_SIZE"):
    os.environ.pop(name, None)

from bench import harness, report  # noqa: E402 - numpy reads those variables when it loads

QUESTIONS = ("grow", "window", "principal", "snapshot", "detect", "feeds", "daemon", "fleet")
ON_REQUEST = ("window_soak", "principal_soak")
"""Long ones, that run only when they are named."""


def main(arguments: list[str] | None = None) -> int:
    """Run the questions asked for, all of them when none is named."""
    present = [q for q in QUESTIONS if (Path(__file__).parent / f"{q}.py").exists()]
    parser = argparse.ArgumentParser(prog="python -m bench", description=__doc__)
    choices = [*present, *ON_REQUEST, []]
    named = ", ".join([*present, *ON_REQUEST])
    parser.add_argument("question", nargs="*", choices=choices, help=named)
    parser.add_argument("--quick", action="store_true", help="smaller sizes, rougher figures")
    parser.add_argument("--out", type=Path, default=Path("bench-results"), metavar="FOLDER")
    parser.add_argument(
        "--readme", type=Path, metavar="FILE", help="put the headline tables between its marks"
    )
    options = parser.parse_args(arguments)
    machine = harness.machine()
    print(f"{report.measured_on(machine)}\n")
    results: dict[str, list[harness.Table]] = {}
    for question in options.question or present:
        start = time.perf_counter()
        with harness.one_blas_thread():
            results[question] = importlib.import_module(f"bench.{question}").run(
                quick=options.quick
            )
        for table in results[question]:
            print(table.markdown(), flush=True)
        print(f"({question}: {time.perf_counter() - start:.0f} s)\n", flush=True)
        # after each question, so that what was measured outlives a run that is cut off
        written = report.write_report(machine, results, options.out)
    print(f"written to {' and '.join(map(str, written))}")
    if options.readme:
        report.write_headlines(machine, results, options.readme)
    return 0


if __name__ == "__main__":
    sys.exit(main())
