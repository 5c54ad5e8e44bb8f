from __future__ import annotations

import subprocess
import sys


def loaded_after(statement: str) -> set[str]:
    code = f"import sys; {statement}; print(' '.join(sys.modules))"
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    return set(out.stdout.split())


def test_fitting_loads_neither_pandas_nor_lmfit() -> None:
    statement = (
        "from nightfold import fit_curve; import numpy as np; x = np.arange(9.0);"
        " fit_curve(x, np.exp(-x), 'exponential').estimates['lifetime'].interval(0.9)"
    )
    heavy = {"pandas", "lmfit", "xarray", "sqlalchemy", "pint", "matplotlib", "rich", "scipy.optimize"}
    assert not heavy & loaded_after(statement)


def test_listing_models_loads_no_scipy() -> None:
    assert "scipy" not in loaded_after("from nightfold.fits.models import list_models; list_models()")
