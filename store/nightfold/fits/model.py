"""Models of one's own: around a plain function, or an lmfit model."""

from __future__ import annotations

import inspect
from collections.abc import Callable, Iterable, Mapping
from typing import Any

import numpy as np

from nightfold.errors import FitError
from nightfold.fits.engine.arrays import Bools, Floats
from nightfold.fits.engine.frame import Origin
from nightfold.fits.engine.numeric import derivative, linear_parameters, suitable_step
from nightfold.fits.models.shape import UNITY, Background, Kind, LineShape, Parameter, Theta, Window

Start = Mapping[str, float] | Callable[[Floats, Floats], Mapping[str, float]]


class Model:
    """A model around a plain function ``f(x, a, b, …)``.

    Parameters
    ----------
    function : callable
        Takes x, an (n,) float array, and the parameters as numbers; returns (n,).
    linear : iterable of str, optional
        Parameters that the function is linear in; they are solved for exactly and need no start. Found by
        trying when left out.
    start : mapping of name to value, or callable, optional
        Where to start the others; a callable gets x and y and returns such a mapping. What `fit_curve` is
        given as `start` comes before it.
    name : str, optional
        Default: the function's own name.

    Raises
    ------
    FitError
        When the function takes no parameters, or `linear` names one it is not linear in.

    Examples
    --------
    >>> import numpy as np
    >>> from nightfold import fit_curve
    >>> x = np.arange(1.0, 9.0)
    >>> model = Model(lambda x, a, b: a * x**b, start={"b": 1.0})
    >>> round(fit_curve(x, 2 * x**1.5 + 0.01 * (-1) ** x, model).estimates["b"].value, 2)
    1.5
    """

    def __init__(
        self,
        function: Callable[..., Any],
        *,
        linear: Iterable[str] | None = None,
        start: Start | None = None,
        name: str | None = None,
    ) -> None:
        self.function = function
        self.name = name or getattr(function, "__name__", "model").replace("<lambda>", "model")
        self.parameters = _parameter_names(function, self.name)
        self.linear = None if linear is None else tuple(linear)
        self.start = start
        for other in self.linear or ():
            if other not in self.parameters:
                raise FitError(
                    f"linear: {self.name} has no parameter {other!r}; there are {', '.join(self.parameters)}"
                )


def _parameter_names(function: Callable[..., Any], name: str) -> tuple[str, ...]:
    arguments = list(inspect.signature(function).parameters.values())
    if any(a.kind in (a.VAR_POSITIONAL, a.VAR_KEYWORD) for a in arguments):
        raise FitError(
            f"{name}: found *args or **kwargs, wanted a function f(x, a, b, …) with named parameters"
        )
    names = tuple(argument.name for argument in arguments[1:])
    if not names:
        raise FitError(f"{name}: found no parameters, wanted a function f(x, a, b, …)")
    return names


OTHER_SCALES = (1e-3, 0.01, 0.1, 0.3, 3.0, 10.0, 100.0, 1e3)
"""A start given may be off by so much, the sign apart: a unit mistaken, an exponent."""


class NumericShape(LineShape):
    """A function known only by its values, in the form the engine fits: numeric derivatives, given start.

    Columns are ``f(theta, e_l) - f(theta, 0)`` for each linear parameter, and ``f(theta, 0)`` itself, with
    its coefficient fixed at one, where that is not zero.
    """

    kind: Kind = "time"
    default_background: Background = "none"
    formula: str = "a function of one's own"
    source: str = "given by the user"
    origin: Origin = "none"
    searchable: bool = False
    numeric: bool = True

    def __init__(
        self,
        name: str,
        names: tuple[str, ...],
        linear: tuple[str, ...],
        evaluate: Callable[[Floats, dict[str, float]], Floats],
        start: dict[str, float],
        bounds: dict[str, tuple[float, float]],
        x: Floats,
    ) -> None:
        self.name = name
        self.parameters = tuple(Parameter(n, "parameter of the function") for n in names)
        self._nonlinear = [n for n in names if n not in linear]
        self.theta = tuple(Theta(n, "free") for n in self._nonlinear)
        self._linear, self.linear = linear, (*linear, UNITY)
        self._evaluate, self._start, self._bounds, self._x = evaluate, start, bounds, x

    def function(self, x: Floats, *args: float) -> Floats:  # type: ignore[override]
        """Return the values at x."""
        values = dict(zip((p.name for p in self.parameters), args, strict=True))
        return self._evaluate(x, values)

    def basis(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        """Return columns and their numeric derivatives, one row of theta after the other."""
        units = np.eye(len(self.linear))[:, : len(self.linear) - 1]
        slopes = []
        for m, row in enumerate(theta):
            at = [self.gradient(u[min(m, len(u) - 1)], row, unit) for unit in units]
            slopes.append(np.stack([*(one - at[-1] for one in at[:-1]), at[-1]], axis=1))
        return self.columns(u, theta), np.stack(slopes)

    def columns(self, u: Floats, theta: Floats) -> Floats:
        """Return the columns alone, one row of theta after the other."""
        with np.errstate(all="ignore"):
            return np.stack([self._columns(u[min(m, len(u) - 1)], row) for m, row in enumerate(theta)])

    def gradient(self, u: Floats, theta: Floats, c: Floats) -> Floats:
        """Return the numeric derivatives of the function with its linear parameters at c, (P, n)."""
        held = dict(zip(self._linear, c.tolist(), strict=False))

        def value(at: Floats) -> Floats:
            return self._evaluate(u, {**held, **dict(zip(self._nonlinear, at, strict=True))})

        with np.errstate(all="ignore"):
            return self._slopes(value, theta).reshape(len(theta), len(u))

    def _slopes(self, function: Callable[[Floats], Floats], theta: Floats) -> Floats:
        slopes = []
        for j, name in enumerate(self._nonlinear):
            low, high = self._bounds.get(name, (-np.inf, np.inf))
            step = suitable_step(function, theta, j, 1e-4 * (abs(theta[j]) or 1.0), low, high)
            slopes.append(derivative(function, theta, j, step))
        return np.array(slopes)

    def _columns(self, x: Floats, theta: Floats) -> Floats:
        values = {c.name: t for c, t in zip(self.theta, theta, strict=True)}
        linear = [name for name in self.linear if name is not None and name != UNITY]
        at_zero = dict.fromkeys(linear, np.float64(0.0)) | values
        rest = self._evaluate(x, at_zero)
        columns = [self._evaluate(x, at_zero | {name: np.float64(1.0)}) - rest for name in linear]
        return np.array([*columns, rest])

    def grid(self, window: Window) -> Floats:
        """Return the start given."""
        del window
        return np.array([self._start[c.name] for c in self.theta]).reshape(1, len(self.theta))

    def more_starts(self, window: Window) -> Floats:
        """Return other scales of the start given: of one coordinate at a time, and of all together."""
        first = self.grid(window)[0]
        size = len(first)
        if not size:
            return np.zeros((0, 0))
        moved = np.vstack([np.eye(size, dtype=bool), np.ones((1, size), dtype=bool)])
        scaled = np.where(moved, first * np.array(OTHER_SCALES)[:, None, None], first).reshape(-1, size)
        return np.asarray(np.clip(np.unique(scaled, axis=0), *self.bounds(window)))

    def bounds(self, window: Window) -> tuple[Floats, Floats]:
        """Return the bounds given."""
        del window
        pairs = [self._bounds.get(c.name, (-np.inf, np.inf)) for c in self.theta]
        array = np.array(pairs, dtype=np.float64).reshape(len(pairs), 2)
        return array[:, 0], array[:, 1]

    def near(self, one: Floats, other: Floats) -> Bools:
        """Return False: every start is followed."""
        return np.zeros(np.broadcast_shapes(one.shape, other.shape)[:-1], dtype=bool)


def adopt(
    model: object, x: Floats, y: Floats, fixed: dict[str, float], start: dict[str, float]
) -> NumericShape:
    """Return a `Model` or an lmfit model in the form the engine fits.

    Raises
    ------
    FitError
        When it is neither, or a parameter has neither a start nor a fixed value.
    """
    good = np.isfinite(x) & np.isfinite(y)
    x, y = x[good], y[good]
    if isinstance(model, Model):
        return _adopt_function(model, x, y, fixed, start)
    if type(model).__module__.startswith("lmfit") or hasattr(model, "make_params"):
        from nightfold.fits.lmfit_model import adopt_lmfit

        return adopt_lmfit(model, x, y, fixed, start)
    raise FitError(f"model: found {model!r}, wanted the name of a model, a Model or an lmfit.Model")


def _adopt_function(
    model: Model, x: Floats, y: Floats, fixed: dict[str, float], start: dict[str, float]
) -> NumericShape:
    given = model.start(x, y) if callable(model.start) else (model.start or {})
    values = {str(k): float(v) for k, v in given.items()} | start | fixed

    def evaluate(x: Floats, at: dict[str, float]) -> Floats:
        found = model.function(x, **{name: at[name] for name in model.parameters})
        return np.broadcast_to(np.asarray(found, dtype=np.float64), x.shape)

    return build_shape(model.name, model.parameters, model.linear, evaluate, values, {}, x, fixed)


def build_shape(
    name: str,
    names: tuple[str, ...],
    linear: tuple[str, ...] | None,
    evaluate: Callable[[Floats, dict[str, float]], Floats],
    values: dict[str, float],
    bounds: dict[str, tuple[float, float]],
    x: Floats,
    fixed: dict[str, float],
) -> NumericShape:
    """Return the shape of a function, its linear parameters found out unless declared."""
    at = np.array([values.get(n, 1.0) for n in names])

    def function(point: Floats) -> Floats:
        return evaluate(x, dict(zip(names, point, strict=True)))

    try:
        with np.errstate(all="ignore"):
            function(at)
    except Exception as problem:
        where = ", ".join(f"{n}={v:g}" for n, v in zip(names, at.tolist(), strict=True))
        raise FitError(f"{name}: the function failed at {where}: {problem}") from problem
    wanted = names if linear is None else linear
    candidates = [j for j, n in enumerate(names) if n in wanted and n not in bounds]
    found = tuple(names[j] for j in linear_parameters(function, at, candidates))
    if linear is not None and set(found) != set(linear):
        wrong = ", ".join(n for n in linear if n not in found)
        raise FitError(
            f"linear: {name} is not linear in {wrong} at its start values; leave it out of linear="
        )
    missing = [n for n in names if n not in found and n not in values]
    if missing:
        raise FitError(f"{name}: no start value for {', '.join(missing)}; give start={{'{missing[0]}': …}}")
    return NumericShape(name, names, found, evaluate, values, bounds, x)
