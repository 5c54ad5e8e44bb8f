from __future__ import annotations

from itertools import accumulate

from nightfold.scans.pauses import find_pauses

SECOND = 1_000_000


def at(*gaps_s: float) -> list[int]:
    return list(accumulate((round(gap * SECOND) for gap in gaps_s), initial=0))


def test_a_pause_is_over_five_minutes_and_ten_cycles() -> None:
    quick, slow = [15.0] * 12, [60.0] * 12
    assert find_pauses(at(*quick, 299, *quick)) == []
    assert find_pauses(at(*quick, 301, *quick)) == [13]
    assert find_pauses(at(*slow, 590, *slow)) == []
    assert find_pauses(at(*slow, 610, *slow)) == [13]


def test_only_the_shots_around_a_gap_have_a_say() -> None:
    slow = [60.0] * 12
    near = at(*slow, 400, *slow)
    far = at(*slow, 400, *slow, 3000, *[15.0] * 500)
    assert find_pauses(near) == []
    assert find_pauses(far) == [26]


def test_lone_shots() -> None:
    assert find_pauses([]) == find_pauses([0]) == []
    assert find_pauses(at(200)) == []
    assert find_pauses(at(400)) == [1]
