from __future__ import annotations

from itertools import combinations, pairwise

from hypothesis import given, settings
from hypothesis import strategies as st

from nightfold.scans.segments import cut, group_together

Names = frozenset[str]
CHANGES = st.lists(st.frozensets(st.sampled_from("abc"), max_size=3), min_size=1, max_size=9)


def price(changes: list[Names], stretches: list[tuple[int, int]], toll: float) -> float:
    return sum(
        toll + (stop - start) * len(group_together(changes[start + 1 : stop])) for start, stop in stretches
    )


@settings(max_examples=100, deadline=None)
@given(CHANGES, st.sampled_from([1.0, 2.0, 4.0]))
def test_cut_is_the_cheapest_of_all(changes: list[Names], toll: float) -> None:
    found = cut(changes, toll)
    size = len(changes)
    bounds = [(0, *inner, size) for count in range(size) for inner in combinations(range(1, size), count)]
    cheapest = min(price(changes, list(pairwise(b)), toll) for b in bounds)
    assert price(changes, found, toll) == cheapest
    assert [start for start, _ in found] == [0, *(stop for _, stop in found[:-1])]
    assert found[-1][1] == size


def test_names_that_always_changed_together_are_one_group() -> None:
    changes = [frozenset("ab"), frozenset("abc"), frozenset()]
    assert group_together(changes) == [["a", "b"], ["c"]]
    assert group_together([]) == []
