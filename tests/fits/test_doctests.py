from __future__ import annotations

import doctest

import pytest

from nightfold.fits import estimate, model


@pytest.mark.parametrize("module", [estimate, model], ids=lambda m: m.__name__)
def test_examples_in_docstrings_run(module: object) -> None:
    found = doctest.testmod(module, optionflags=doctest.ELLIPSIS)  # type: ignore[arg-type]
    assert found.attempted > 0
    assert found.failed == 0
