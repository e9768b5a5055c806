"""What every test shares: import paths of the test helpers, one BLAS thread, one cache of compiled densities."""

from __future__ import annotations

import os
import sys
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("MPLBACKEND", "Agg")
os.environ.setdefault("PYTENSOR_FLAGS", "blas__ldflags=")

HERE = Path(__file__).parent
sys.path[:0] = [str(HERE), str(HERE / "model")]
