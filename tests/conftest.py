"""Shared by all tests."""

from __future__ import annotations

from collections.abc import Iterator

import pytest
from threadpoolctl import threadpool_limits


@pytest.fixture(scope="session", autouse=True)
def one_blas_thread() -> Iterator[None]:
    """As the runner does: small matrices, where a second thread only waits."""
    with threadpool_limits(1, user_api="blas"):
        yield
