"""One thread for linear algebra; imports the standard library and threadpoolctl alone.

The matrices of a fit are small: shared out over threads they gain next to nothing, and on a busy
machine the threads wait for one another ten times longer than the work takes.
"""

from collections.abc import Callable
from functools import cache, wraps
from typing import ParamSpec, TypeVar

from threadpoolctl import ThreadpoolController

P = ParamSpec("P")
R = TypeVar("R")


@cache
def _libraries() -> ThreadpoolController:
    """The libraries of linear algebra, once all of them are loaded."""
    return ThreadpoolController()


def on_one_thread(function: Callable[P, R]) -> Callable[P, R]:
    """The function with its linear algebra on one thread; afterwards all is as it was before."""

    @wraps(function)
    def alone(*args: P.args, **kwargs: P.kwargs) -> R:
        with _libraries().limit(limits=1, user_api="blas"):
            return function(*args, **kwargs)

    return alone
