from __future__ import annotations

from collections.abc import Iterable, Mapping

from nightfold.scans.folding import StreamShot, fold_stream

Row = Mapping[str, float]
NOMINAL = {"x": 5.0, "y": 2.0, "follower": 1.0, "trap_power": 0.5}


def fold(rows: Iterable[Row], swept: Iterable[Iterable[str]]) -> list[tuple[int, int, tuple[str, ...], str]]:
    shots: list[StreamShot] = []
    for row, names in zip(rows, swept, strict=True):
        values = {name: f"u:{value!r}" for name, value in (NOMINAL | dict(row)).items()}
        before = shots[-1].values if shots else values
        changed = frozenset(name for name in values if values[name] != before.get(name))
        shots.append(StreamShot(len(shots), len(shots) * 15_000_000, frozenset(names), values, changed))
    return [(s.shot_ids[0], s.shot_ids[-1] + 1, s.axes, s.origin) for s in fold_stream(shots)]


def declared(rows: list[Row], *names: str) -> list[tuple[int, int]]:
    found = fold(rows, [names] * len(rows))
    assert all(axes == tuple(sorted(names)) and origin == "declared" for _, _, axes, origin in found)
    return [(start, stop) for start, stop, _, _ in found]


def test_any_number_of_shots_is_a_scan() -> None:
    assert declared([{"x": 1.0}], "x") == [(0, 1)]
    assert declared([{"x": 1.0}, {"x": 2.0}], "x") == [(0, 2)]
    assert declared([{}] * 5, "x") == [(0, 5)]


def test_another_declaration_begins_another_scan() -> None:
    rows: list[Row] = [{"x": 1.0}, {"x": 2.0}, {"y": 1.0}, {"y": 3.0}, {}]
    swept = [("x",), ("x",), ("x", "y"), ("x", "y"), ()]
    assert fold(rows, swept) == [(0, 2, ("x",), "declared"), (2, 4, ("x", "y"), "declared")]


def test_edit_of_another_parameter_ends_it() -> None:
    rows: list[Row] = [{"x": float(k), "trap_power": 0.5 if k < 7 else 0.6} for k in range(20)]
    assert declared(rows, "x") == [(0, 7), (7, 20)]
    dwelling: list[Row] = [{"x": float(k // 3), "trap_power": 0.5 if k < 7 else 0.6} for k in range(20)]
    assert declared(dwelling, "x") == [(0, 7), (7, 20)]
    last: list[Row] = [{"x": float(k), "trap_power": 0.5 if k < 19 else 0.6} for k in range(20)]
    assert declared(last, "x") == [(0, 19), (19, 20)]


def test_followers_are_not_edits() -> None:
    rows: list[Row] = [{"x": float(k % 7), "follower": 3.0 * (k % 7)} for k in range(20)]
    assert declared(rows, "x") == [(0, 20)]
    assert declared(rows[:2], "x") == [(0, 2)]
    coarse: list[Row] = [{"x": float(k % 10), "follower": float(k % 10 // 4)} for k in range(30)]
    assert declared(coarse, "x") == [(0, 30)]


def test_follower_of_an_outer_axis() -> None:
    rows: list[Row] = [
        {"x": float(k % 10), "y": float(k // 10), "follower": 2.0 * (k // 10)} for k in range(50)
    ]
    assert declared(rows, "x", "y") == [(0, 50)]


def test_readings_among_the_settings_are_not_edits() -> None:
    rows: list[Row] = [{"x": float(k // 3), "follower": (k * 7919 % 101) / 7} for k in range(30)]
    assert declared(rows, "x") == [(0, 30)]


def test_edit_while_a_follower_moves() -> None:
    rows: list[Row] = [
        {"x": float(k), "follower": 2.0 * k, "trap_power": 0.5 if k < 9 else 0.6} for k in range(20)
    ]
    assert declared(rows, "x") == [(0, 9), (9, 20)]
