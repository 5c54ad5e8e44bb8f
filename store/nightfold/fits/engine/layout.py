"""All columns of a fit: the line shape's and the background's, which are fixed, and their derivatives."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from nightfold.fits.engine.arrays import Bools, Floats
from nightfold.fits.engine.frame import Frame
from nightfold.fits.models.shape import UNITY, Background, LineShape, Link, Parameter

BACKGROUND_PARAMETERS: dict[Background, tuple[Parameter, ...]] = {
    "none": (),
    "flat": (Parameter("offset", "level far from the line", "y"),),
    "sloped": (
        Parameter("offset", "level at the center of a resonance, at x = 0 otherwise", "y"),
        Parameter("slope", "change of the background with x", "y/x"),
    ),
}


@dataclass(frozen=True)
class Layout:
    """A line shape with a background and some parameters fixed; P nonlinear coordinates, L columns.

    The columns are those of the shape, then 1 and the slope: ``u - center`` for a resonance, otherwise
    ``u + shift`` (shift is zero unless the offset, which is defined at x = 0, is fixed).
    """

    shape: LineShape
    background: Background
    fixed: frozenset[str]

    @cached_property
    def parameters(self) -> tuple[Parameter, ...]:
        """Reported parameters, the background's last."""
        return (*self.shape.parameters, *BACKGROUND_PARAMETERS[self.background])

    @cached_property
    def names(self) -> tuple[str, ...]:
        """Reported names."""
        return tuple(parameter.name for parameter in self.parameters)

    @cached_property
    def all_names(self) -> tuple[str, ...]:
        """Reported names, then those of the derived numbers: the rows of `report`."""
        return (*self.names, *(number.name for number in self.shape.derived))

    @cached_property
    def links(self) -> tuple[Link, ...]:
        """How each of `all_names` follows from its coordinate."""
        background: list[Link] = ["linear"] * len(BACKGROUND_PARAMETERS[self.background])
        return (*self.shape.links(), *background, *(number.link for number in self.shape.derived))

    @cached_property
    def free_rows(self) -> Bools:
        """Which of `all_names` are fitted parameters: the rows of the covariance."""
        count = len(self.names)
        return np.array([j < count and n not in self.fixed for j, n in enumerate(self.all_names)], dtype=bool)

    @cached_property
    def fixed_rows(self) -> Bools:
        """Which of `all_names` are fixed."""
        return np.array([name in self.fixed for name in self.all_names], dtype=bool)

    @cached_property
    def free_names(self) -> tuple[str, ...]:
        """Reported names that are not fixed."""
        return tuple(name for name in self.names if name not in self.fixed)

    @cached_property
    def column_names(self) -> tuple[str | None, ...]:
        """Reported name that each column carries, None where it carries none by itself."""
        return (*self.shape.linear, *(p.name for p in BACKGROUND_PARAMETERS[self.background]))

    @cached_property
    def free_theta(self) -> Bools:
        """(P,) bool: which nonlinear coordinates are fitted."""
        return np.array([theta.name not in self.fixed for theta in self.shape.theta], dtype=bool)

    @cached_property
    def free_columns(self) -> Bools:
        """(L,) bool: which coefficients are fitted."""
        return np.array([n not in self.fixed and n != UNITY for n in self.column_names], dtype=bool)

    @cached_property
    def all_theta_free(self) -> bool:
        """Whether no nonlinear coordinate is fixed."""
        return bool(self.free_theta.all())

    @cached_property
    def all_columns_free(self) -> bool:
        """Whether no coefficient is fixed."""
        return bool(self.free_columns.all())

    @cached_property
    def free_count(self) -> int:
        """Number of fitted numbers, p."""
        return int(self.free_theta.sum() + self.free_columns.sum())

    @property
    def resonance(self) -> bool:
        """Whether the background's slope counts from the line's center."""
        return self.shape.kind == "resonance"

    def columns(self, u: Floats, theta: Floats, shift: Floats) -> Floats:
        """Return all columns, (M, L, n)."""
        return self._with_background(self.shape.columns(u, theta), u, theta, shift)

    def basis(self, u: Floats, theta: Floats, shift: Floats) -> tuple[Floats, Floats]:
        """Return all columns, (M, L, n), and the derivatives of the shape's, (M, P, Ls, n)."""
        columns, derivatives = self.shape.basis(u, theta)
        return self._with_background(columns, u, theta, shift), derivatives

    def slopes(self, derivatives: Floats, c: Floats) -> Floats:
        """Return the derivative of the model for each nonlinear coordinate, (M, P, n)."""
        count = derivatives.shape[2]
        if count == 1:
            slopes = derivatives[:, :, 0] * c[:, :1, None]
        else:
            slopes = (derivatives * c[:, None, :count, None]).sum(axis=2)
        if self.resonance and self.background == "sloped":
            slopes[:, 0] -= c[:, -1:]
        return slopes

    def gradients(self, u: Floats, theta: Floats, c: Floats) -> Floats:
        """Return the derivative of a numeric shape for each nonlinear coordinate, (M, P, n).

        Like `slopes`, with fewer calls and steps that suit the coefficients.
        """
        rows = [self.shape.gradient(u[min(m, len(u) - 1)], theta[m], c[m]) for m in range(len(theta))]
        return np.stack(rows)

    def _with_background(self, columns: Floats, u: Floats, theta: Floats, shift: Floats) -> Floats:
        if self.background == "none":
            return columns
        count = columns.shape[1]
        full = np.empty((len(columns), len(self.column_names), columns.shape[2]))
        full[:, :count] = columns
        full[:, count] = 1.0
        if self.background == "sloped":
            full[:, count + 1] = u - theta[:, :1] if self.resonance else u + shift
        return full

    def shift(self, frame: Frame) -> Floats:
        """Return the shift of the slope's column, (B, 1)."""
        shift = frame.x0 / frame.xs if "offset" in self.fixed else np.zeros(len(frame.xs))
        return np.asarray(shift[:, None])

    def report(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        """Return q of `all_names`, (M, R), and derivatives for theta and c, (M, R, P + L)."""
        q, dq = self._report_parameters(theta, c, frame)
        if not self.shape.derived:
            return q, dq
        count = len(self.shape.parameters)
        more, slopes = self.shape.derive(q[:, :count])
        return np.concatenate([q, more], axis=1), np.concatenate([dq, slopes @ dq[:, :count]], axis=1)

    def _report_parameters(self, theta: Floats, c: Floats, frame: Frame) -> tuple[Floats, Floats]:
        q, dq = self.shape.report(theta, c, frame)
        if self.background == "none":
            return q, dq
        size, count, rows = len(self.shape.theta), q.shape[1], len(self.parameters)
        q = np.concatenate([q, np.zeros((len(q), rows - count))], axis=1)
        dq = np.concatenate([dq, np.zeros((len(q), rows - count, dq.shape[2]))], axis=1)
        first = len(self.shape.linear)
        q[:, count] = frame.y0 + frame.ys * c[:, first]
        dq[:, count, size + first] = frame.ys
        if self.background == "sloped":
            scale = frame.ys / frame.xs
            q[:, count + 1] = scale * c[:, first + 1]
            dq[:, count + 1, size + first + 1] = scale
            if not self.resonance:
                lever = self.shift(frame)[:, 0] - frame.x0 / frame.xs
                q[:, count] += frame.ys * lever * c[:, first + 1]
                dq[:, count, size + first + 1] = frame.ys * lever
        return q, dq

    def rightful(self, theta: Floats, low: Floats, high: Floats) -> Bools:
        """Return which coordinates are at a bound that is a value in its own right, (M, P)."""
        floors = np.array([one.floor for one in self.shape.theta], dtype=bool)
        ceilings = np.array([one.ceiling for one in self.shape.theta], dtype=bool)
        return np.asarray((floors & (theta <= low)) | (ceilings & (theta >= high)))

    def fixed_theta(self, values: dict[str, float], frame: Frame) -> Floats:
        """Return (B, P): theta of the fixed or given parameters, nan elsewhere."""
        return self.shape.place(values, frame)

    def fixed_coefficients(self, values: dict[str, float], frame: Frame) -> Floats:
        """Return (B, L): coefficients of the fixed columns, zero elsewhere."""
        c = np.zeros((len(frame.xs), len(self.column_names)))
        units = {parameter.name: parameter.unit for parameter in self.parameters}
        for j, name in enumerate(self.column_names):
            if name == UNITY:
                c[:, j] = 1.0 / frame.ys
            if name is None or name not in values:
                continue
            value = values[name]
            if units[name] == "y/x":
                c[:, j] = value * frame.xs / frame.ys
            elif name == "offset" and j >= len(self.shape.linear):
                c[:, j] = (value - frame.y0) / frame.ys
            else:
                c[:, j] = value / frame.ys
        return c
