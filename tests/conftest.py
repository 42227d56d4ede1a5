"""Settings shared by all tests."""

from __future__ import annotations

import os

from hypothesis import settings

settings.register_profile("default", deadline=None, max_examples=40, derandomize=True)
settings.register_profile("soak", deadline=None, max_examples=1000)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "default"))
