"""How kernels are compiled and shared out: laws of the shares, and what an inner kernel is and is not."""

from itertools import pairwise

import numba
import numpy as np
import pytest

from volmap.kernels.compiled import inner_kernel, kernel
from volmap.kernels.threads import on_threads


@inner_kernel
def add_one(x):
    return x + 1.0


@kernel
def fill(first, last, out):
    for i in range(first, last):
        out[i] += add_one(float(i))


@pytest.mark.parametrize("count", [0, 1, 2, 5, 1000])
def test_every_item_is_done_once(count):
    out = np.zeros(count)
    on_threads(fill, count, out)
    np.testing.assert_array_equal(out, np.arange(count) + 1.0)


@pytest.mark.parametrize("threads", range(1, int(numba.config.NUMBA_NUM_THREADS) + 1))
def test_shares_follow_each_other_and_none_is_left_out(threads):
    before = numba.get_num_threads()
    numba.set_num_threads(threads)
    try:
        shares = []
        on_threads(lambda first, last: shares.append((first, last)), 7)
    finally:
        numba.set_num_threads(before)
    shares.sort()
    assert len(shares) == min(threads, 7)
    assert shares[0][0] == 0
    assert shares[-1][1] == 7
    assert all(a[1] == b[0] for a, b in pairwise(shares))


def test_a_fault_on_another_thread_is_not_lost():
    def fail(first, last):
        if last == 7:
            raise ValueError("the last share")

    with pytest.raises(ValueError, match="the last share"):
        on_threads(fail, 7)


def test_an_inner_kernel_called_from_python_complains():
    with pytest.raises(TypeError):
        add_one(1.0)
    assert kernel(add_one.py_func)(1.0) == 2.0


@kernel
def divide(x, y):
    return x / y


def test_division_by_zero_is_that_of_numpy():
    assert divide(1.0, 0.0) == np.inf
