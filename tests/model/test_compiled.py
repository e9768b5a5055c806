"""The compiled density is compiled once per machine, and again whenever its source changes."""

from __future__ import annotations

import os
import subprocess
import sys
import textwrap

import pytest

from bayes_sys.model import compiled

PROBE = textwrap.dedent(
    """
    import numba.core.compiler as compiler
    from bayes_sys.model import compiled

    count = 0
    whole = compiler.CompilerBase._compile_core

    def counted(self):
        global count
        count += 1
        return whole(self)

    compiler.CompilerBase._compile_core = counted
    print(compiled.is_compiled())
    compiled.entry_points()
    print(count)
    """
)


def probe(folder) -> list[str]:
    environment = os.environ | {"BAYES_SYS_CACHE": str(folder)}
    run = subprocess.run(
        [sys.executable, "-c", PROBE], env=environment, capture_output=True, text=True, check=True
    )
    return run.stdout.split()


def test_a_second_process_compiles_nothing(tmp_path):
    first, second = probe(tmp_path), probe(tmp_path)
    assert first[0] == "False"
    assert int(first[1]) > 0
    assert second == ["True", "0"]


def test_a_changed_source_has_another_place_in_the_cache(tmp_path, monkeypatch):
    before = compiled.source_hash()
    changed = tmp_path / "kernels.py"
    changed.write_text("# another source\n")
    monkeypatch.setattr(compiled.kernels, "__file__", str(changed))
    compiled.source_hash.cache_clear()
    try:
        assert compiled.source_hash() != before
        assert not compiled.is_compiled()
    finally:
        monkeypatch.undo()
        compiled.source_hash.cache_clear()
    assert compiled.source_hash() == before


def test_every_module_the_density_calls_is_hashed():
    # a kernel that comes from a module outside SOURCES would go stale unseen
    from numba.core.registry import CPUDispatcher

    hashed = {module.__name__ for module in compiled.SOURCES}
    used, queue = set(), [compiled.density.evaluate]
    while queue:
        function = queue.pop().py_func
        used.add(function.__module__)
        for name in function.__code__.co_names:
            value = function.__globals__.get(name)
            candidates = vars(value).values() if hasattr(value, "__file__") else [value]
            queue += [
                c for c in candidates if isinstance(c, CPUDispatcher) and c.py_func.__module__ not in used
            ]
            used |= {c.py_func.__module__ for c in candidates if isinstance(c, CPUDispatcher)}
    assert used <= hashed


@pytest.mark.parametrize("variable", ["XDG_CACHE_HOME", "BAYES_SYS_CACHE"])
def test_a_folder_that_cannot_be_written_is_replaced_by_a_private_one(monkeypatch, tmp_path, variable):
    blocked = tmp_path / "file"
    blocked.write_text("")
    monkeypatch.delenv("BAYES_SYS_CACHE", raising=False)
    monkeypatch.setenv(variable, str(blocked))
    folder = compiled.cache_folder()
    assert folder.is_dir()
    assert os.access(folder, os.W_OK)


@pytest.mark.parametrize("name", ["density", "expand"])
def test_entry_points_are_addresses(name):
    assert getattr(compiled.entry_points(), name) > 0
