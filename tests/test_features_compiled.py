"""Machine code is kept on disk where that works; where it does not, that costs time only."""

from __future__ import annotations

import importlib.util
import resource

import pytest
from numba.core import caching

SOURCE = """
from classify.features.compiled import compiled

@compiled
def twice(value):
    return 2 * value
"""


@pytest.fixture
def load(tmp_path):
    """Import the kernel anew; numba keeps its files beside the source."""
    (tmp_path / "kernel.py").write_text(SOURCE)

    def fresh():
        spec = importlib.util.spec_from_file_location("kernel", tmp_path / "kernel.py")
        module = importlib.util.module_from_spec(spec)
        spec.loader.exec_module(module)
        return module.twice

    return fresh


def hits(kernel) -> int:
    return sum(kernel.stats.cache_hits.values())


def test_the_second_process_compiles_nothing(load, tmp_path):
    assert load()(21) == 42
    assert list(tmp_path.glob("__pycache__/*.nbc"))
    again = load()
    assert again(21) == 42
    assert hits(again) == 1


@pytest.mark.parametrize("pattern", ["*.nbi", "*.nbc"])
@pytest.mark.parametrize("damage", [lambda c: c[: len(c) // 2], lambda c: b"", lambda c: c[:40] + b"\xff" * 60])
def test_a_damaged_file_is_not_used(load, tmp_path, pattern, damage):
    assert load()(21) == 42
    (path,) = tmp_path.glob(f"__pycache__/{pattern}")
    path.write_bytes(damage(path.read_bytes()))
    assert load()(21) == 42
    again = load()
    assert again(21) == 42
    assert hits(again) == 1, "what was damaged is replaced"


def test_a_full_disk_costs_only_time(load, tmp_path):
    kernel = load()
    limits = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (64, limits[1]))
    try:
        assert kernel(21) == 42
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, limits)
    assert not list(tmp_path.glob("__pycache__/*.nb?"))


def test_no_folder_for_the_cache_costs_only_time(load, monkeypatch):
    def nowhere(self, function):
        raise RuntimeError("cannot cache function: no locator available")

    monkeypatch.setattr(caching.FunctionCache, "__init__", nowhere)
    assert load()(21) == 42
