"""The seam for parallel work: the same results in the same order, however many cores."""

from __future__ import annotations

import os

import pytest

from audit.workers import workers


def square(x: int) -> tuple[int, int]:
    return x * x, os.getpid()


@pytest.mark.parametrize("cores", [1, 2])
def test_results_come_in_the_order_of_the_items(cores: int) -> None:
    with workers(cores) as pool:
        results = list(pool.map(square, range(40)))
    assert [value for value, _ in results] == [x * x for x in range(40)]
    assert (os.getpid() in {pid for _, pid in results}) == (cores == 1)


def test_items_are_taken_only_as_far_ahead_as_needed() -> None:
    taken: list[int] = []

    def items() -> object:
        for i in range(50):
            taken.append(i)
            yield i

    with workers(2) as pool:
        results = pool.map(square, items())  # type: ignore[arg-type]
        next(results)
        assert len(taken) <= 7
