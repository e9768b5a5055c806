"""What every test shares: one BLAS thread, no screen, no search for a BLAS."""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("MPLBACKEND", "Agg")
os.environ.setdefault("PYTENSOR_FLAGS", "blas__ldflags=")
