"""Shared by all tests: hypothesis without a clock, plots without a screen."""

from __future__ import annotations

import os

from hypothesis import settings

os.environ.setdefault("MPLBACKEND", "Agg")
settings.register_profile("fixed", deadline=None, derandomize=True, database=None)
settings.load_profile("fixed")
