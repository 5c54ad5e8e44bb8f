"""The whole path, from records through the command line to numbers, against values from outside the project.

Sources: NIST Statistical Reference Datasets, nonlinear regression, Eckerle4 (measured; certified values to 11 digits,
https://www.itl.nist.gov/div898/strd/nls/data/eckerle4.shtml), Misra1a and BoxBOD; lmfit's own fits of the peak that
comes with its examples; the IANA time zone database as Python ships it.
"""

from __future__ import annotations

import json
import math
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

import lmfit
import numpy as np
import pytest

from nightfold import FitResult, open_store
from nightfold_cli.main import main

REFERENCE = Path(__file__).parents[1] / "reference"
START = datetime(2026, 10, 5, 18, 30, tzinfo=UTC)
FWHM = 2 * math.sqrt(2 * math.log(2))


def strd(name: str) -> tuple[np.ndarray[Any, Any], np.ndarray[Any, Any], dict[str, list[float]]]:
    """Return x, y and, by parameter, start 1, start 2, certified value and standard deviation."""
    lines = (REFERENCE / "nist_strd" / f"{name}.dat").read_text().splitlines()
    certified = {}
    for line in lines[:60]:
        name_, equals, numbers = line.partition("=")
        if equals and name_.strip().startswith("b") and len(numbers.split()) == 4:
            certified[name_.strip()] = [float(number) for number in numbers.split()]
    first = next(k for k, line in enumerate(lines) if line.split() == ["Data:", "y", "x"])
    rows = [line.split() for line in lines[first + 1 :] if line.strip()]
    y, x = np.array(rows, dtype=float).T
    return x, y, certified


def as_records(x: Any, y: Any) -> list[dict[str, Any]]:
    """Return points as shots of one unlabelled scan, taken in the order of the file."""
    return [
        {
            "format": 1,
            "machine": "bench",
            "started": (START + timedelta(seconds=20 * k)).isoformat(),
            "sequence": "look",
            "parameters": {
                "wavelength": {"value": float(u), "unit": "nm"},
                "slit": {"value": 0.2, "unit": "mm"},
            },
            "observables": {"transmittance": float(v)},
        }
        for k, (u, v) in enumerate(zip(x, y, strict=True))
    ]


def run(capsys: pytest.CaptureFixture[str], *words: str) -> Any:
    assert main([*words]) == 0
    return json.loads(capsys.readouterr().out)


def test_eckerle4_from_records_to_certified_values(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    x, y, certified = strd("Eckerle4")
    assert len(x) == 35
    lines = tmp_path / "eckerle4.jsonl"
    lines.write_text("".join(json.dumps(record) + "\n" for record in as_records(x, y)))
    store = ("--store", str(tmp_path / "s.sqlite"))
    assert main([*store, "new"]) == 0
    capsys.readouterr()
    taken = run(capsys, *store, "take", str(lines), "--json")
    assert (taken["new"], taken["refused"]) == (35, [])
    (scan,) = run(capsys, *store, "scans", "--json")["scans"]
    (axis,) = scan["axes"]
    assert (axis["parameter"], axis["unit"], axis["points"], axis["low"], axis["high"]) == (
        "wavelength", "nm", 35, 400.0, 500.0,
    )  # fmt: skip
    words = (
        "fit",
        str(scan["id"]),
        "gaussian",
        "-o",
        "transmittance",
        "--background",
        "none",
        "--plain",
        "--json",
    )
    (fit,) = run(capsys, *store, *words)["fits"]
    value = {name: estimate["value"] for name, estimate in fit["estimates"].items()}
    stderr = {name: estimate["stderr"] for name, estimate in fit["estimates"].items()}
    b1, b2, b3 = (certified[name][2] for name in ("b1", "b2", "b3"))
    s2, s3 = certified["b2"][3], certified["b3"][3]
    # y = b1/b2 exp(-(x - b3)^2 / (2 b2^2)): center = b3, fwhm = 2 sqrt(2 ln 2) b2, amplitude = b1 / b2
    assert value["center"] == pytest.approx(b3, rel=1e-6)
    assert value["fwhm"] == pytest.approx(FWHM * b2, rel=1e-6)
    assert value["amplitude"] == pytest.approx(b1 / b2, rel=1e-6)
    assert stderr["center"] == pytest.approx(s3, rel=1e-4)
    assert stderr["fwhm"] == pytest.approx(FWHM * s2, rel=1e-4)
    # the amplitude's needs cov(b1, b2), which is not certified: b1 = amplitude * fwhm / (2 sqrt(2 ln 2)) is
    with open_store(tmp_path / "s.sqlite") as opened:
        result = opened.fit(
            scan["id"],
            "gaussian",
            observable="transmittance",
            background="none",
            weights="equal",
            robust=False,
        )
    assert isinstance(result, FitResult)
    slope = {"amplitude": value["fwhm"] / FWHM, "fwhm": value["amplitude"] / FWHM}
    covariance = result.covariance
    variance = sum(slope[m] * slope[n] * covariance.loc[m, n] for m in slope for n in slope)
    assert value["amplitude"] * value["fwhm"] / FWHM == pytest.approx(b1, rel=1e-6)
    assert math.sqrt(variance) == pytest.approx(certified["b1"][3], rel=1e-4)
    low, high = fit["estimates"]["center"]["interval95"]
    assert low < b3 < high


@pytest.mark.parametrize(
    ("name", "reference"), [("gaussian", "GaussianModel"), ("lorentzian", "LorentzianModel")]
)
def test_peak_taken_as_csv_against_lmfit(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], name: str, reference: str
) -> None:
    source = REFERENCE / "lmfit_test_peak" / "test_peak.dat"
    x, y = np.loadtxt(source).T
    table = tmp_path / "peak.csv"
    table.write_text("t [s],y\n" + "".join(f"{float(u)!r},{float(v)!r}\n" for u, v in zip(x, y, strict=True)))
    store = ("--store", str(tmp_path / "s.sqlite"))
    assert main([*store, "new"]) == 0
    words = (
        "--machine",
        "bench",
        "--sequence",
        "look",
        "--swept",
        "t",
        "--observables",
        "y",
        "--parameters",
        "t",
    )
    began = ("--started-at", START.isoformat(), "--cycle", "10")
    assert main([*store, "take", str(table), *words, *began]) == 0
    capsys.readouterr()
    (scan,) = run(capsys, *store, "scans", "--json")["scans"]
    assert scan["shots"] == 401
    asked = ("fit", str(scan["id"]), name, "-o", "y", "--background", "flat", "--plain", "--json")
    (fit,) = run(capsys, *store, *asked)["fits"]
    peak = getattr(lmfit.models, reference)()
    model = peak + lmfit.models.ConstantModel()
    parameters = peak.guess(y, x=x)
    parameters.add("c", 0.0)
    theirs = model.fit(y, parameters, x=x, fit_kws={"xtol": 1e-12, "ftol": 1e-12})
    for ours, key in (("center", "center"), ("fwhm", "fwhm"), ("amplitude", "height"), ("offset", "c")):
        estimate = fit["estimates"][ours]
        assert estimate["value"] == pytest.approx(theirs.params[key].value, rel=2e-5, abs=2e-5), ours
        assert estimate["stderr"] == pytest.approx(theirs.params[key].stderr, rel=2e-3), ours


def misra1a(x: Any, b1: float, b2: float) -> Any:
    return b1 * (1 - np.exp(-b2 * x))


@pytest.mark.parametrize("name", ["Misra1a", "BoxBOD"])
@pytest.mark.parametrize("start", [0, 1])
def test_user_models_reach_certified_values_from_both_starts(tmp_path: Path, name: str, start: int) -> None:
    x, y, certified = strd(name)  # both are b1 (1 - exp(-b2 x))
    with open_store(tmp_path / "s.sqlite", create=True) as store:
        store.take([record | {"scan": name, "swept": ["wavelength"]} for record in as_records(x, y)])
        begin = {key: numbers[start] for key, numbers in certified.items()}
        model = lmfit.Model(misra1a, independent_vars=["x"])
        result = store.fit(
            name,
            model,
            observable="transmittance",
            start=begin,
            background="none",
            weights="equal",
            robust=False,
        )
    assert isinstance(result, FitResult)
    for key, (_, _, value, stderr) in certified.items():
        assert result.estimates[key].value == pytest.approx(value, rel=1e-6)
        assert result.estimates[key].stderr == pytest.approx(stderr, rel=1e-4)


@pytest.mark.parametrize(
    "zone", ["Europe/Vienna", "America/St_Johns", "Asia/Kathmandu", "Australia/Lord_Howe"]
)
def test_times_against_the_iana_database(tmp_path: Path, zone: str) -> None:
    there = ZoneInfo(zone)
    local = [datetime(2026, month, 5, 22, 14, 3, 250_000, tzinfo=there) for month in range(1, 13)]
    records = [
        {"machine": "m", "sequence": "s", "started": moment.isoformat(), "parameters": {"p": k}}
        for k, moment in enumerate(local)
    ]
    with open_store(tmp_path / "s.sqlite", create=True) as store:
        assert store.take(records).new == 12
        started = store.shots(["p"]).sort_values("p").started
    assert [moment.to_pydatetime() for moment in started] == [moment.astimezone(UTC) for moment in local]
