"""What every test shares: one BLAS thread, no windows, hypothesis that finds the same cases each time."""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("MPLBACKEND", "Agg")

from hypothesis import settings

settings.register_profile("clingstone", deadline=None, derandomize=True, max_examples=50)
settings.load_profile("clingstone")
