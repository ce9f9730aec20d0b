"""What all tests share: the slow ones, the compile cache, and what may not change."""

from __future__ import annotations

import os
import sys

import pytest

# before NumPy is loaded: its threads and JAX's wait for each other on a machine with few cores,
# and one eigenvalue problem of dimension 100 then takes 100 ms in place of 3
for _variable in ("OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_variable, "1")


def pytest_addoption(parser):
    parser.addoption("--slow", action="store_true", help="also run the tests that take minutes")


def pytest_configure(config):
    # compiled programs of one run serve the next; the user's own cache is left alone
    if hasattr(config, "cache"):
        os.environ.setdefault("EVIDENCE_COMPILE_CACHE", str(config.cache.mkdir("compiled")))


def pytest_collection_modifyitems(config, items):
    if config.getoption("--slow"):
        return
    for item in items:
        if "slow" in item.keywords:
            item.add_marker(pytest.mark.skip(reason="takes minutes: run with --slow"))


@pytest.fixture(autouse=True)
def _jax_settings_stay():
    """No test, and so nothing in the package, may leave JAX's settings changed."""
    before = _jax_settings()
    yield
    after = _jax_settings()
    assert before is None or after == before


def _jax_settings():
    jax = sys.modules.get("jax")
    if jax is None or not hasattr(jax, "config"):
        return None
    names = ("jax_enable_x64", "jax_compilation_cache_dir", "jax_numpy_rank_promotion",
             "jax_numpy_dtype_promotion", "jax_debug_nans")  # fmt: skip
    return {name: getattr(jax.config, name) for name in names}


@pytest.fixture
def strict_ranks():
    """Inside, arrays of different ranks may not be joined: an (n, 1) against an (n,) raises."""
    import jax

    with jax.numpy_rank_promotion("raise"):
        yield
