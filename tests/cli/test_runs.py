from __future__ import annotations

import math
from itertools import combinations, groupby

import pytest

from nightfold_cli.runs import runs_of


def test_against_every_order_of_nine_signs() -> None:
    """Check with Wald and Wolfowitz (1940): all orders of 4 plus and 5 minus signs are equally likely."""
    counts = []
    for places in combinations(range(9), 4):
        signs = [place in places for place in range(9)]
        counts.append(sum(1 for _ in groupby(signs)))
    for places in list(combinations(range(9), 4))[::7]:
        found = runs_of([1.0 if place in places else -0.5 for place in range(9)])
        assert found is not None
        assert found.expected == pytest.approx(sum(counts) / len(counts))
        fewer = sum(count <= found.count for count in counts)
        assert found.p == pytest.approx(fewer / len(counts))


def test_a_bow_is_a_pattern_and_scatter_is_none() -> None:
    bow = runs_of([math.cos(place / 29 * math.pi * 2) for place in range(30)])
    assert bow is not None
    assert (bow.count, bow.points) == (3, 30)
    assert bow.patterned
    scatter = runs_of([(-1) ** (place * place // 3) for place in range(30)])
    assert scatter is not None
    assert not scatter.patterned


@pytest.mark.parametrize("residuals", [[], [1.0, 2.0], [0.0, -1.0], [math.nan, 1.0]])
def test_without_two_signs_there_are_no_runs(residuals: list[float]) -> None:
    assert runs_of(residuals) is None


def test_many_points() -> None:
    found = runs_of([(-1.0) ** (place // 2) for place in range(20_000)])
    assert found is not None
    assert found.count == 10_000
    assert 0 < found.p <= 1
