"""The compiled density as a C callback, compiled once per machine.

Numba keys its cache on the file of the outermost function alone, so a changed block would leave a stale and
wrong density behind. The outermost function therefore stands in a small generated file whose folder carries a
hash of every source the density is made of: a changed source has another folder, and is compiled again.
"""

from __future__ import annotations

import ctypes
import hashlib
import importlib.util
import os
import sys
import tempfile
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from types import ModuleType
from typing import Any

import numba
import numpy as np
from numpy.typing import NDArray

from bayes_sys.model import density, kernels
from bayes_sys.model.blocks import coefficients, correlation, errors, scales, spreads, whitening

Array = NDArray[np.float64]

SOURCES = (density, kernels, coefficients, correlation, errors, scales, spreads, whitening)

ENTRY = '''"""Made by bayes_sys: the entry points that the sampler calls. Safe to delete."""

import numpy as np
from bayes_sys.model.density import evaluate
from numba import carray, cfunc, types

DOUBLES = types.CPointer(types.double)


@cfunc(types.int64(types.uint64, DOUBLES, DOUBLES, DOUBLES, types.voidptr), cache=True)
def density(n_dim, point, gradient_out, value_out, data):
    length = int(carray(data, (1,), np.float64)[0])
    gradient = carray(gradient_out, (n_dim,))
    value = evaluate(carray(point, (n_dim,)), gradient, carray(data, (length,), np.float64))
    value_out[0] = value
    if not np.isfinite(value):
        return 4
    for i in range(n_dim):
        if not np.isfinite(gradient[i]):
            return 4
    return 0


@cfunc(types.int64(types.uint64, types.uint64, DOUBLES, DOUBLES, types.voidptr), cache=True)
def expand(n_dim, n_out, point, out, data):
    for i in range(n_dim):
        out[i] = point[i]
    return 0
'''


@dataclass(frozen=True)
class EntryPoints:
    """Addresses of the compiled callbacks; ``keep`` holds them alive."""

    density: int
    expand: int
    keep: Any


@cache
def entry_points() -> EntryPoints:
    """Return the callbacks, compiled now or read from the cache on disk."""
    module = _import(_entry_file())
    return EntryPoints(module.density.address, module.expand.address, module)


def value_and_gradient(point: Array, data: Array) -> tuple[float, Array]:
    """Return the compiled log density, up to a constant, and its gradient at one unconstrained vector.

    Parameters
    ----------
    point : array of float, shape (n_dim,)
    data : array of float
        ``density.Packed.data``.
    """
    doubles = ctypes.POINTER(ctypes.c_double)
    point, gradient, value = np.ascontiguousarray(point, dtype=float), np.empty(len(point)), np.empty(1)
    arguments = [array.ctypes.data_as(doubles) for array in (point, gradient, value)]
    entry_points().keep.density.ctypes(len(point), *arguments, data.ctypes.data)
    return float(value[0]), gradient


def is_compiled() -> bool:
    """Whether the callbacks for the present sources are already on disk."""
    folder = cache_folder() / source_hash()
    return any(folder.glob("__pycache__/*.nbi"))


@cache
def source_hash() -> str:
    """Hash of every source the density is compiled from, and of the compiler's version."""
    digest = hashlib.sha256(f"numba {numba.__version__} {ENTRY}".encode())
    for module in SOURCES:
        digest.update(Path(str(module.__file__)).read_bytes())
    return digest.hexdigest()[:20]


def cache_folder() -> Path:
    """Where compiled densities are kept: BAYES_SYS_CACHE, else the user's cache folder.

    A fresh private folder among the temporary files where that cannot be written: slower, never wrong.
    """
    named = os.environ.get("BAYES_SYS_CACHE")
    base = os.environ.get("XDG_CACHE_HOME") or (
        os.environ.get("LOCALAPPDATA") if sys.platform == "win32" else None
    )
    folder = Path(named) if named else (Path(base) if base else Path.home() / ".cache") / "bayes-sys"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=folder):
            return folder
    except OSError:
        return _private_folder()


@cache
def _private_folder() -> Path:
    return Path(tempfile.mkdtemp(prefix="bayes-sys-"))


def _entry_file() -> Path:
    folder = cache_folder() / source_hash()
    file = folder / "entry.py"
    if not file.exists():
        folder.mkdir(parents=True, exist_ok=True)
        with tempfile.NamedTemporaryFile("w", dir=folder, suffix=".part", delete=False) as part:
            part.write(ENTRY)
        os.replace(part.name, file)  # two first runs at once: either file is the right one
    return file


def _import(file: Path) -> ModuleType:
    spec = importlib.util.spec_from_file_location(f"bayes_sys_density_{source_hash()}", file)
    if spec is None or spec.loader is None:
        raise ImportError(f"cannot load {file}")
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module
