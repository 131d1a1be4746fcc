"""This package beside general-purpose libraries: ``python -m tests.benchmarks``. A row: see ``pairs``."""

import os

for _threads in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS"):
    os.environ.setdefault(_threads, "1")  # before numpy is imported; R inherits it
