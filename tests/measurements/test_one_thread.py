"""Linear algebra keeps to one thread while something is measured, and gets its threads back."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from threading import Barrier

import numpy as np
import pytest
from threadpoolctl import threadpool_info, threadpool_limits

from ct_measure_plugin import Volume, measure
from ct_measure_plugin.measurements import find, one_thread
from ct_measure_plugin.physics.regions import Disc


def threads() -> set[int]:
    return {one["num_threads"] for one in threadpool_info() if one["user_api"] == "blas"}


@pytest.fixture(autouse=True)
def _two_threads():
    with threadpool_limits(2, user_api="blas"):
        if threads() != {2}:
            pytest.skip("the linear algebra library takes no number of threads")
        yield
        assert threads() == {2}


def test_a_measurement_runs_on_one_thread(monkeypatch):
    seen = []
    monkeypatch.setattr(
        type(find("region_statistics")), "measure", lambda *_: seen.append(threads()) or None
    )
    measure("region_statistics", Volume(np.zeros((1, 40, 40)), (1, 1, 1)), Disc((20, 20), 9))
    assert seen == [{1}]


def test_an_error_gives_the_threads_back():
    with pytest.raises(ZeroDivisionError), one_thread.one_thread():
        raise ZeroDivisionError
    assert threads() == {2}


def test_overlapping_calls_give_the_threads_back_at_the_end():
    both = Barrier(2)

    def work() -> None:
        with one_thread.one_thread():
            both.wait(10)

    with ThreadPoolExecutor(2) as pool:
        for done in [pool.submit(work), pool.submit(work)]:
            done.result(20)
    assert threads() == {2}
