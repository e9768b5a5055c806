"""What every test shares: one BLAS thread, no screen, no search for a BLAS, steady examples."""

from __future__ import annotations

import os

from hypothesis import settings

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("MPLBACKEND", "Agg")
os.environ.setdefault("PYTENSOR_FLAGS", "blas__ldflags=")

# The same examples every time, and no clock: a busy machine must not fail a change. `HYPOTHESIS_SEARCH=1`
# looks for new examples.
settings.register_profile("steady", derandomize=not os.environ.get("HYPOTHESIS_SEARCH"), deadline=None)
settings.load_profile("steady")
