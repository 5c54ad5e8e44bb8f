from __future__ import annotations

import random
from collections.abc import Iterable, Mapping, Sequence
from time import process_time

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nightfold.scans.folding import FoundScan, StreamShot, fold_stream, pause_limit_us
from nightfold.scans.stream import read_token
from nightfold.settings import token_of

Setting = float | str | bool
Row = Mapping[str, Setting]
NOMINAL: dict[str, Setting] = {
    **{f"hold_{k}": float(k) for k in range(20)},
    "x": 5.0,
    "y": 2.0,
    "z": 1.0,
    "trap_power": 0.5,
    "imaging_axis": "side",
}
PAUSE: Row = {"pause": True}
CYCLE_US = 15_000_000


def token(value: Setting) -> str:
    if isinstance(value, bool):
        return token_of("truth", float(value), None)
    return token_of("text", None, value) if isinstance(value, str) else token_of("number", value, None)


def stream(rows: Iterable[Row], swept: Iterable[str] = ()) -> list[StreamShot]:
    shots: list[StreamShot] = []
    started = 0
    for row in rows:
        if row is PAUSE:
            started += 3_600_000_000
            continue
        values = {name: token(value) for name, value in (NOMINAL | dict(row)).items()}
        before = shots[-1].values if shots else values
        changed = {name for name in values.keys() | before.keys() if values.get(name) != before.get(name)}
        shots.append(StreamShot(len(shots), started, frozenset(swept), values, frozenset(changed)))
        started += CYCLE_US
    return shots


def fold(rows: Iterable[Row], swept: Iterable[str] = ()) -> list[tuple[int, int, tuple[str, ...]]]:
    """First shot, one behind the last, axes."""
    found = fold_stream(stream(rows, swept))
    for scan in found:
        assert scan.shot_ids == tuple(range(scan.shot_ids[0], scan.shot_ids[-1] + 1))
    return [(scan.shot_ids[0], scan.shot_ids[-1] + 1, scan.axes) for scan in found]


def steps(count: int, low: float = 0.0, high: float = 1.0) -> list[float]:
    return [low + (high - low) * k / (count - 1) for k in range(count)]


def sweep(values: Iterable[Setting], name: str = "x", **others: Setting) -> list[Row]:
    return [{name: value, **others} for value in values]


def shuffled(items: Sequence[Row], seed: int = 1) -> list[Row]:
    return random.Random(seed).sample(list(items), len(items))


def grid(inner: int, outer: int) -> list[Row]:
    return [{"x": x, "y": y} for y in steps(outer, 10, 20) for x in steps(inner, 10, 11)]


def idle(count: int) -> list[Row]:
    return [{} for _ in range(count)]


# --- one axis


@pytest.mark.parametrize("count", [4, 5, 20, 61])
def test_sequential_and_random_order(count: int) -> None:
    assert fold(sweep(steps(count))) == [(0, count, ("x",))]
    assert fold(shuffled(sweep(steps(count) * 3))) == [(0, 3 * count, ("x",))]


def test_three_shots_or_two_points_are_no_scan() -> None:
    assert fold(sweep([0, 1, 2])) == []
    assert fold(sweep([0, 1] * 10)) == []
    assert fold(idle(50)) == []
    assert fold([]) == []


@pytest.mark.parametrize("repeats", [2, 3, 5, 8, 9, 15])
def test_repeats_in_a_row(repeats: int) -> None:
    rows = sweep(value for value in steps(6, 10, 20) for _ in range(repeats))
    assert fold(rows) == [(0, 6 * repeats, ("x",))]
    assert fold([*idle(13), *rows, *idle(13)]) == [(13, 13 + 6 * repeats, ("x",))]


def test_up_and_down() -> None:
    assert fold(sweep([*steps(10), *steps(10)[::-1]])) == [(0, 20, ("x",))]


def test_text_and_truth_are_axes_too() -> None:
    assert fold(sweep(["a", "b", "c"] * 2)) == [(0, 6, ("x",))]
    rows: list[Row] = [{"x": x, "y": on} for on in (True, False) for x in steps(12, 10, 11)]
    assert fold(shuffled(rows)) == [(0, 24, ("x", "y"))]


# --- several axes


@pytest.mark.parametrize("inner", [3, 5, 7, 8, 10, 30])
@pytest.mark.parametrize("outer", [3, 4, 10])
def test_nested_and_random_two_axes(inner: int, outer: int) -> None:
    rows = grid(inner, outer)
    axes = ("x", "y") if inner >= outer else ("y", "x")
    size = inner * outer
    assert fold(rows) == [(0, size, axes)]
    assert fold(rows[: -(inner // 2)]) == [(0, size - inner // 2, axes)]
    assert fold(shuffled(rows)) == [(0, size, axes)]
    turning = [row for k in range(outer) for row in rows[k * inner : (k + 1) * inner][:: 1 if k % 2 else -1]]
    assert fold(turning) == [(0, size, axes)]
    surrounded = [*idle(6), *rows, *idle(5), *sweep(steps(10, 20, 30), "z")]
    assert fold(surrounded) == [(6, 6 + size, axes), (11 + size, 21 + size, ("z",))]


@pytest.mark.parametrize("sizes", [(3, 3, 3), (5, 2, 4), (10, 3, 3), (10, 2, 3), (4, 4, 4)])
def test_three_axes(sizes: tuple[int, int, int]) -> None:
    nx, ny, nz = sizes
    rows: list[Row] = [{**row, "z": z} for z in steps(nz, 10, 20) for row in grid(nx, ny)]
    for ordered in (rows, shuffled(rows)):
        [(first, stop, axes)] = fold(ordered)
        assert (first, stop, set(axes)) == (0, len(rows), {"x", "y", "z"})


@pytest.mark.parametrize("axes", [("x", "y"), ("trap_power", "x", "y", "z")])
def test_cloud_of_random_points(axes: tuple[str, ...]) -> None:
    draw = random.Random(2)
    assert fold([{axis: draw.random() for axis in axes} for _ in range(30)]) == [(0, 30, axes)]


def test_five_axes_are_too_many() -> None:
    draw = random.Random(2)
    assert fold([{f"hold_{k}": draw.random() for k in range(5)} for _ in range(30)]) == []


def test_outer_parameter_changed_once_is_an_edit() -> None:
    rows = [*sweep(steps(12, 10, 11), y=1.0), *sweep(steps(12, 10, 11), y=2.0)]
    assert fold(rows) == [(0, 12, ("x",)), (12, 24, ("x",))]


# --- edits


@pytest.mark.parametrize(("count", "at"), [(40, 20), (40, 36), (20, 4), (10, 5), (8, 4)])
def test_edit_ends_a_scan(count: int, at: int) -> None:
    values = sweep(steps(count))
    for rows in (values, shuffled(values)):
        edited = [{**row, "trap_power": 0.5 if k < at else 0.6} for k, row in enumerate(rows)]
        assert fold(edited) == [(0, at, ("x",)), (at, count, ("x",))]


def test_edit_between_two_scans_of_one_parameter() -> None:
    rows = [*sweep(steps(10)), *sweep(steps(10), trap_power=0.6)]
    assert fold(rows) == [(0, 10, ("x",)), (10, 20, ("x",))]


def test_pause_ends_a_scan() -> None:
    assert fold([*sweep(steps(10)), PAUSE, *sweep(steps(10))]) == [(0, 10, ("x",)), (10, 20, ("x",))]


def test_pause_limit_is_ten_median_intervals_and_at_least_five_minutes() -> None:
    assert pause_limit_us([0, 15_000_000, 30_000_000, 10_000_000_000]) == 300_000_000
    assert pause_limit_us([0, 60_000_000, 120_000_000]) == 600_000_000
    assert pause_limit_us([7]) == pause_limit_us([]) == 300_000_000


def test_pause_can_be_given() -> None:
    shots = stream(sweep(steps(8)))
    assert len(fold_stream(shots, pause_us=CYCLE_US - 1)) == 0
    assert len(fold_stream(shots, pause_us=CYCLE_US)) == 1


# --- moving together


def together(values: Iterable[float]) -> list[Row]:
    return [{"x": value, "y": 3 * value + 1, "z": value * value} for value in values]


def test_functions_of_a_swept_parameter_are_no_axes() -> None:
    assert fold(together(steps(12, 1, 3))) == [(0, 12, ("x",))]
    rows = shuffled(together(steps(18, 1, 3)))
    edited = [{**row, "trap_power": 0.5 if k < 9 else 1.0} for k, row in enumerate(rows)]
    assert fold(edited) == [(0, 9, ("x",)), (9, 18, ("x",))]


def test_a_dozen_names_may_move_together() -> None:
    rows: list[Row] = [{f"hold_{k}": value * k + 1 for k in range(1, 13)} for value in steps(15, 1, 2)]
    assert fold(shuffled(rows)) == [(0, 15, ("hold_1",))]


def test_sum_of_two_axes_is_no_third() -> None:
    rows: list[Row] = [{**row, "z": float(row["x"]) + float(row["y"])} for row in grid(12, 5)]
    assert fold(rows) == [(0, 60, ("x", "y"))]
    assert fold(shuffled(rows)) == [(0, 60, ("x", "y"))]


# --- what stands around a scan


@pytest.mark.parametrize(("first", "second"), [(40, 20), (20, 4), (8, 5), (9, 4)])
def test_one_scan_directly_after_another(first: int, second: int) -> None:
    expected = [(0, first, ("x",)), (first, first + second, ("y",))]
    assert fold([*sweep(steps(first)), *sweep(steps(second), "y")]) == expected
    at_nominal = [*sweep(steps(first, 5, 6)), *sweep(steps(second, 2, 3), "y")]
    assert fold(at_nominal) == expected


@pytest.mark.parametrize("between", [2, 4, 9, 30])
def test_shots_at_nominal_settings_belong_to_no_scan(between: int) -> None:
    one, other = shuffled(sweep(steps(21, 8, 9))), shuffled(sweep(steps(10, 8, 9), "y"))
    rows = [*idle(between), *one, *idle(between), *other, *idle(between)]
    begin = 2 * between + 21
    assert fold(rows) == [(between, between + 21, ("x",)), (begin, begin + 10, ("y",))]
    again = [*idle(between), *one, *idle(between), *one, *idle(between)]
    assert fold(again) == [(between, between + 21, ("x",)), (begin, begin + 21, ("x",))]


def test_first_point_at_nominal_settings_is_found_among_idle_shots() -> None:
    rows = [*idle(5), *sweep(steps(20, 5, 6)), *idle(5), *sweep(steps(10, 2, 3), "y"), *idle(3)]
    assert fold(rows) == [(5, 25, ("x",)), (30, 40, ("y",))]


def test_shots_tried_again_at_one_point_stay_in_the_scan() -> None:
    values = steps(10)
    assert fold(sweep([*values[:5], *[values[4]] * 9, *values[5:]])) == [(0, 19, ("x",))]


def test_turning_knobs_in_turn_is_no_scan() -> None:
    found = 0
    for seed in range(40):
        draw = random.Random(seed)
        current: dict[str, Setting] = {}
        rows: list[Row] = []
        for _ in range(40):
            if draw.random() < 0.6:
                current = {**current, f"hold_{draw.randrange(5)}": round(draw.random(), 3)}
            rows.append(current)
        found += len(fold(rows))
    assert found <= 8  # in 1600 shots: one knob turned a few times running looks like a scan


def test_readings_that_change_at_every_shot_are_no_scan() -> None:
    draw = random.Random(5)
    rows: list[Row] = [{f"hold_{k}": draw.random() for k in range(12)} for _ in range(400)]
    assert fold(rows) == []


# --- properties


@st.composite
def scans(draw: st.DrawFn, parameter: str) -> list[Row]:
    values = steps(draw(st.integers(6, 15)), 10, draw(st.sampled_from([11.0, 15.0, 1000.0])))
    rows = sweep(values * draw(st.integers(1, 2)), parameter)
    return rows if draw(st.booleans()) else shuffled(rows, draw(st.integers(0, 99)))


@settings(max_examples=150, deadline=None)
@given(scans("x"), scans("y"), st.integers(0, 12))
def test_later_scans_do_not_change_closed_ones(one: list[Row], other: list[Row], between: int) -> None:
    alone = fold([*one, *idle(between)])
    both = fold([*one, *idle(between), *other])
    assert both[0] == alone[0]
    assert len(both) == 2
    if between != 1:  # a single shot at rest cannot always be told from a last point
        assert both[0] == (0, len(one), ("x",))
    assert both[1][2] == ("y",)


@settings(max_examples=150, deadline=None)
@given(
    st.lists(
        st.fixed_dictionaries(
            {},
            optional={
                "x": st.sampled_from([0.0, 1.0, 2.0, 3.0]),
                "y": st.sampled_from(["a", "b", "c"]),
                "z": st.floats(0, 1),
            },
        ),
        max_size=60,
    )
)
def test_no_shot_is_in_two_scans(rows: list[Row]) -> None:
    shots = stream(rows)
    found: list[FoundScan] = fold_stream(shots)
    ids = [shot_id for scan in found for shot_id in scan.shot_ids]
    assert ids == sorted(set(ids))
    assert all(len(scan.shot_ids) >= 4 and scan.origin == "found" for scan in found)
    assert fold_stream(shots) == found


def test_tokens_are_read_as_the_store_writes_them() -> None:
    assert read_token(token_of("number", 61.25, None)) == 61.25
    assert read_token(token_of("number", None, "nan")) == "u:nan"
    assert read_token(token_of("text", None, "61")) == "e:61"
    assert read_token(token_of("truth", 1.0, None)) == "r:1.0"
    assert read_token(None) == ""


def test_time_grows_with_the_number_of_shots_only() -> None:
    draw = random.Random(4)
    rows: list[Row] = []
    while len(rows) < 8_000:
        size = draw.randint(8, 40)
        rows += idle(draw.randint(0, 20))
        rows += shuffled(sweep(steps(size, 10, 11) * draw.randint(1, 3), draw.choice("xyz")), size)
        rows += grid(size, draw.randint(3, 6))
        rows += [{f"hold_{draw.randrange(20)}": draw.random()} for _ in range(10)]
    shots = stream(rows)
    assert len(fold_stream(shots)) > 75
    few, many = (min(seconds(shots[:count]) for _ in range(3)) for count in (1_000, 8_000))
    assert many < 3 * 8 * few


def seconds(shots: Sequence[StreamShot]) -> float:
    begin = process_time()
    fold_stream(shots)
    return process_time() - begin
