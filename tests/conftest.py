"""Settings shared by all tests."""

from __future__ import annotations

import os

# the products of the tests are small: on a busy machine a second BLAS thread is only waited for;
# numpy reads this when it loads
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import pytest
from hypothesis import settings

settings.register_profile("default", deadline=None, max_examples=40, derandomize=True)
settings.register_profile("soak", deadline=None, max_examples=1000)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "default"))

ALLOWED_SKIPS = ("this machine lets no process mount a file system in a namespace of its own",)
"""Why a test may be skipped in ``.ci/run``; any other skip is a failure there."""
NO_SKIPS = "STREAMBASIS_NO_SKIPS"


def pytest_sessionfinish(session: pytest.Session) -> None:
    """Fail a run in which a test was skipped for a reason that nobody has agreed to."""
    reporter = session.config.pluginmanager.get_plugin("terminalreporter")
    if reporter is None or not os.environ.get(NO_SKIPS):
        return
    reasons = {str(report.longrepr[2]) for report in reporter.stats.get("skipped", [])}
    unexpected = sorted(r for r in reasons if not any(allowed in r for allowed in ALLOWED_SKIPS))
    if unexpected:
        reporter.write_line("\nskipped without leave: " + "; ".join(unexpected), red=True)
        session.exitstatus = pytest.ExitCode.TESTS_FAILED
