"""One thread for linear algebra: matrices here are small, and threads that wait for work slow all down.

On a busy machine the threads of BLAS were seen to make a 200 x 200 product 40 times slower. The rest of
the process keeps what it has.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import wraps
from typing import ParamSpec, TypeVar

from threadpoolctl import threadpool_limits

P = ParamSpec("P")
R = TypeVar("R")


def one_thread(function: Callable[P, R]) -> Callable[P, R]:
    """The function, with BLAS held to one thread while it runs."""

    @wraps(function)
    def held(*args: P.args, **kwargs: P.kwargs) -> R:
        with threadpool_limits(limits=1, user_api="blas"):
            return function(*args, **kwargs)

    return held
