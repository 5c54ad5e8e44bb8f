"""Every model against lmfit, or against the equation it solves, solved numerically."""

from __future__ import annotations

from collections.abc import Callable

import lmfit
import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import quad, solve_ivp
from scipy.optimize import brentq

from nightfold.fits.models import find_model

Array = NDArray[np.float64]
RANDOM = np.random.default_rng(3)


def values(model: str, x: Array, *parameters: float) -> Array:
    return np.asarray(find_model(model).function(x, *parameters))


X = np.linspace(-4.0, 5.0, 37)


@pytest.mark.parametrize("model", ["lorentzian", "gaussian"])
def test_lines_are_those_of_lmfit(model: str) -> None:
    theirs = lmfit.models.LorentzianModel() if model == "lorentzian" else lmfit.models.GaussianModel()
    parameters = theirs.make_params(center=0.4, sigma=0.7, amplitude=2.0)
    wanted = theirs.eval(parameters, x=X)
    found = values(model, X, 0.4, parameters["fwhm"].value, parameters["height"].value)
    assert found == pytest.approx(wanted, rel=1e-5)  # lmfit's factors have seven digits


@pytest.mark.parametrize("share", [0.0, 0.02, 0.3, 0.6, 0.95, 0.999, 1.0])
def test_voigt_is_that_of_lmfit(share: float) -> None:
    w = 1.3
    lorentzian = share * w
    gaussian = np.sqrt(max((w - 0.5346 * lorentzian) ** 2 - 0.4654**2 * lorentzian**2, 0.0))
    theirs = lmfit.models.VoigtModel()
    parameters = theirs.make_params(
        center=0.4, sigma=max(gaussian / np.sqrt(8 * np.log(2)), 1e-6), amplitude=1.0
    )
    parameters["gamma"].set(value=lorentzian / 2, expr="")
    wanted = theirs.eval(parameters, x=X) / theirs.eval(parameters, x=np.array([0.4]))
    assert values("voigt", X, 0.4, w, 1.0, share) == pytest.approx(wanted, rel=1e-6)


@pytest.mark.parametrize("share", [0.0, 0.3, 0.7, 1.0])
def test_width_of_the_voigt_line_is_the_published_one(share: float) -> None:
    edge = brentq(lambda d: float(values("voigt", np.array([d]), 0.0, 2.0, 1.0, share)[0]) - 0.5, 0.1, 3.0)
    assert edge == pytest.approx(1.0, rel=2.4e-4)


def test_voigt_is_a_convolution() -> None:
    share, gauss = 0.45, np.sqrt((1 - 0.45) * (1 + (1 - 2 * 0.5346) * 0.45))
    sigma, half = gauss / np.sqrt(8 * np.log(2)), share / 2

    def at(d: float) -> float:
        def both(t: float) -> float:
            return float(np.exp(-0.5 * (t / sigma) ** 2) * half / ((d - t) ** 2 + half**2))

        return float(quad(both, -8 * sigma, 8 * sigma, points=[0.0, d], epsabs=1e-13, limit=400)[0])

    d = np.array([0.0, 0.2, 0.5, 1.1, 2.5])
    wanted = np.array([at(one) for one in d]) / at(0.0)
    assert values("voigt", d, 0.0, 1.0, 1.0, share) == pytest.approx(wanted, rel=1e-8)


def test_rabi_line_solves_the_schroedinger_equation() -> None:
    rabi = 0.8
    width = 2 * 0.7986853552847 * rabi

    def transferred(detuning: float) -> float:
        def slope(_: float, state: NDArray[np.complex128]) -> NDArray[np.complex128]:
            hamiltonian = np.pi * np.array([[detuning, rabi], [rabi, -detuning]])
            return np.asarray(-1j * hamiltonian @ state)

        end = solve_ivp(slope, (0.0, 0.5 / rabi), np.array([1.0 + 0j, 0.0]), rtol=1e-11, atol=1e-12)
        return float(abs(end.y[1, -1]) ** 2)

    detunings = np.array([-3.0, -1.2, -0.4, 0.0, 0.7, 1.1, 2.6])
    wanted = np.array([transferred(one) for one in detunings])
    assert values("rabi-line", detunings + 7.0, 7.0, width, 1.0) == pytest.approx(wanted, abs=1e-9)
    assert values("rabi-line", np.array([7.0 + width / 2]), 7.0, width, 1.0) == pytest.approx(0.5, abs=1e-12)


def test_rabi_flop_solves_the_schroedinger_equation() -> None:
    def slope(_: float, state: NDArray[np.complex128]) -> NDArray[np.complex128]:
        return np.asarray(-1j * np.pi * 1.7 * state[::-1])

    times = np.linspace(0.0, 2.0, 9)
    way = solve_ivp(slope, (0.0, 2.0), np.array([1.0 + 0j, 0.0]), t_eval=times, rtol=1e-11, atol=1e-12)
    assert values("rabi-flop", times, 0.9, 1.7, np.inf) == pytest.approx(0.9 * abs(way.y[1]) ** 2, abs=1e-8)


def test_asymmetric_line_is_two_half_lines() -> None:
    found = values("asymmetric-lorentzian", X, 0.4, 1.2, 2.0, 0.5)
    wide, narrow = (values("lorentzian", X, 0.4, w, 2.0) for w in (1.8, 0.6))
    assert found == pytest.approx(np.where(X > 0.4, wide, narrow), rel=1e-14)


def test_damped_oscillation_solves_its_equation() -> None:
    f, t = 1.3, 0.8
    f0 = np.hypot(f, 1 / (2 * np.pi * t))
    x = np.linspace(0.0, 2.0, 15)
    start = values("damped-oscillation", np.array([0.0, 1e-6]), 1.1, f, t, 0.6)

    def slope(_: float, z: Array) -> Array:
        return np.array([z[1], -2 * z[1] / t - (2 * np.pi * f0) ** 2 * z[0]])

    way = solve_ivp(slope, (0, 2), [start[0], (start[1] - start[0]) / 1e-6], t_eval=x, rtol=1e-10, atol=1e-12)
    assert values("damped-oscillation", x, 1.1, f, t, 0.6) == pytest.approx(way.y[0], abs=2e-5)


def test_ramsey_is_the_mean_over_detunings() -> None:
    f, t = 1.3, 0.8
    sigma = 1 / (np.sqrt(2) * np.pi * t)
    x = np.linspace(0.0, 1.5, 7)

    def mean(at: float) -> float:
        def part(z: float) -> float:
            return float(
                np.exp(-0.5 * z * z) * np.cos(2 * np.pi * (f + sigma * z) * at + 0.6) / np.sqrt(2 * np.pi)
            )

        return float(quad(part, -9, 9, epsabs=1e-12, limit=300)[0])

    assert values("ramsey", x, 1.1, f, t, 0.6) == pytest.approx([1.1 * mean(at) for at in x], abs=1e-9)


def test_cosine_is_an_oscillation_without_decay() -> None:
    assert values("cosine", X, 1.1, 0.7, 0.6) == pytest.approx(
        values("damped-oscillation", X, 1.1, 0.7, np.inf, 0.6), rel=1e-14
    )


LOSSES: dict[str, tuple[tuple[float, ...], Callable[[float, tuple[float, ...]], float]]] = {
    "exponential": ((0.7,), lambda n, p: -n / p[0]),
    "two-body": ((1.4,), lambda n, p: -p[0] * n**2),
    "three-body": ((1.4,), lambda n, p: -p[0] * n**3),
    "one-two-body": ((0.6, 1.4), lambda n, p: -p[0] * n - p[1] * n**2),
    "one-three-body": ((0.6, 1.4), lambda n, p: -p[0] * n - p[1] * n**3),
}


@pytest.mark.parametrize("model", LOSSES)
@pytest.mark.parametrize("slow", [1.0, 1e-5, 0.0])
def test_losses_solve_their_rate_equations(model: str, slow: float) -> None:
    """With a one-body rate that is slow, hardly there, and none."""
    parameters, rate = LOSSES[model]
    if len(parameters) == 2:
        parameters = (slow * parameters[0], parameters[1])
    x = np.linspace(0.0, 4.0, 11)
    way = solve_ivp(lambda _, n: [rate(n[0], parameters)], (0, 4), [1.0], t_eval=x, rtol=1e-11, atol=1e-13)
    assert values(model, x, 2.5, *parameters) == pytest.approx(2.5 * way.y[0], rel=1e-8)


def test_mixed_loss_without_the_other_is_one_body_loss() -> None:
    x = np.linspace(0.0, 4.0, 11)
    for model in ("one-two-body", "one-three-body"):
        assert values(model, x, 2.5, 0.6, 0.0) == pytest.approx(2.5 * np.exp(-0.6 * x), rel=1e-14)


def test_expansion_is_that_of_a_cloud_of_atoms() -> None:
    places, speeds = RANDOM.normal(size=(2, 400_000))
    x = np.array([0.0, 0.5, 2.0])
    sizes = [float(np.std(0.3 * places + 0.8 * speeds * at)) for at in x]
    assert values("expansion", x, 0.3, 0.8) == pytest.approx(sizes, rel=5e-3)


def test_landau_zener_is_a_sweep_through_a_resonance() -> None:
    rabi = 1.0

    def transferred(rate: float) -> float:
        reach = 25.0 * max(rabi, np.sqrt(rate))

        def slope(t: float, state: NDArray[np.complex128]) -> NDArray[np.complex128]:
            detuning = rate * t
            hamiltonian = np.pi * np.array([[detuning, rabi], [rabi, -detuning]])
            return np.asarray(-1j * hamiltonian @ state)

        ends = (-reach / rate, reach / rate)
        end = solve_ivp(slope, ends, np.array([1.0 + 0j, 0.0]), method="DOP853", rtol=1e-8, atol=1e-9)
        return float(abs(end.y[1, -1]) ** 2)

    rates = np.array([10.0, 30.0])
    wanted = [transferred(rate) for rate in rates]
    assert values("landau-zener", rates, 1.0, np.pi**2 * rabi**2) == pytest.approx(wanted, abs=0.03)
    assert values("landau-zener", np.array([0.0, -6.0]), 1.5, 9.0) == pytest.approx(
        [1.5, 1.5 * (1 - np.exp(-1.5))]
    )


def test_saturation_is_the_steady_state_of_a_two_level_atom() -> None:
    """On resonance, rates of absorption and of stimulated emission s/2, of decay one: the excited share doubled."""
    s = np.array([0.0, 0.1, 1.0, 7.0])
    excited = (s / 2) / (1 + s)
    assert values("saturation", s, 1.0, 1.0) == pytest.approx(2 * excited, rel=1e-14)
