"""Canonical values: equal if and only if what was stated is equal."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nightfold.errors import RecordError
from nightfold.settings import (
    digest_content,
    digest_of_sum,
    digest_text,
    hash_setting,
    reading_value,
    setting_value,
)

NUMBERS = st.one_of(
    st.integers(-5, 5), st.floats(), st.sampled_from([2**53, 2**53 + 1, 2**53 + 2, 10**17, 1e17, 10**25, -0.0]),
    st.integers(), st.integers(0, 5).map(np.int64), st.floats(width=32).map(np.float32),
).filter(lambda number: not (isinstance(number, int) and abs(number) > 10**300))  # fmt: skip
VALUES = st.one_of(NUMBERS, st.booleans(), st.sampled_from(["1", "1.0", "true", "nan", "", "é", "e\u0301"]))


def token(raw: Any) -> str:
    settled = setting_value(raw, "parameters.a")
    assert settled is not None
    return settled[0].token


def same(one: Any, other: Any) -> bool:
    """Return whether two values are one and the same setting, said without the code under test."""
    if isinstance(one, str) or isinstance(other, str):
        return (
            isinstance(one, str)
            and isinstance(other, str)
            and one.replace("e\u0301", "é") == other.replace("e\u0301", "é")
        )
    if isinstance(one, bool) != isinstance(other, bool):
        return False
    one, other = (float(item) if isinstance(item, np.floating) else item for item in (one, other))
    return bool(one == other) or (one != one and other != other)


@settings(max_examples=400)
@given(VALUES, VALUES)
def test_tokens_are_equal_if_and_only_if_the_values_are(one: Any, other: Any) -> None:
    assert (token(one) == token(other)) == same(one, other)


@settings(max_examples=200)
@given(VALUES)
def test_values_come_back(raw: Any) -> None:
    settled = setting_value({"value": raw}, "parameters.a")
    assert settled is not None
    assert same(settled[0].plain, raw)
    assert settled[0].num is None or type(settled[0].num) is float
    assert settled[0].exact is None or type(settled[0].exact) is str


@settings(max_examples=100)
@given(
    st.dictionaries(st.sampled_from("abcde"), VALUES),
    st.dictionaries(st.sampled_from("abcde"), VALUES),
    st.randoms(),
)
def test_digests_are_equal_if_and_only_if_all_settings_are(
    one: dict[str, Any], other: dict[str, Any], order: Any
) -> None:
    def digest(stated: dict[str, Any]) -> bytes:
        names = list(stated)
        order.shuffle(names)
        return digest_of_sum(sum(hash_setting(name, token(stated[name])) for name in names))

    equal = one.keys() == other.keys() and all(same(one[name], other[name]) for name in one)
    assert (digest(one) == digest(other)) == equal


@pytest.mark.parametrize("raw", [None, {"value": None}, {"value": None, "unit": "A"}])
def test_null_is_nothing(raw: Any) -> None:
    assert setting_value(raw, "parameters.a") is None


@pytest.mark.parametrize(
    ("raw", "wanted"),
    [
        (5, (5.0, None, None)),
        (-0.0, (0.0, None, None)),
        (None, (None, None, "null")),
        ({"value": None, "unit": "A"}, (None, None, "null")),
        (math.nan, (None, None, "nan")),
        (-math.inf, (None, None, "-inf")),
        ({"value": 1.0, "stderr": 0.5}, (1.0, 0.5, None)),
        ({"value": 1, "stderr": 0}, (1.0, 0.0, None)),
        ({"value": 1, "stderr": math.nan}, (1.0, None, None)),
        ({"value": 1.0, "stderr": math.inf}, (1.0, math.inf, None)),
        ({"value": math.nan, "stderr": 2.0}, (None, 2.0, "nan")),
        (np.float32(0.5), (0.5, None, None)),
    ],
)
def test_readings(raw: Any, wanted: tuple[Any, ...]) -> None:
    assert tuple(reading_value(raw, "observables.n")[0]) == wanted


def test_what_is_wrong_is_named() -> None:
    with pytest.raises(
        RecordError, match=r"observables\.n\.stderr: found -1\.0, wanted a standard uncertainty"
    ) as caught:
        reading_value({"value": 1.0, "stderr": -1.0}, "observables.n")
    assert (caught.value.field, caught.value.found) == ("observables.n.stderr", "-1.0")


def test_digests_stay_the_same_for_ever() -> None:
    """Uids derived and sets are made of these: a change would double every shot taken again."""
    assert digest_text("heron", "1", "hold").hex() == "2c549194d9318cb725d0688161485c5f"
    assert (
        digest_of_sum(hash_setting("coil", "u:1.5") + hash_setting("on", "r:1.0")).hex()
        == "7049ee7bb952d7c239e77d8857356e98"
    )
    assert digest_content([1, "x"]) == digest_content((1, "x"))
