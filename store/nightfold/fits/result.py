"""What a fit returns."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike

from nightfold.fits.engine.warning import FitWarning
from nightfold.fits.estimate import Estimate

if TYPE_CHECKING:
    import pandas as pd

    from nightfold.fits.engine.arrays import Floats, Ints
    from nightfold.fits.request import Request

__all__ = ["Estimate", "FitResult", "FitWarning"]


@dataclass(frozen=True, repr=False)
class FitResult:
    """A model fitted to points.

    Attributes
    ----------
    model, background : str
    estimates : dict of str to Estimate
        The model's parameters, then the background's; fixed ones are there with stderr 0.
    derived : dict of str to Estimate
        Numbers that follow from them, with intervals of their own; which there are depends on the model.
    warnings : tuple of FitWarning
    outliers : tuple of int
        Indices into the points handed in that the robust step left out.
    n : int
        Number of points used.
    dof : int
        Points less free parameters.
    residual_stderr : float
        Scatter of a point about the curve, ``sqrt(SSE / dof)``, unit of y; with weights that of a point of
        mean weight; nan without degrees of freedom.
    x, y : (n,) float arrays
        The points used, in the order handed in.
    used : (n,) int array
        Their indices among the points handed in.
    covariance_matrix : (F, F) float array
        Of the free parameters, named in `free_names`.
    deviation : (n,) float array
        Standard deviation of each point about the curve, unit of y, by the variance laws as they are weighted;
        nan where none was learnt.
    outlier_x, outlier_y : (m,) float arrays
        The outliers.
    shared_stderr : dict of str to float
        Part of the stderr of each estimate and derived number that is due to errors that points share, such as those
        of reference shots; nan where these are not all known, empty where none were said to be shared.
    settings : dict
        ``weights``, ``absolute_stderr``, ``robust``, ``fixed``, ``start``: what it takes to fit again.
    """

    request: Request
    estimates: dict[str, Estimate]
    derived: dict[str, Estimate]
    warnings: tuple[FitWarning, ...]
    outliers: tuple[int, ...]
    residual_stderr: float
    x: Floats
    y: Floats
    used: Ints
    covariance_matrix: Floats
    deviation: Floats
    outlier_x: Floats
    outlier_y: Floats
    shared_stderr: dict[str, float] = field(default_factory=dict)

    @property
    def model(self) -> str:
        """Name of the model."""
        return self.request.model

    @property
    def background(self) -> str:
        """Style of the background: none, flat or sloped."""
        return self.request.layout.background

    @property
    def settings(self) -> dict[str, Any]:
        """What it takes to fit again."""
        return self.request.settings

    @property
    def free_names(self) -> tuple[str, ...]:
        """Names of the fitted parameters, in the order of the covariance."""
        return self.request.layout.free_names

    @property
    def n(self) -> int:
        """Number of points used."""
        return len(self.x)

    @property
    def dof(self) -> int:
        """Points less free parameters."""
        return self.n - self.request.layout.free_count

    @property
    def trusted(self) -> bool:
        """Whether no warning but advisory ones was given."""
        return all(warning.advisory for warning in self.warnings)

    @property
    def residuals(self) -> Floats:
        """Points less curve, (n,), unit of y."""
        return np.asarray(self.y - self.predict(self.x))

    @property
    def covariance(self) -> pd.DataFrame:
        """Covariance of the fitted parameters, labelled by name; fixed ones are left out."""
        import pandas as pd

        names = list(self.free_names)
        return pd.DataFrame(self.covariance_matrix, index=names, columns=names)

    def predict(self, x: ArrayLike) -> Floats:
        """Return the fitted curve at x, of the shape of x."""
        from nightfold.fits.curve_function import evaluate

        return evaluate(
            self.request.layout,
            np.asarray(x, dtype=np.float64),
            {n: e.value for n, e in (self.estimates | self.derived).items()},
        )

    def band(self, x: ArrayLike, level: float = 0.6827) -> tuple[Floats, Floats]:
        """Return the ends of the band in which the curve lies at each x with that probability, of the shape of x.

        From the joint covariance, to first order; nan where the data do not tell.

        Raises
        ------
        FitError
            When the level is not between 0 and 1.
        """
        from nightfold.fits.band import curve_band

        return curve_band(self, np.asarray(x, dtype=np.float64), level)

    def to_lmfit(self) -> tuple[Any, Any]:
        """Return an `lmfit.Model` of this curve and `lmfit.Parameters` at these estimates.

        Fixed parameters have ``vary=False``; ``model.fit(y, parameters, x=x)`` goes on by hand.
        """
        from nightfold.fits.curve_function import to_lmfit

        return to_lmfit(self)

    def __repr__(self) -> str:
        numbers = ", ".join(
            f"{n}={e.value:.6g}±{e.stderr:.2g} {e.unit}".rstrip() for n, e in self.estimates.items()
        )
        doubt = "" if self.trusted else f"; not trusted: {', '.join(w.code for w in self.warnings)}"
        return f"<FitResult {self.model}, {self.n} points: {numbers}{doubt}>"
