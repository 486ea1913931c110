"""How many threads the matrix products of a run may take."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from functools import cache

from threadpoolctl import ThreadpoolController


@contextmanager
def blas_threads(count: int) -> Iterator[None]:
    """Hold all BLAS libraries of the process to `count` threads."""
    with _controller().limit(limits=count, user_api="blas"):
        yield


@cache
def _controller() -> ThreadpoolController:
    # looking for the libraries takes milliseconds; they are there once SciPy is
    import scipy.linalg  # noqa: F401

    return ThreadpoolController()
