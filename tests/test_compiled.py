"""Compiled functions where no folder can hold their compiled form."""

import pytest
from numba.core import caching

from orbits.compiled import compiled


def double(x):
    return 2 * x


def test_functions_compile_where_no_cache_can_be_written(monkeypatch):
    """numba finds no place for the cache, as on a read-only disk without a home folder."""
    monkeypatch.setattr(caching.CacheImpl, "_locator_classes", [])
    with pytest.raises(RuntimeError, match="cannot cache function"):
        caching.FunctionCache(double)  # the premise: numba alone would refuse
    assert compiled(double)(21) == 42
