import numpy as np
import pytest
from threadpoolctl import threadpool_info, threadpool_limits

from ngbound.blas import on_one_thread


def threads() -> list[int]:
    return [each["num_threads"] for each in threadpool_info() if each["user_api"] == "blas"]


@on_one_thread
def inside(fail: bool = False) -> list[int]:
    """Threads of linear algebra inside."""
    if fail:
        raise ValueError
    return threads()


def test_one_thread_inside_and_all_as_before_outside() -> None:
    np.linalg.eigh(np.eye(3))
    with threadpool_limits(2, user_api="blas"):
        before = threads()
        assert set(inside()) == {1}
        assert threads() == before
        with pytest.raises(ValueError):
            inside(fail=True)
        assert threads() == before


def test_a_function_keeps_its_name_and_text() -> None:
    assert inside.__name__ == "inside" and "inside" in (inside.__doc__ or "")
