"""``nightfold sequence``: what it shows at 80 and 120 columns, in pipes and as JSON."""

from __future__ import annotations

import io
import json
import sys
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from nightfold.opening import open_store
from nightfold_cli.main import main
from nightfold_cli.render import Screen

Show = Callable[..., str]
Run = Callable[..., Any]
WIDTHS = pytest.mark.parametrize("width", [80, 120])
BEGIN = datetime(2026, 10, 5, 19, tzinfo=UTC)
EXPONENTIAL = [6.4, 3.2, 1.6, 0.8, 0.4, 0.2]


def of(value: float, unit: str) -> dict[str, Any]:
    return {"value": value, "unit": unit}


def step(name: str, duration: Any = None, **settings: Any) -> dict[str, Any]:
    return {"name": name, "duration": duration, "settings": settings}


def shot(n: int, *steps: dict[str, Any], name: str = "evaporate", **fields: Any) -> dict[str, Any]:
    return {
        "machine": "heron", "uid": f"heron-{name}-{n:03d}", "started": (BEGIN + timedelta(hours=n)).isoformat(),
        "sequence": {"name": name, "steps": list(steps)}, **fields,
    }  # fmt: skip


def first_version(n: int) -> dict[str, Any]:
    return shot(
        n,
        step("load", of(10, "s"), power=of(1.2 if n < 5 else 1.3, "mW"), detuning=of(-12, "MHz")),
        step("ramp", of(900, "ms"), depth=EXPONENTIAL),
        step("pulse", of(5, "us"), phase=of(90, "deg"), light="sigma+"),
        step("image", of(40, "us"), camera=True),
        parameters={"still": of(3, "A")},
        reference=True,
    )


def second_version(n: int) -> dict[str, Any]:
    return shot(
        n,
        step("load", of(10, "s"), power=of(1.3, "mW"), detuning=of(-12, "MHz")),
        step("pump", of(350, "us"), power=of(80, "uW")),
        step("ramp", of(900, "ms"), depth=[*EXPONENTIAL[:5], 0.3]),
        step("pulse", of(5, "us"), phase=of(180, "deg"), light="sigma+"),
        step("probe", of(40, "us"), camera=True),
        parameters={"still": of(3, "A")},
    )


@pytest.fixture
def where(store_path: Path) -> Path:
    with open_store(store_path) as store:
        store.take([first_version(n) for n in range(10)])
        store.take([second_version(10)])
        plain = {"machine": "heron", "uid": "plain-1", "started": BEGIN.isoformat(), "sequence": "hold"}
        store.take([plain | {"parameters": {"still": of(3, "A"), "hold_time": of(20, "ms")}}])
    return store_path


def body(text: str) -> list[str]:
    """Return the lines below the one that names the store."""
    return text.rstrip("\n").split("\n")[1:]


def test_the_list(where: Path, on_screen: Show) -> None:
    assert body(on_screen("--store", where, "sequence")) == [
        "",
        "sequence   versions  shots  first (2026)  last",
        "evaporate         2     11  10-05 19:00   10-06 05:00",
        "hold              1      1  10-05 19:00   10-05 19:00",
        "times in UTC",
    ]


def test_the_list_for_programs(where: Path, run: Run) -> None:
    assert run("--store", where, "sequence").out.split("\n")[:2] == [
        "sequence\tmachine\tversions\tshots\tfirst\tlast",
        "evaporate\theron\t2\t11\t2026-10-05T19:00:00+00:00\t2026-10-06T05:00:00+00:00",
    ]
    assert json.loads(run("--store", where, "sequence", "--json").out)["sequences"][1] == {
        "machine": "heron", "sequence": "hold", "versions": 1, "shots": 1,
        "first": "2026-10-05T19:00:00+00:00", "last": "2026-10-05T19:00:00+00:00",
    }  # fmt: skip


def test_a_version_at_80(where: Path, on_screen: Show) -> None:
    assert body(on_screen("--store", where, "sequence", "evaporate", "--version", "1")) == [
        "",
        "evaporate  version 1 of 2, 4 steps, 10.9 s, 10 shots",
        "values of shot heron-evaporate-009, 2026-10-06 04:00:00 UTC",
        "",
        "start (s)  duration    step",
        " 0             10 s    load   ██████████████████████",
        "                       ~ power 1.3 mW  (1.2…1.3 mW, 1 edit 10-06)",
        "                         detuning -12 MHz",
        "10           900 ms    ramp                         ███████████████████",
        "                         depth █▄▃▂▁▁ 6.4 → 0.2, 6 points",
        "10.9           5 µs    pulse                                           ███",
        "                         phase 90 deg, light sigma+",
        "10.900005     40 µs    image                                              ██████",
        "                         camera true",
        "",
        "settings of no step",
        "    still 3 A",
        "",
        "bars not to scale: their length goes by the logarithm, 5 µs to 10 s",
        "~ differs between the shots of this version",
        "",
        "version  steps  shots  first (2026)  last",
        "      1      4     10  10-05 19:00   10-06 04:00",
        "      2      5      1  10-06 05:00   10-06 05:00",
        "--against N shows what differs from version N",
        "times in UTC",
    ]


def test_a_comparison_at_80(where: Path, on_screen: Show) -> None:
    assert body(on_screen("--store", where, "sequence", "evaporate", "--against", "1")) == [
        "",
        "evaporate",
        "  old  version 1, shot heron-evaporate-009, 2026-10-06 04:00:00 UTC, 10.9 s",
        "  new  version 2, shot heron-evaporate-010, 2026-10-06 05:00:00 UTC, 10.9004 s",
        "",
        "+ pump  added, step 2",
        "    duration 350 us, power 80 uW",
        "  ramp  step 3",
        "    depth  █▄▃▂▁▁ → █▄▃▂▁▁; point 6 of 6: 0.2 → 0.3",
        "  pulse  step 4",
        "    phase  90 → 180 deg",
        "? image → probe  renamed, by the look of it, step 5",
    ]


def test_either_side_of_a_comparison_may_be_a_shot(where: Path, on_screen: Show) -> None:
    lines = body(
        on_screen("--store", where, "sequence", "evaporate", "--shot", "heron-evaporate-000", "--against",
                  "heron-evaporate-007")
    )  # fmt: skip
    assert lines[-2:] == ["  load  step 1", "    power  1.3 → 1.2 mW"]
    same = on_screen("--store", where, "sequence", "evaporate", "--version", "1", "--against", "1")
    assert body(same)[-1] == "Nothing differs: the same steps with the same settings."


def test_a_sequence_without_steps_says_so(where: Path, on_screen: Show) -> None:
    assert body(on_screen("--store", where, "sequence", "hold"))[3:] == [
        "Its shots state no steps, but the name of the sequence: the parameters alone.",
        "",
        "settings",
        "    hold_time 20 ms, still 3 A",
        "",
        "times in UTC",
    ]


def test_a_pipe_has_every_setting(where: Path, run: Run) -> None:
    lines = run("--store", where, "sequence", "evaporate", "--version", "1").out.split("\n")
    assert lines[0].split("\t") == [
        "step", "start_s", "duration_s", "setting", "value", "unit", "values", "low", "high", "swept", "edits",
    ]  # fmt: skip
    assert lines[2] == "load\t0\t10\tpower\t1.3\tmW\t2\t1.2\t1.3\t\t1"
    assert "pulse\t10.9\t5e-6\tlight\tsigma+\t\t1\t\t\t\t0" in lines
    assert lines[lines.index("") + 1] == "version\tsteps\tshots\tfirst\tlast"
    lines = run("--store", where, "sequence", "evaporate", "--against", "1").out.split("\n")
    assert lines[:2] == [
        "change\told_step\tnew_step\tsetting\told\told_unit\tnew\tnew_unit",
        "added\t\tpump\tduration\t\t\t350\tus",
    ]
    assert "renamed\timage\tprobe\t\t\t\t\t" in lines


def test_json_has_the_same(where: Path, run: Run) -> None:
    answer = json.loads(run("--store", where, "sequence", "evaporate", "--version", "1", "--json").out)
    assert answer["schema"] == 1
    view = answer["sequence"]
    assert [view[key] for key in ("name", "machine", "version", "shot", "duration_s")] == [
        "evaporate", "heron", 1, "heron-evaporate-009", 10.900045,
    ]  # fmt: skip
    assert view["versions"][1] == {
        "version": 2, "steps": ["load", "pump", "ramp", "pulse", "probe"], "shots": 1,
        "first": "2026-10-06T05:00:00+00:00", "last": "2026-10-06T05:00:00+00:00",
    }  # fmt: skip
    assert view["steps"][0]["settings"][0] == {
        "name": "power", "value": 1.3, "unit": "mW", "values": 2, "low": 1.2, "high": 1.3, "swept": False, "edits": 1,
        "changed": "2026-10-06T00:00:00+00:00",
    }  # fmt: skip
    assert view["steps"][1]["settings"][0]["value"] == EXPONENTIAL
    assert view["steps"][2]["start_s"] == 10.9
    answer = json.loads(run("--store", where, "sequence", "evaporate", "--against", "1", "--json").out)
    comparison = answer["comparison"]
    assert comparison["old"]["version"] == 1
    assert comparison["steps"][2] == {
        "kind": "kept", "old": "pulse", "new": "pulse", "old_place": 3, "new_place": 4,
        "settings": [{"name": "phase", "old": {"value": 90, "unit": "deg"}, "new": {"value": 180, "unit": "deg"}}],
    }  # fmt: skip


@pytest.mark.parametrize(
    ("words", "code", "said"),
    [
        (("evaporat",), 3, "sequence 'evaporat': not in this store; it has evaporate"),
        (("evaporate", "--version", "3"), 3, "version 3 of sequence 'evaporate': it has versions 1 to 2"),
        (("evaporate", "--against", "3"), 3, "version 3 of sequence 'evaporate': it has versions 1 to 2"),
        (("evaporate", "--against", "nosuchshot"), 3, "shot 'nosuchshot': no such uid in this store"),
        (("evaporate", "--shot", "plain-1"), 3, "shot 'plain-1': it ran another sequence, wanted one of 'evaporate'"),
        (("evaporate", "--version", "2", "--shot", "x"), 2, "--version and --shot: found both, wanted one"),
        (("evaporate", "--all", "--against", "1"), 2, "--all and --against: all that differs is shown anyway"),
        (("--against", "1"), 2, "--against is for one sequence; found no NAME"),
        (("evaporate", "--machine", "egret"), 3, "machine 'egret': not in this store; it has heron"),
    ],
)  # fmt: skip
def test_what_is_not_there(where: Path, run: Run, words: tuple[str, ...], code: int, said: str) -> None:
    answer = run("--store", where, "sequence", *words)
    assert (answer.code, answer.out) == (code, "")
    assert answer.err.rstrip("\n").split("\n")[-1].startswith(f"nightfold: {said}")


def tuned(n: int) -> dict[str, Any]:
    """Return a shot with 300 settings in 30 steps; 6 of them were swept or edited of late, 4 long ago."""
    steps = [
        step(
            f"step{place:02d}", of(0.01 * 10 ** (place % 6), "ms"),
            **{f"ramp{k}": [round(((place + 1) * k * i) % 7 / 7, 3) for i in range(60)] for k in range(5)},
            **{f"level{k}": of(place + k / 10, "V") for k in range(5)},
        )
        for place in range(30)
    ]  # fmt: skip
    for k in range(4):
        steps[k]["settings"]["level0"] = of(5 if n < 10 else 6, "V")
    for k in range(3):
        steps[10 + k]["settings"]["ramp1"] = [0, 1, 2] if n < 1500 else [0, 1, 3]
    for k in range(3):
        steps[20 + k]["settings"]["level1"] = of(7 if n < 1500 else 8, "V")
    return shot(n, *steps, name="tuned", reference=True)


@pytest.fixture(scope="module")
def tuned_store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    from nightfold.opening import create_store

    path = tmp_path_factory.mktemp("tuned") / "tuned.sqlite"
    with create_store(path) as store:
        store.take([tuned(n) for n in (*range(40), *range(1480, 1520))])
    return path


@WIDTHS
def test_300_settings_stay_readable(tuned_store: Path, on_screen: Show, width: int) -> None:
    text = on_screen("--store", tuned_store, "sequence", "tuned", width=width)
    lines = body(text)
    assert max(map(len, lines)) <= width
    assert len(lines) < 60
    marked = [line.split()[1] for line in lines if line.strip().startswith("~ ") and "(" in line]
    assert marked == ["ramp1"] * 3 + ["level1"] * 3
    assert "~ ramp1 ▁▃█ 0 → 3, 3 points  (2 ramps, 1 edit 12-07)" in text
    joined = " ".join(line.strip() for line in lines)
    assert (
        "not shown: 290 settings the same at every shot and 4 last changed before 2026-12-01 02:00; --all shows them"
        in joined
    )


@WIDTHS
def test_all_300_settings(tuned_store: Path, on_screen: Show, width: int) -> None:
    lines = body(on_screen("--store", tuned_store, "sequence", "tuned", "--all", width=width))
    assert max(map(len, lines)) <= width
    text = " ".join(lines)
    assert text.count("level4 ") == 30
    assert "not shown" not in text


@pytest.mark.parametrize("width", [44, 80, 120])
@pytest.mark.parametrize("options", [[], ["--all"], ["--against", "1"]])
def test_60_steps_and_long_names(store_path: Path, on_screen: Show, width: int, options: list[str]) -> None:
    name = "a step whose name nobody cut short, 過冷却 and all"
    with open_store(store_path) as store:
        for version in range(2):
            steps = [
                step(
                    f"{name} {k % 7}", of(10 if k == 0 else 5e-6 * (k + 1), "s") if k != 30 else None,
                    **{"a setting with a name of some length as well": of(k, "V"), "text": "word " * (k % 30)},
                )
                for k in range(60 + version)
            ]  # fmt: skip
            store.take([shot(version, *steps[::-1] if version else steps, name="long")])
    lines = body(on_screen("--store", store_path, "sequence", "long", *options, width=width))
    from nightfold_cli.printable import cell_width

    assert max(map(cell_width, lines)) <= width
    if not options:
        assert sum("█" in line for line in lines) == 60
        assert "1 step without a duration in a unit of time" in " ".join(lines)
        crowded = "too many steps to place the bars in time" in " ".join(lines)
        assert crowded is (width <= 80)


def test_ascii_alone(where: Path, at_home: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    for words in (["evaporate", "--version", "1"], ["evaporate", "--against", "1"]):
        raw = io.BytesIO()
        out = io.TextIOWrapper(raw, encoding="ascii", errors="strict")
        monkeypatch.setattr(
            Screen, "here", classmethod(lambda cls, json, out=out: cls(out, sys.stderr, "terminal", 80))
        )
        assert main(["--store", str(where), "sequence", *words]) == 0
        out.flush()
        text = raw.getvalue().decode("ascii")
        assert "->" in text
        assert "?" not in text.replace("? image", "")
