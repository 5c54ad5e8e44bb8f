"""Do not trust this: what is wrong with a fit, each with a code, a plain sentence and what to do next."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from math import exp, inf, isfinite

from nightfold.fits.engine.feature import LEVEL
from nightfold.fits.engine.misfit import Misfit, poor_fit
from nightfold.fits.engine.rivals import Rival, ambiguous
from nightfold.fits.engine.sampling import Sampling, too_few
from nightfold.fits.engine.wander import Wander, drift_within_scan
from nightfold.fits.engine.warning import FitWarning, chance, figure, per_unit, with_unit

MOST_SPREAD = {"rate": 0.4, "width": 0.5}
"""Largest standard uncertainty of ln rate and of ln width."""
FREQUENCY_SPREAD = 0.25
"""Largest standard uncertainty of a frequency, times the window."""
LEAST_PERIODS = 0.8
MOST_HEIGHT = 0.75
"""Largest standard uncertainty of an amplitude, of its value."""
LEVEL_STATED = 0.001
MOST_UNLIKE = 2.0
"""Stderr that the estimate with equal weights may lie from the one by the learnt weights."""


@dataclass(frozen=True)
class Facts:
    """What the checks look at, for one data set; lengths in the unit of x.

    ``value``, ``stderr`` and ``spread`` are by reported name, ``roles`` tell which free name is a position,
    width, rate or frequency, ``bound`` lists names that ended at the edge of what is searched; ``feature_p``
    is that of the permutation test when a start grid was ``searched``, else that of an F test.
    ``outliers`` are the x of the points left out; ``unlike`` tells by name how far equal weights lead
    from the estimate, in units of their own stderr; ``stated``, where uncertainties were taken at face value, how many
    times as much the points scatter, and how improbable that is.
    """

    model: str
    value: dict[str, float]
    stderr: dict[str, float]
    spread: dict[str, float]
    roles: dict[str, str]
    bound: tuple[str, ...]
    low: float
    high: float
    count: int
    spare: float
    converged: bool
    feature_p: float
    searched: bool
    constant: bool
    unit_x: str
    outliers: tuple[float, ...] = ()
    unlike: dict[str, float] = field(default_factory=dict)
    sampling: Sampling | None = None
    rival: Rival | None = None
    misfit: Misfit | None = None
    wander: Wander | None = None
    stated: tuple[float, float] | None = None


def judge(facts: Facts) -> tuple[FitWarning, ...]:
    """Return every warning that applies, the gravest first, one for each code; of constant data only that they are."""
    found = [
        _feature(facts),
    ]
    if not facts.constant:
        found += _others(facts)
    by_code: dict[str, list[FitWarning]] = {}
    for warning in found:
        if warning is not None:
            by_code.setdefault(warning.code, []).append(warning)
    return tuple(
        FitWarning(
            code,
            "; also, ".join(dict.fromkeys(one.message for one in alike)),
            all(one.advisory for one in alike),
        )
        for code, alike in by_code.items()
    )


def _others(facts: Facts) -> list[FitWarning | None]:
    """Return what there is to say beyond whether anything stands out."""
    return [
        _converged(facts),
        *(_role_warning(facts, name) for name in facts.roles),
        *(_at_bound(facts, name) for name in facts.bound),
        *(_height(facts, name) for name in ("amplitude", "contrast") if name in facts.value),
        _spare(facts),
        ambiguous(facts.rival, facts.value, facts.unit_x),
        *([] if facts.sampling is None else too_few(facts.sampling, facts.unit_x)),
        _known(facts),
        _weights_disagree(facts),
        poor_fit(facts.misfit),
        _stated(facts),
        drift_within_scan(facts.wander),
        _outliers(facts),
    ]


def _feature(facts: Facts) -> FitWarning | None:
    if facts.constant:
        return FitWarning(
            "no-feature",
            f"all {facts.count} values are the same; check the observable, then take the scan again",
        )
    if not facts.feature_p > LEVEL:
        return None
    if not facts.searched:
        return FitWarning(
            "no-feature",
            f"{facts.model} follows the data hardly better than a constant (F test, p ="
            f" {facts.feature_p:.2g}); give other start values, or take more shots",
        )
    return FitWarning(
        "no-feature",
        f"nothing stands out of the scatter: {100 * facts.feature_p:.2g} % of random shuffles of the shots"
        f" look as much like the model ({facts.model}); take more shots or scan elsewhere",
    )


def _converged(facts: Facts) -> FitWarning | None:
    if facts.converged:
        return None
    return FitWarning(
        "not-converged",
        "the fit did not settle on a minimum; give start values, fix a parameter or try another model",
    )


def _role_warning(facts: Facts, name: str) -> FitWarning | None:
    role = facts.roles[name]
    if role == "position":
        return _outside(facts, name) or _position(facts, name)
    if role == "frequency":
        return _periods(facts, name) or _frequency(facts, name)
    if (
        role in MOST_SPREAD
        and not facts.spread[name] <= MOST_SPREAD[role]
        and _other_way(facts, name) is None
    ):
        return _factor(facts, name, role)
    return None


def _outside(facts: Facts, name: str) -> FitWarning | None:
    """Return a warning when the position lies outside the scan."""
    value = facts.value[name]
    if facts.low <= value <= facts.high:
        return None
    side, edge = ("above", facts.high) if value > facts.high else ("below", facts.low)
    return FitWarning(
        "center-outside",
        f"the {name}, {figure(value, facts.unit_x)}, lies outside the scan"
        f" ({facts.low:.6g} to {figure(facts.high, facts.unit_x)});"
        f" extend the scan {side} {figure(edge, facts.unit_x)}",
    )


def _position(facts: Facts, name: str) -> FitWarning | None:
    width = next((facts.value[w] for w, role in facts.roles.items() if role == "width"), None)
    limit = (facts.value.get("fwhm", inf) if width is None else width) / 2
    if facts.stderr[name] <= limit:
        return None
    if not isfinite(facts.stderr[name]):
        return FitWarning("poorly-determined", f"the {name} is not determined by this scan; take more shots")
    return FitWarning(
        "poorly-determined",
        f"the {name} is uncertain by {with_unit(facts.stderr[name], facts.unit_x)}, more than half the width"
        f" of the line; take more shots around {with_unit(facts.value[name], facts.unit_x)}",
    )


def _periods(facts: Facts, name: str) -> FitWarning | None:
    window = facts.high - facts.low
    periods = facts.value[name] * window
    if periods - min(facts.stderr[name] * window, FREQUENCY_SPREAD) >= LEAST_PERIODS:
        return None
    if name in facts.bound or not facts.stderr[name] < facts.value[name] / 2:
        return FitWarning(
            "under-one-period",
            "the scan shows no whole period, only what could be a drift; extend it until it shows several,"
            " or fit another model",
        )
    wanted = facts.low + 2.0 / facts.value[name]
    return FitWarning(
        "under-one-period",
        f"the scan covers only {periods:.2g} periods, too few to tell them from a drift; extend it to"
        f" {with_unit(wanted, facts.unit_x)} or beyond",
    )


def _frequency(facts: Facts, name: str) -> FitWarning | None:
    window = facts.high - facts.low
    if facts.stderr[name] * window <= FREQUENCY_SPREAD:
        return None
    return FitWarning(
        "poorly-determined",
        f"the {name}, {per_unit(facts.value[name], facts.unit_x)}, is uncertain by"
        f" {per_unit(facts.stderr[name], facts.unit_x)}, more than a quarter of 1/(length of the scan);"
        " take more shots or a longer scan",
    )


def _factor(facts: Facts, name: str, role: str) -> FitWarning:
    spread = facts.spread[name]
    how_well = f"only known to a factor {exp(spread):.2g}" if spread < 5 else "not determined by this scan"
    advice = {
        "width": "take more shots across the line, or a wider scan",
        "rate": "scan longer, with shots both early and late",
    }[role]
    return FitWarning("poorly-determined", f"the {name} is {how_well}; {advice}, or fix it")


def _height(facts: Facts, name: str) -> FitWarning | None:
    """Return a warning when a height is hardly known from zero though something stands out."""
    value, stderr = facts.value[name], facts.stderr[name]
    if not stderr > MOST_HEIGHT * abs(value) or not isfinite(stderr):
        return None
    return FitWarning(
        "poorly-determined",
        f"the {name}, {value:.3g}, is uncertain by {stderr:.2g}: other numbers make up for it; scan further, fix one"
        " or use a simpler model or background",
    )


def _at_bound(facts: Facts, name: str) -> FitWarning | None:
    role = facts.roles.get(name, "free")
    if role == "frequency" and _periods(facts, name) is not None:
        return None
    other_way = _other_way(facts, name)
    if other_way is not None:
        return FitWarning("at-bound", f"the {name} ran to the edge of what this scan can tell: {other_way}")
    advice = "scan longer" if _is_slow(facts, name) else "scan a range that shows the whole line"
    return FitWarning(
        "at-bound",
        f"the {name} ran to the edge of what this scan can tell ({_in_its_unit(facts, name)}); {advice},"
        " or fix it",
    )


def _in_its_unit(facts: Facts, name: str) -> str:
    """Return a position, width, time, rate or frequency with its unit."""
    per = facts.roles.get(name) == "frequency" or name.endswith("rate")
    return (per_unit if per else with_unit)(facts.value[name], facts.unit_x)


def _is_slow(facts: Facts, name: str) -> bool:
    """Return whether a time is longer than the scan, or a rate too low for it."""
    if facts.roles.get(name) != "rate":
        return False
    window = facts.high - facts.low
    return facts.value[name] * window < 1 if name.endswith("rate") else facts.value[name] > window


def _other_way(facts: Facts, name: str) -> str | None:
    """Return what to say of data that change, but not as the decay of this time or rate would have it."""
    if name not in facts.bound or not _is_slow(facts, name) or not facts.feature_p <= LEVEL:
        return None
    if "slope" in facts.value:
        return None
    if "offset" in facts.value:
        return "the data do not level off; scan longer, or fit without a background"
    rising = "rise instead of fall" if facts.value.get("amplitude", 1.0) > 0 else "fall instead of rise"
    return f"the data {rising}; fit another model or with a background"


def _weights_disagree(facts: Facts) -> FitWarning | None:
    far = {name: distance for name, distance in facts.unlike.items() if distance > MOST_UNLIKE}
    if not far:
        return None
    name = max(far, key=lambda one: far[one])
    return FitWarning(
        "weights-disagree",
        f"with equal weights the {name} comes out {far[name]:.2g} of its stderr away: the curve does not fit where it"
        " is small as it does where it is large; fit with a background or another model, or with weights='equal'",
    )


def _outliers(facts: Facts) -> FitWarning | None:
    if not facts.outliers:
        return None
    return left_out(facts.outliers, "", facts.unit_x)


def left_out(x: Sequence[float], which: str, unit: str) -> FitWarning:
    """Return what is said of outliers at x, `which` naming them if it is not empty."""
    several = "s" if len(x) > 1 else ""
    where = f"{', '.join(f'{one:.6g}' for one in sorted(x))} {unit}".rstrip() + (
        f" ({which})" if which else ""
    )
    return FitWarning(
        "outliers",
        f"{len(x)} shot{several} left out as outlier{several}, at {where}; look at what was recorded there",
        advisory=True,
    )


def _stated(facts: Facts) -> FitWarning | None:
    """Return a warning when uncertainties taken at face value are not what the points scatter by."""
    if facts.stated is None or not facts.stated[1] < LEVEL_STATED:
        return None
    ratio, p = facts.stated
    return FitWarning(
        "stated-stderr",
        f"the points scatter {ratio:.2g} times as much as their stated stderr say (chance does so in {chance(p)} of"
        " scans); do not take these at face value (absolute_stderr=False)"
        + (", or fit another model" if ratio > 1 else ""),
        advisory=ratio < 1,
    )


def _spare(facts: Facts) -> FitWarning | None:
    if facts.spare > 0:
        return None
    return FitWarning(
        "too-few-points",
        f"{facts.count} points and as many free parameters leave nothing to judge the scatter by;"
        " add shots or fix a parameter",
    )


def _known(facts: Facts) -> FitWarning | None:
    """Return a warning when a free number has no finite value or uncertainty for no other reason given."""
    if facts.spare <= 0 or facts.constant:
        return None
    lost = [n for n, s in facts.stderr.items() if not (isfinite(s) or isfinite(facts.spread[n]))]
    lost += [n for n, v in facts.value.items() if v != v]
    if not lost:
        return None
    return FitWarning(
        "poorly-determined",
        f"the data leave {' and '.join(dict.fromkeys(lost))} open; fix one or use a simpler background",
    )
