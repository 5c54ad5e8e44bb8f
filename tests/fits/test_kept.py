"""Fits of scans in the store: along an axis, kept with their provenance, stale when their data change."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from sqlalchemy import Engine, event

from nightfold import FitResult, FitTable, Model, Store, fit_curve, open_store
from nightfold.errors import ChoiceNeeded, FitError, NotFound
from nightfold.fits.scanfit import count_left_out, fingerprint_model

START = datetime(2026, 10, 5, 19, tzinfo=UTC)


def line(x: np.ndarray[Any, Any], center: float) -> np.ndarray[Any, Any]:
    return 1e5 - 4e4 / (1 + (2 * (x - center) / 0.8) ** 2)


def records(
    label: str, holds: tuple[float, ...] = (100.0,), *, swept: tuple[str, ...] = ("coil_current",)
) -> list[Any]:
    rng = np.random.default_rng(11)
    made: list[Any] = []
    for hold in holds:
        x = rng.permutation(np.linspace(59, 63, 21))
        y = line(x, 61 + hold / 1000) * (1 + 0.01 * rng.normal(size=21))
        for current, number in zip(x, y, strict=True):
            made.append(
                {
                    "uid": f"{label}-{len(made)}",
                    "machine": "heron",
                    "started": (START + timedelta(seconds=15 * len(made))).isoformat(),
                    "sequence": "hold",
                    "scan": label,
                    "swept": list(swept),
                    "parameters": {
                        "coil_current": {"value": float(current), "unit": "A"},
                        "hold_time": {"value": hold, "unit": "ms"},
                        "synth": 2 * float(current),
                        "axis": "x" if current < 61 else "y",
                    },
                    "observables": {"atom_number": {"value": float(number), "stderr": 1e3}},
                }
            )
    return made


@pytest.fixture
def store(tmp_path: Path) -> Any:
    with open_store(tmp_path / "s.sqlite", create=True) as opened:
        opened.take(records("loss"))
        opened.take(records("map", (100.0, 200.0, 300.0), swept=("coil_current", "hold_time")))
        yield opened


def test_a_scan_fit_is_the_curve_fit_of_its_table(store: Store) -> None:
    result = store.fit("loss", "lorentzian", observable="atom_number")
    assert isinstance(result, FitResult)
    table = store.scan("loss").table()
    alone = fit_curve(
        table.coil_current, table.atom_number, "lorentzian", unit_x="A", stderr=table.atom_number_stderr
    )
    for name, estimate in result.estimates.items():
        assert (estimate.value, estimate.stderr) == (
            alone.estimates[name].value,
            alone.estimates[name].stderr,
        )
    assert result.estimates["center"].unit == "A"
    assert result.estimates["center"].value == pytest.approx(61.1, abs=5 * result.estimates["center"].stderr)


def test_kept_with_everything_that_it_rests_on(store: Store) -> None:
    result = store.fit("loss", "lorentzian", observable="atom_number", fixed={"fwhm": 0.8})
    assert isinstance(result, FitResult)
    (kept,) = store.fits("loss")
    assert (kept.model, kept.background, kept.along, kept.observable) == (
        "lorentzian", "flat", "coil_current", "atom_number",
    )  # fmt: skip
    assert kept.shots == 21
    assert kept.settings["fixed"] == {"fwhm": 0.8}
    assert kept.estimates["fwhm"].fixed
    for name, estimate in result.estimates.items():
        assert kept.estimates[name].value == estimate.value
        assert kept.estimates[name].interval(0.95) == pytest.approx(estimate.interval(0.95))
    with pytest.raises(FitError, match="fit again"):
        kept.estimates["center"].interval(0.5)
    assert not kept.stale


def test_infinite_numbers_are_kept_as_they_are(tmp_path: Path) -> None:
    made = records("two")[:3]
    with open_store(tmp_path / "i.sqlite", create=True) as opened:
        opened.take(made)
        result = opened.fit(
            "two", "gaussian", observable="atom_number", background="flat", fixed={"fwhm": 0.8}
        )
        assert isinstance(result, FitResult)
        (kept,) = opened.fits()
    center = result.estimates["center"]
    assert np.isinf([center.stderr, *center.interval(0.95)]).all()
    assert kept.estimates["center"].stderr == center.stderr
    for level in (0.6827, 0.95):
        assert kept.estimates["center"].interval(level) == center.interval(level)


def test_same_fit_twice_is_kept_once_and_gives_the_same_numbers(store: Store) -> None:
    one = store.fit("loss", "lorentzian", observable="atom_number")
    two = store.fit("loss", "lorentzian", observable="atom_number")
    assert isinstance(one, FitResult)
    assert isinstance(two, FitResult)
    assert {n: e.value for n, e in one.estimates.items()} == {n: e.value for n, e in two.estimates.items()}
    assert len(store.fits()) == 1


def test_another_function_of_the_same_name_is_another_fit(store: Store) -> None:
    kept = []
    for own in (
        Model(lambda x, a, b: a * np.exp(-b * (x - 59)), start={"b": 0.1}),
        Model(lambda x, a, b: a / (1 + b * (x - 59)), start={"b": 0.1}),
    ):
        for _ in range(2):
            store.fit("loss", own, observable="atom_number")
        kept += store.fits()
    assert [fit.model for fit in kept] == ["model", "model"]
    assert kept[1].replaces == kept[0].id
    assert kept[0].settings["function"] != kept[1].settings["function"]
    store.fit("loss", "lorentzian", observable="atom_number")
    assert "function" not in store.fits()[-1].settings


def test_a_function_counts_with_what_it_refers_to() -> None:
    def power(exponent: float) -> Model:
        return Model(lambda x, a: a * x**exponent)

    assert fingerprint_model(power(2.0)) == fingerprint_model(power(2.0))
    assert fingerprint_model(power(2.0)) != fingerprint_model(power(3.0))
    assert fingerprint_model(Model(line)) != fingerprint_model(Model(line, start={"center": 61.0}))


def test_lmfit_models_are_told_apart() -> None:
    models = pytest.importorskip("lmfit.models")
    made = [
        models.GaussianModel(),
        models.LorentzianModel(),
        models.GaussianModel(prefix="one_"),
        models.GaussianModel() + models.ConstantModel(),
        models.GaussianModel() * models.ConstantModel(),
        models.ExpressionModel("a * x"),
        models.ExpressionModel("a / x"),
    ]
    assert len({fingerprint_model(model) for model in made}) == len(made)
    assert fingerprint_model(models.GaussianModel()) == fingerprint_model(made[0])


def test_setting_a_shot_aside_makes_a_fit_stale_and_a_new_one_replaces_it(store: Store) -> None:
    store.fit("loss", "lorentzian", observable="atom_number")
    store.set_aside(["loss-3"], "probe light off")
    (old,) = store.fits()
    assert old.stale
    store.fit("loss", "lorentzian", observable="atom_number")
    (new,) = store.fits()
    assert (new.stale, new.replaces, new.shots, new.set_aside) == (False, old.id, 20, 1)
    store.put_back(["loss-3"])
    assert store.fits()[0].stale


def test_an_amended_observable_makes_a_fit_stale(store: Store) -> None:
    store.fit("loss", "lorentzian", observable="atom_number")
    outcome = store.take([{"uid": "loss-3", "observables": {"atom_number": 5e4}, "derivation": "by hand"}])
    assert outcome.amended == 1
    assert store.fits()[0].stale


def test_keep_false_keeps_nothing(store: Store) -> None:
    store.fit("loss", "lorentzian", observable="atom_number", keep=False)
    assert store.fits() == []


def test_slices_over_the_other_axis(store: Store) -> None:
    with pytest.raises(ChoiceNeeded, match="it has 2 axes, coil_current, hold_time; name the one"):
        store.fit("map", "lorentzian", observable="atom_number")
    table = store.fit("map", "lorentzian", observable="atom_number", along="coil_current")
    assert isinstance(table, FitTable)
    assert [where["hold_time"] for where in table.slices] == [100.0, 200.0, 300.0]
    center = table.estimates["center"]
    assert np.all(np.abs(center.value - [61.1, 61.2, 61.3]) < 5 * center.stderr)
    shots = store.scan("map").table().query("hold_time == 200.0")
    alone = fit_curve(shots.coil_current, shots.atom_number, "lorentzian")
    assert center.value[1] == pytest.approx(alone.estimates["center"].value, rel=1e-9)
    assert center.stderr[1] == pytest.approx(alone.estimates["center"].stderr, rel=1e-6)
    assert [kept.slice for kept in store.fits("map")] == list(table.slices)
    assert all(kept.shots == 21 and not kept.stale for kept in store.fits("map"))


def test_shots_set_aside_count_to_the_slice_of_their_values(store: Store) -> None:
    first, second = [f"map-{row}" for row in range(21)], ["map-25", "map-30"]
    store.set_aside([*first, *second], "shutter stuck")
    table = store.fit("map", "lorentzian", observable="atom_number", along="coil_current")
    assert isinstance(table, FitTable)
    assert [where["hold_time"] for where in table.slices] == [200.0, 300.0]
    kept = [(fit.slice["hold_time"], fit.shots, fit.set_aside) for fit in store.fits("map")]
    assert kept == [(200.0, 19, 2), (300.0, 21, 0)]
    counts = count_left_out(store.scan("map"), "coil_current")
    assert counts == [({"hold_time": 200.0}, 2), ({"hold_time": 300.0}, 0)]


def test_a_wrong_setting_that_is_set_aside_cuts_no_slices(tmp_path: Path) -> None:
    made = records("map", (100.0, 200.0), swept=("coil_current", "hold_time"))
    made[3]["parameters"]["hold_time"]["value"] = 1e12  # would merge 100 and 200 as jitter
    made[4]["parameters"]["hold_time"]["value"] += 1e-9
    with open_store(tmp_path / "w.sqlite", create=True) as opened:
        opened.take(made)
        opened.set_aside(["map-3", "map-4"], "wrong")
        opened.fit("map", "lorentzian", observable="atom_number", along="coil_current")
        kept = [(fit.slice["hold_time"], fit.shots, fit.set_aside) for fit in opened.fits("map")]
    assert kept == [(100.0, 19, 1), (200.0, 21, 0)]


def test_many_fits_are_listed_with_few_statements(store: Store) -> None:
    def statements() -> int:
        seen: list[str] = []

        def note(_connection: Any, _cursor: Any, statement: str, *_: Any) -> None:
            seen.append(statement)

        event.listen(Engine, "before_cursor_execute", note)
        try:
            store.fits("map")
        finally:
            event.remove(Engine, "before_cursor_execute", note)
        return len(seen)

    store.fit("map", "lorentzian", observable="atom_number", along="coil_current")
    few = statements()
    for model in ("gaussian", "exponential"):
        store.fit("map", model, observable="atom_number", along="coil_current")
    assert len(store.fits("map")) == 9
    assert statements() == few


def test_along_a_parameter_that_follows_the_axis(store: Store) -> None:
    result = store.fit("loss", "lorentzian", observable="atom_number", along="synth")
    assert isinstance(result, FitResult)
    assert result.estimates["center"].value == pytest.approx(122.2, abs=0.2)


def test_clear_refusals(store: Store) -> None:
    with pytest.raises(NotFound, match="no observable 'atoms'; it has atom_number"):
        store.fit("loss", "lorentzian", observable="atoms")
    with pytest.raises(NotFound, match="no axis 'coil'; it has coil_current"):
        store.fit("loss", "lorentzian", observable="atom_number", along="coil")
    with pytest.raises(NotFound, match="lorentzian"):
        store.fit("loss", "lorenzian", observable="atom_number")


def test_a_text_axis_cannot_be_fitted_along(tmp_path: Path) -> None:
    made = records("axis", swept=("axis",))
    for record in made:
        record["parameters"]["coil_current"] = 60.0
        record["parameters"]["synth"] = 120.0
    with open_store(tmp_path / "t.sqlite", create=True) as opened:
        opened.take(made)
        with pytest.raises(FitError, match="axis is no number"):
            opened.fit("axis", "lorentzian", observable="atom_number")
