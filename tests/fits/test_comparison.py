"""Models side by side: AICc by hand, weights, the average and its two uncertainties."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from nightfold import FitResult, fit_curve, open_store
from nightfold.errors import FitError, NotFound
from nightfold.fits.comparison import Comparison, compare_fits

X = np.linspace(-3.0, 3.0, 31)
Y = 1e4 - 6e3 / (1 + (2 * (X - 0.1) / 1.2) ** 2) + np.random.default_rng(8).normal(0, 150, 31)


def plain(model: str, x: np.ndarray = X, y: np.ndarray = Y, **options: object) -> FitResult:
    return fit_curve(x, y, model, weights="equal", robust=False, unit_x="A", **options)  # type: ignore[arg-type]


def by_hand(fit: FitResult, k: int) -> float:
    """AICc of least squares as Burnham and Anderson (2002) write it, section 7.7.6, without the constant."""
    n, sse = len(fit.y), float(np.sum((fit.y - fit.predict(fit.x)) ** 2))
    return float(n * np.log(sse / n)) + 2 * k + 2 * k * (k + 1) / (n - k - 1)


def test_weights_are_those_computed_by_hand() -> None:
    fits = [plain("lorentzian"), plain("gaussian"), plain("lorentzian", background="sloped")]
    found = compare_fits(fits)
    aicc = np.array([by_hand(fit, k) for fit, k in zip(fits, (5, 5, 6), strict=True)])
    weights = np.exp(-(aicc - aicc.min()) / 2)
    assert [each.delta for each in found.candidates] == pytest.approx((aicc - aicc.min()).tolist())
    assert [each.weight for each in found.candidates] == pytest.approx((weights / weights.sum()).tolist())
    constant = 31 * (np.log(2 * np.pi) + 1)
    assert found.candidates[0].aicc == pytest.approx(aicc[0] + constant)
    assert found.best.model == "lorentzian"
    assert (found.estimate, found.n) == ("center", 31)


def test_the_average_keeps_scatter_and_models_apart() -> None:
    fits = [plain("lorentzian"), plain("gaussian")]
    found = compare_fits(fits, estimate="fwhm")
    w = np.array([each.weight for each in found.candidates])
    v = np.array([fit.estimates["fwhm"].value for fit in fits])
    s = np.array([fit.estimates["fwhm"].stderr for fit in fits])
    combined = found.combined
    assert combined is not None
    assert combined.value == pytest.approx(w @ v)
    assert combined.stderr == pytest.approx(np.sqrt(w @ s**2))
    assert combined.model_stderr == pytest.approx(np.sqrt(w @ (v - w @ v) ** 2))
    assert combined.total_stderr == pytest.approx(np.sqrt(w @ (s**2 + (v - w @ v) ** 2)))
    assert combined.unit == "A"
    assert combined.trusted
    assert found.spread == pytest.approx(np.ptp(v))
    assert found.table()["value"].tolist() == v.tolist()


def test_equal_models_share_the_weight() -> None:
    found = compare_fits([plain("lorentzian"), plain("lorentzian")])
    assert [each.weight for each in found.candidates] == [0.5, 0.5]
    assert found.combined is not None
    assert found.combined.model_stderr == pytest.approx(0.0, abs=1e-12)


def test_only_points_that_all_used_count() -> None:
    fit, other = plain("lorentzian"), plain("gaussian")
    kept = np.delete(np.arange(31), [4])
    without = replace(
        other,
        x=X[kept],
        y=Y[kept],
        used=kept,
        deviation=other.deviation[kept],
        outliers=(4,),
        outlier_x=X[[4]],
        outlier_y=Y[[4]],
    )
    found = compare_fits([fit, without])
    assert found.n == 30
    pruned = replace(fit, x=X[kept], y=Y[kept])
    difference = by_hand(pruned, 5) - by_hand(without, 5)
    assert found.candidates[0].aicc - found.candidates[1].aicc == pytest.approx(difference)


def test_the_scatter_learnt_counts() -> None:
    """A likelihood with the standard deviations that the fit found, its scale at the maximum."""
    fit = plain("lorentzian")
    deviation = 100 + 0.02 * Y
    found = compare_fits([replace(fit, deviation=deviation), fit]).candidates[0].aicc
    z = fit.residuals / deviation
    scale = np.mean(z**2)
    likelihood = np.sum(-0.5 * np.log(2 * np.pi * scale * deviation**2) - 0.5 * z**2 / scale)
    assert found == pytest.approx(-2 * likelihood + 10 + 60 / 25)


def test_absolute_stderr_are_taken_at_face_value() -> None:
    fits = [
        fit_curve(X, Y, model, stderr=200.0, absolute_stderr=True, robust=False)
        for model in ("lorentzian", "gaussian")
    ]
    found = compare_fits(fits, stderr=np.full(31, 200.0))
    chi = [np.sum((fit.residuals / 200) ** 2) for fit in fits]
    assert found.candidates[1].aicc - found.candidates[0].aicc == pytest.approx(chi[1] - chi[0])
    with pytest.raises(FitError, match="stderr= again"):
        compare_fits(fits)


def test_models_about_different_things_have_no_average() -> None:
    x = np.linspace(0, 5, 20)
    y = 1 / (1 + x) + 0.003 * np.cos(11 * x)
    found = compare_fits([plain("exponential", x, y), plain("two-body", x, y)])
    assert found.estimate is None
    assert found.combined is None
    assert [each.name for each in found.candidates] == ["lifetime", "two_body_rate"]
    assert found.best.model == "two-body"
    both = compare_fits([plain("exponential", x, y), plain("two-body", x, y)], estimate="amplitude")
    assert both.combined is not None
    assert both.combined.value == pytest.approx(1.0, abs=0.02)


def test_a_heavy_doubtful_model_makes_the_average_doubtful() -> None:
    from nightfold import FitWarning

    fits = [plain("lorentzian"), plain("gaussian")]
    doubt = (FitWarning("at-bound", "it ran away", False),)
    heavy = compare_fits([replace(fits[0], warnings=doubt), fits[1]]).combined
    light = compare_fits([fits[0], replace(fits[1], warnings=doubt)])
    assert heavy is not None
    assert not heavy.trusted
    assert light.candidates[1].weight < 0.05
    assert light.combined is not None
    assert light.combined.trusted


def test_derived_numbers_may_be_compared() -> None:
    fits = [plain("lorentzian", background="none"), plain("gaussian")]
    name = next(iter(fits[0].derived))
    found = compare_fits(fits, estimate=name)
    assert [each.estimate for each in found.candidates] == [fit.derived[name] for fit in fits]


def test_too_few_points_for_the_criterion_have_no_weight() -> None:
    x, y = X[::6], Y[::6]
    found = compare_fits([plain("exponential", x, y), plain("lorentzian", x, y)])
    assert found.candidates[1].weight == 0.0
    assert found.candidates[1].aicc == float("inf")


def test_what_cannot_be_compared_is_refused() -> None:
    with pytest.raises(FitError, match="found 1 fit, wanted two or more"):
        compare_fits([plain("lorentzian")])
    with pytest.raises(FitError, match="different points"):
        compare_fits([plain("lorentzian"), plain("gaussian", X[:-1], Y[:-1])])
    with pytest.raises(NotFound, match="exponential: no estimate 'center'"):
        compare_fits([plain("lorentzian"), plain("exponential")], estimate="center")


def records(holds: tuple[float, ...], swept: list[str]) -> list[dict[str, object]]:
    return [
        {
            "machine": "heron",
            "started": f"2026-10-05T{20 + row}:{shot // 6:02d}:{shot % 6 * 9:02d}Z",
            "sequence": "hold",
            "scan": "map",
            "swept": swept,
            "parameters": {
                "current": {"value": float(x), "unit": "A"},
                "hold": {"value": hold, "unit": "ms"},
            },
            "observables": {"atom_number": float(y)},
        }
        for row, hold in enumerate(holds)
        for shot, (x, y) in enumerate(zip(X, np.roll(Y, row), strict=True))
    ]


def test_a_scan(tmp_path: Path) -> None:
    with open_store(tmp_path / "s.sqlite", create=True) as store:
        store.take(records((100.0,), ["current"]))
        found = store.compare("map", ["lorentzian", "gaussian"], observable="atom_number", weights="equal")
        kept = [fit.model for fit in store.fits()]
    assert isinstance(found, Comparison)
    assert found.where == {}
    assert found.candidates[0].weight > found.candidates[1].weight
    assert kept == ["lorentzian", "gaussian"]


def test_slices_of_a_scan_are_compared_one_by_one(tmp_path: Path) -> None:
    with open_store(tmp_path / "s.sqlite", create=True) as store:
        store.take(records((100.0, 200.0), ["current", "hold"]))
        found = store.compare(
            "map", ["lorentzian", "gaussian"], observable="atom_number", along="current", keep=False
        )
        assert not store.fits()
    assert isinstance(found, list)
    assert [each.where for each in found] == [{"hold": 100.0}, {"hold": 200.0}]
