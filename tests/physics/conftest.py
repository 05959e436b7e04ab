"""Threads for the kernels under test."""

from __future__ import annotations

from collections.abc import Iterator

import numba
import pytest


@pytest.fixture(autouse=True)
def one_thread() -> Iterator[None]:
    """Most tests call kernels on single columns, many times: starting threads costs more."""
    before = numba.get_num_threads()
    numba.set_num_threads(1)
    yield
    numba.set_num_threads(before)


@pytest.fixture
def all_threads(one_thread: None) -> None:
    """For the few tests that trace millions of rays."""
    numba.set_num_threads(numba.config.NUMBA_NUM_THREADS)
