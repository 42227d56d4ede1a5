"""``python -m streambasis``: the same as the ``streambasis`` command."""

from __future__ import annotations

import sys

from streambasis.cli import main

if __name__ == "__main__":
    sys.exit(main())
