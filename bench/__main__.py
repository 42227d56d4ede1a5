"""``python -m bench [QUESTION ...] [--quick] [--out FOLDER]``: print tables, write them as JSON.

Each question is a module of this package with ``run(quick: bool) -> list[Table]``.
"""

from __future__ import annotations

import argparse
import importlib
import os
import sys
from pathlib import Path

# OpenBLAS kernels chosen for old processors would slow every side of a comparison
for name in ("OPENBLAS_CORETYPE", "OPENBLAS_L2_SIZE"):
    os.environ.pop(name, None)

from bench import harness  # noqa: E402 - numpy reads those variables when it loads

QUESTIONS = ("grow", "window", "principal", "snapshot", "detect", "feeds")
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
    options = parser.parse_args(arguments)
    machine = ", ".join(f"{key} {value}" for key, value in harness.machine().items())
    print(f"streambasis bench on {machine}\n")
    for question in options.question or present:
        with harness.one_blas_thread():
            tables = importlib.import_module(f"bench.{question}").run(quick=options.quick)
        for table in tables:
            print(table.markdown(), flush=True)
        print(f"written to {harness.write(tables, options.out, question)}\n", flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main())
