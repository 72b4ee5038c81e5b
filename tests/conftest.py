"""What all tests share: reproducible property tests, and pictures drawn without a screen."""

from __future__ import annotations

import os

from hypothesis import settings

os.environ.setdefault("MPLBACKEND", "Agg")

# The same examples on every run and machine; a slow machine is no failure. A search for new
# examples is asked for by name: `pytest --hypothesis-profile=search`.
settings.register_profile("repeatable", derandomize=True, deadline=None)
settings.register_profile("search", deadline=None, max_examples=2000)
settings.load_profile("repeatable")
