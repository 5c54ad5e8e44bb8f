from __future__ import annotations

import io
import json
import re
import shutil
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from nightfold_cli.main import main
from nightfold_cli.render import Screen

Show = Callable[..., str]
WIDTHS = pytest.mark.parametrize("width", [80, 120])


def body(text: str) -> list[str]:
    """Return the lines below the one that names the store."""
    return text.rstrip("\n").split("\n")[1:]


@pytest.fixture
def where(heron: Path, at_home: Path) -> Path:
    """Return a store of two nights that may be changed."""
    return Path(shutil.copy(heron / "heron.sqlite", at_home / "copy.sqlite"))


def test_nights_at_80(where: Path, on_screen: Show) -> None:
    assert body(on_screen("--store", where, "nights")) == [
        "",
        "night           from   to     shots  set aside  scans  sequences",
        "Mon 2026-09-28  20:03  01:09    186          2      3  hold-in-trap,",
        "                                                       kick-and-hold, long-hold",
        "Tue 2026-09-29  20:02  02:12    183          5      4  evaporate-and-look,",
        "                                                       hold-in-trap, long-hold",
        "no room for: machine, references",
        "times in Europe/Vienna",
    ]


def test_scans_at_80(where: Path, on_screen: Show) -> None:
    assert body(on_screen("--store", where, "scans", "--last", "2")) == [
        "",
        "scan                axes                   points  shots  from   atom_number",
        "Tue 2026-09-29",
        "evaporation-map#1   evaporate#3.end_power  8x5     40     23:57  ▁▂▄▄▅▆▇█",
        "evaporate-and-look  0.3…1 W                x 1",
        "                    evaporate#3.duration",
        "                    0.8…2.4 s",
        "",
        "7                   hold_time              15      30     02:00  █▆▅▄▃▃▂▂▂▁▁▁",
        "long-hold           500…21500 ms           x 2",
        "times in Europe/Vienna",
        "5 earlier ones not shown; --all shows them",
    ]


def test_scans_at_120(where: Path, on_screen: Show) -> None:
    assert body(on_screen("--store", where, "scans", "--last", "2", width=120))[1:5] == [
        "scan                axes                            points  shots  from   atom_number",
        "Tue 2026-09-29",
        "evaporation-map#1   evaporate#3.end_power 0.3…1 W   8x5     40     23:57  ▁▂▄▄▅▆▇█",
        "evaporate-and-look  evaporate#3.duration 0.8…2.4 s  x 1",
    ]


@WIDTHS
@pytest.mark.parametrize(
    "command",
    [
        "nights",
        "scans",
        "scan loss-coarse",
        "scan evaporation-map",
        "nights --all",
        "scans --all",
        "scan loss-coarse -o temperature --points",
        "shots --limit 5 -p coil_current -o atom_number -o temperature",
        "shots -p coil_current -p trap_mirror_x -o atom_number -o temperature -o center_x -o center_y -o optical_depth",
        "shots heron-20260928-0003",
        "edits",
        "fit loss-coarse lorentzian",
        "fit evaporation-map gaussian --along evaporate#3.end_power",
        "fits",
        "models",
        "models damped-oscillation",
    ],
)
def test_no_line_is_wider_than_the_screen(command: str, width: int, where: Path, on_screen: Show) -> None:
    if command == "fits":
        on_screen("fit", "loss-coarse", "lorentzian", "damped-oscillation", "--store", where)
        on_screen("fit", "evaporation-map", "gaussian", "--along", "evaporate#3.end_power", "--store", where)
    text = on_screen(*command.split(), "--store", where, width=width)
    assert max(map(len, text.split("\n")[1:])) <= width


def test_columns_that_were_asked_for_are_shown_on_further_lines(where: Path, on_screen: Show) -> None:
    asked = ["center_x", "center_y", "optical_depth", "atom_number", "temperature"]
    words = ["-p", "coil_current", "-p", "hold_time", *(word for name in asked for word in ("-o", name))]
    lines = body(on_screen("--store", where, "shots", "--limit", "1", *words))
    text = "\n".join(lines)
    assert all(name in text for name in asked)
    assert any(line.startswith("    ") and "optical_depth" in line for line in lines)


def test_readings_without_stderr_have_six_digits(
    where: Path, on_screen: Show, run: Callable[..., Any]
) -> None:
    words = ("--store", where, "shots", "heron-20260928-0003")
    full = json.loads(run(*words, "--json").out)["shot"]["observables"]["optical_depth"]["value"]
    (line,) = [line for line in body(on_screen(*words)) if line.split()[:1] == ["optical_depth"]]
    shown = line.split()[1]
    assert len(shown.replace(".", "").lstrip("0")) <= 6
    assert float(shown) == pytest.approx(full, rel=1e-5)


def test_fit_ends_with_the_numbers(where: Path, on_screen: Show) -> None:
    lines = body(
        on_screen("--store", where, "fit", "loss-coarse", "lorentzian", "-o", "atom_number", "--plain")
    )
    assert lines[1] == "loss-coarse#1  lorentzian  atom_number along coil_current, flat background"
    assert "residuals, in units of their rms" in lines
    start = lines.index("estimates  from 61 shots, 1 set aside")
    assert lines[start + 2 : start + 7] == [
        "estimate         value  unit   95 % interval",
        "center      61.362(20)  A      61.321 … 61.403",
        "fwhm         1.019(78)  A      0.874 … 1.189",
        "amplitude  -7.01(28)e4  atoms  -7.58e4 … -6.44e4",
        "offset     1.426(12)e5  atoms  1.401e5 … 1.451e5",
    ]
    assert lines[start + 7].startswith("derived: quality_factor ")


def test_a_fit_not_to_trust_says_so_in_words(where: Path, on_screen: Show) -> None:
    lines = body(
        on_screen("--store", where, "fit", "loss-coarse", "lorentzian", "-o", "temperature", "--no-keep")
    )
    start = lines.index("DO NOT TRUST THIS FIT")
    assert lines[start + 1].startswith("  - no-feature: nothing stands out of the scatter")


def test_scan_shows_points_and_a_chart(where: Path, on_screen: Show) -> None:
    lines = body(on_screen("--store", where, "scan", "loss-coarse", "-o", "atom_number"))
    assert lines[1:5] == [
        "loss-coarse#1  hold-in-trap on heron, by label, complete",
        "  axis   coil_current 58.4…64.4 A, 31 points",
        "  shots  61, 2 a point, and 1 set aside",
        "  taken  2026-09-28 20:13:59 to 20:29:28 CEST",
    ]
    assert "atom_number (1e3 atoms)" in lines
    assert lines[-1] == "next: nightfold fit loss-coarse#1 MODEL -o atom_number"


def test_map_of_two_axes(where: Path, on_screen: Show) -> None:
    lines = body(on_screen("--store", where, "scan", "evaporation-map", "-o", "atom_number"))
    assert sum(line.endswith("|") for line in lines) == 5
    assert any("??" in line for line in lines)


def test_demo_of_two_nights(at_home: Path, run: Callable[..., Any]) -> None:
    answer = run("demo", "--nights", "2", "--json")
    assert answer.code == 0
    document = json.loads(answer.out)
    assert document["schema"] == 1
    assert document["store"] == "nightfold-demo/heron.sqlite"
    assert document["new"] == document["shots"]
    assert set(document["truths"][0]) >= {"what", "truth", "value", "stderr", "interval95"}
    assert all(truth["value"] is not None for truth in document["truths"])
    assert [set(change) for change in document["changes"]] == [{"truth", "found"}] * len(document["changes"])
    assert (at_home / "nightfold-demo" / "heron.sqlite").exists()


def test_demo_names_the_commands_to_go_on_with(on_screen: Show) -> None:
    text = on_screen("demo", "mine", "--nights", "1")
    assert "  nightfold --store mine/heron.sqlite scan loss-coarse#1\n" in text
    assert "intervals hold the truth" in text


def take(run: Callable[..., Any], values: list[float], **more: Any) -> None:
    """Take shots of one scan, one for each value."""
    lines = [
        {
            "format": 1,
            "machine": "heron",
            "started": f"2026-10-05T20:{minute:02}:00+02:00",
            "sequence": "hold",
            "scan": "decay",
            "swept": ["hold_time"],
            "parameters": {"hold_time": {"value": 10.0 * minute, "unit": "ms"}},
            "observables": {"atom_number": {"value": value, "unit": "atoms", **more}},
        }
        for minute, value in enumerate(values)
    ]
    Path("a.jsonl").write_text("".join(json.dumps(line) + "\n" for line in lines), encoding="utf-8")
    assert run("take", "a.jsonl", "--new").code == 0


DECAY = [1234.56789, 987.65432, 801.0, 650.123456, 12.5]


def test_points_that_are_not_repeated_share_their_decimals(run: Callable[..., Any], on_screen: Show) -> None:
    take(run, DECAY)
    lines = body(on_screen("scan", "decay"))
    start = next(place for place, line in enumerate(lines) if "hold_time (ms)" in line)
    assert lines[start].split() == ["hold_time", "(ms)", "shots", "atom_number", "(atoms)"]
    assert [line.split()[2] for line in lines[start + 1 : start + 6]] == [
        "1234.6", "987.7", "801.0", "650.1", "12.5",
    ]  # fmt: skip


def test_a_given_stderr_is_shown_beside_points_that_are_not_repeated(
    run: Callable[..., Any], on_screen: Show
) -> None:
    take(run, DECAY, stderr=31.0)
    lines = body(on_screen("scan", "decay"))
    start = next(place for place, line in enumerate(lines) if "hold_time (ms)" in line)
    assert lines[start].split()[-1] == "stderr"
    assert lines[start + 1].split()[2:] == ["1235", "±", "31"]


def test_one_point_has_no_chart(run: Callable[..., Any], on_screen: Show) -> None:
    take(run, DECAY[:1])
    text = on_screen("scan", "decay")
    assert "1 point\n" in text
    assert "1 points" not in text
    assert "●" not in text
    assert "a chart needs two points" in text


def test_a_poor_fit_shows_at_a_glance(run: Callable[..., Any], on_screen: Show) -> None:
    take(run, [1000.0 / (1 + minute / 5) + 3 * (-1) ** minute for minute in range(40)])
    run("fit", "decay", "exponential")
    lines = body(on_screen("fit", "decay", "exponential", "--no-keep"))
    (summary,) = [line for line in lines if line.startswith("rms ")]
    assert " atoms, " in summary
    assert re.search(r" runs of signs in (38|39|40) points \(about ", summary), "all but outliers"
    text = " ".join(lines)
    assert (
        "No warnings, but the residuals follow a pattern: the curve may not be of this shape." in text
    ) or ("DO NOT TRUST" in text)


def test_a_good_fit_has_as_many_runs_as_chance(where: Path, on_screen: Show) -> None:
    lines = body(on_screen("--store", where, "fit", "loss-coarse", "lorentzian", "-o", "atom_number"))
    assert any(
        re.fullmatch(r"rms \S+ atoms, \d+ runs of signs in 31 points \(about 1\d expected\)", line)
        for line in lines
    )
    assert lines[-1] == "No warnings; the residuals have a say too."


@WIDTHS
@pytest.mark.parametrize(
    "command",
    ["scans", "scan loss-coarse", "fit loss-coarse lorentzian", "models", "models lorentzian", "edits"],
)
def test_a_terminal_that_knows_only_ascii(
    command: str, width: int, where: Path, at_home: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    out = io.TextIOWrapper(io.BytesIO(), encoding="ascii", errors="strict")
    monkeypatch.setenv("NO_COLOR", "1")
    monkeypatch.setattr(
        Screen, "here", classmethod(lambda cls, json: cls(out, sys.stderr, "terminal", width))
    )
    assert main([*command.split(), "--store", str(where)]) == 0
    out.flush()
    raw = out.buffer.getvalue()
    text = re.sub(r"\x1b\[[0-9;]*m", "", raw.decode("ascii"))
    assert "\\u" not in text
    assert "?" not in text.replace("??", "")
    assert max(map(len, text.split("\n")[1:])) <= width
