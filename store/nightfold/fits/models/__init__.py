"""The line shapes by name, one a file; a file is imported when its name is first asked for."""

from __future__ import annotations

from difflib import get_close_matches
from functools import cache
from importlib import import_module
from types import MappingProxyType

from nightfold.errors import NotFound
from nightfold.fits.models.shape import LineShape

HOMES = MappingProxyType(
    {
        "lorentzian": "lorentzian.Lorentzian",
        "gaussian": "gaussian.Gaussian",
        "voigt": "voigt.Voigt",
        "rabi-line": "rabi_line.RabiLine",
        "asymmetric-lorentzian": "asymmetric_lorentzian.AsymmetricLorentzian",
        "exponential": "exponential.Exponential",
        "two-body": "two_body.TwoBody",
        "three-body": "three_body.ThreeBody",
        "one-two-body": "one_two_body.OneTwoBody",
        "one-three-body": "one_three_body.OneThreeBody",
        "damped-oscillation": "damped_oscillation.DampedOscillation",
        "cosine": "cosine.Cosine",
        "ramsey": "ramsey.Ramsey",
        "rabi-flop": "rabi_flop.RabiFlop",
        "expansion": "expansion.Expansion",
        "landau-zener": "landau_zener.LandauZener",
        "saturation": "saturation.Saturation",
    }
)
MODEL_NAMES: tuple[str, ...] = tuple(HOMES)


@cache
def find_model(name: str) -> LineShape:
    """Return the line shape of that name.

    Raises
    ------
    NotFound
        When there is none; the message names the nearest ones.
    """
    if name not in HOMES:
        near = get_close_matches(
            str(name).lower().replace("_", "-").replace(" ", "-"), HOMES, n=3, cutoff=0.5
        )
        hint = f"did you mean {' or '.join(near)}?" if near else f"there are {', '.join(HOMES)}"
        raise NotFound(f"no model is called {name!r}; {hint}")
    module, attribute = HOMES[name].split(".")
    shape: type[LineShape] = getattr(import_module(f"{__name__}.{module}"), attribute)
    return shape()


def list_models() -> tuple[LineShape, ...]:
    """Return every line shape, in the order of the docs."""
    return tuple(find_model(name) for name in HOMES)
