"""Work spread over threads: order, errors, and libraries that would start threads of their own."""

from __future__ import annotations

import threading

import numpy as np
import pytest
import threadpoolctl

from fieldmover import compute


@pytest.fixture(params=[1, 2, 3])
def threads(request):
    before = compute.threads()
    compute.set_threads(request.param)
    yield request.param
    compute.set_threads(before)


def test_results_are_in_the_order_of_the_items(threads):
    assert compute.for_each(lambda i: i * i, iter(range(100))) == [i * i for i in range(100)]
    assert compute.for_each(lambda i: i, []) == []


def test_all_threads_work_at_once(threads):
    together = threading.Barrier(threads, timeout=30)
    compute.for_each(lambda _: together.wait(), range(threads))


def test_no_threads_are_left_behind(threads):
    before = threading.active_count()
    compute.for_each(lambda i: i, range(10))
    assert threading.active_count() == before


def test_the_error_of_the_first_item_that_fails_is_raised(threads):
    seen = []

    def work(i):
        seen.append(i)
        if i >= 5:
            raise IndexError(f"item {i}")

    for _ in range(20):
        seen.clear()
        with pytest.raises(IndexError, match=r"^item 5$"):
            compute.for_each(work, range(100))
        assert len(seen) <= 5 + threads  # the others are not begun


def test_also_when_a_later_item_fails_sooner(threads):
    later = threading.Event()

    def work(i):
        if i == 0 and threads > 1:
            later.wait(timeout=30)
        later.set()
        raise ValueError(f"item {i}")

    with pytest.raises(ValueError, match=r"^item 0$"):
        compute.for_each(work, range(9))


def test_work_may_spread_work(threads):
    found = compute.for_each(lambda i: sum(compute.for_each(lambda j: i * j, range(4))), range(5))
    assert found == [0, 6, 12, 18, 24]


def test_matrix_products_do_not_start_threads_of_their_own(threads):
    def counts():
        return [lib["num_threads"] for lib in threadpoolctl.threadpool_info() if lib["user_api"] == "blas"]

    np.ones((2, 2)) @ np.ones((2, 2))
    before = counts()
    within = compute.for_each(lambda _: counts(), range(3))
    assert all(count == 1 for each in within for count in each)
    assert counts() == before


def test_a_number_of_threads_below_one_is_refused():
    with pytest.raises(ValueError, match="threads: 0 is below 1"):
        compute.set_threads(0)
