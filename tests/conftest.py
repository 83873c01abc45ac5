"""Test lanes: NUMBA_DISABLE_JIT=1 switches the compiler off; STEERKIT_TEST_WITHOUT_NUMBA=1 makes numba impossible to import."""

from __future__ import annotations

import os
import sys

if os.environ.get("STEERKIT_TEST_WITHOUT_NUMBA"):
    sys.modules["numba"] = None  # type: ignore[assignment]

os.environ.setdefault("MPLBACKEND", "Agg")

from hypothesis import settings

settings.register_profile("fixed", derandomize=True, deadline=None)
settings.register_profile("wide", deadline=None)  # pytest --hypothesis-profile wide: other examples each time
settings.load_profile("fixed")
