"""The record format: what is read, and that its JSON Schema says the same."""

from __future__ import annotations

import json
import math
import re
from functools import cache
from pathlib import Path
from typing import Any

import jsonschema
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nightfold.errors import RecordError
from nightfold.records import (
    Amendment,
    Derivation,
    ShotRecord,
    clean_name,
    clean_text,
    parse_record,
    record_schema,
    shorten,
)
from nightfold.store import Store

SCHEMA_FILE = Path(__file__).parents[1] / "docs" / "shot-record.schema.json"
WHOLE = {
    "format": 1, "uid": "a", "machine": "heron", "started": "2026-10-05T21:14:03.250+02:00", "sequence": "hold-in-trap",
    "scan": "loss-coarse", "swept": ["coil_current"], "planned_shots": 123, "last": False, "reference": False,
    "parameters": {"coil_current": {"value": 61.25, "unit": "A"}, "hold_time": {"value": 120, "unit": "ms"},
                   "imaging_axis": "x", "repump_on": True, "ramp": [1, 2.5], "gone": None},
    "observables": {"atom_number": {"value": 121000, "stderr": 3100}, "temperature": {"value": 412, "unit": "nK"},
                    "width_x": None, "depth": 3},
    "failed": None, "frames": [{"camera": "side", "role": "atoms", "path": "x.tif"}], "note": "",
    "derivation": {"name": "sum", "version": "2", "settings": {"roi": [0, 1]}},
}  # fmt: skip
STEPS = {
    "name": "s",
    "steps": [{"name": "evaporate", "duration": {"value": 4.2, "unit": "s"}, "settings": {"power": 1}}],
}


@cache
def validator() -> Any:
    schema = record_schema()
    jsonschema.Draft202012Validator.check_schema(schema)
    return jsonschema.Draft202012Validator(schema)


def without(*names: str) -> dict[str, Any]:
    return {name: value for name, value in WHOLE.items() if name not in names}


GOOD: list[dict[str, Any]] = [
    WHOLE,
    {"machine": "m", "started": "2026-10-05T21:14:03Z", "sequence": "s"},
    {**WHOLE, "sequence": STEPS},
    {**WHOLE, "sequence": {"name": "s", "steps": []}},
    {**WHOLE, "uid": None, "scan": None, "planned_shots": None, "derivation": None},
    {**WHOLE, "failed": "no atoms", "derivation": "sum"},
    {"format": 1, "uid": "a", "observables": {"n": 1}, "derivation": "fit"},
    {"uid": "a", "observables": {}},
    {"uid": "a", "note": "odd"},
    {"uid": "a", "frames": [{"camera": "side", "role": "atoms", "path": "x.tif"}], "derivation": "sum"},
    {**WHOLE, "derivation": {"name": "sum", "version": 2.1}},
]

BAD: list[Any] = [
    {"uid": "a", "derivation": "sum"},
    5, [], "x", None, {}, {"uid": "a"}, without("machine"), without("started"), without("sequence"),
    *({**WHOLE, name: value} for name, value in [
        ("format", 2), ("format", "1"), ("uid", 5), ("uid", ""), ("machine", None), ("machine", ""), ("started", 5),
        ("sequence", None), ("sequence", ""), ("sequence", {"name": "s"}), ("sequence", {"steps": []}),
        ("sequence", {**STEPS, "more": 1}), ("sequence", {"name": "s", "steps": [{"duration": 1}]}),
        ("scan", 5), ("scan", ""), ("swept", "a"), ("swept", [1]), ("planned_shots", 0), ("planned_shots", "5"),
        ("last", "true"), ("last", None), ("reference", 0), ("parameters", []), ("parameters", None),
        ("parameters", {"a": {"b": 1}}), ("parameters", {"a": {"value": 1, "unit": 5}}), ("parameters", {"a": ["x"]}),
        ("parameters", {"a": {"value": 1, "units": "A"}}), ("observables", 5), ("observables", {"n": "5"}),
        ("observables", {"n": True}), ("observables", {"n": {"value": 1, "stderr": -1}}),
        ("observables", {"n": {"value": 1, "sigma": 1}}), ("observables", {"n": [1]}), ("failed", True), ("failed", ""),
        ("frames", {}), ("frames", [{"camera": "a", "role": "b"}]), ("note", None), ("derivation", 5),
        ("derivation", {"version": "1"}), ("derivation", {"name": "x", "settings": []}), ("extra", 1),
    ]),
]  # fmt: skip


@pytest.mark.parametrize("record", GOOD, ids=range(len(GOOD)))
def test_good_records(record: dict[str, Any], store: Store) -> None:
    validator().validate(json.loads(json.dumps(record)))
    parsed = parse_record(record)
    assert isinstance(parsed, ShotRecord if "machine" in record else Amendment)
    if isinstance(parsed, ShotRecord):
        assert store.take([record]).refused == []


@pytest.mark.parametrize("record", BAD, ids=range(len(BAD)))
def test_bad_records(record: Any, store: Store) -> None:
    assert not validator().is_valid(json.loads(json.dumps(record))), "the schema lets it pass"
    outcome = store.take([record])
    assert len(outcome.refused) == 1


KEYS = ["value", "unit", "stderr", "name", "steps", "camera", "role", "path", "a"]
JSON = st.recursive(
    st.one_of(st.none(), st.booleans(), st.integers(-9, 9), st.floats(-9, 9), st.sampled_from(["", "x", "A"])),
    lambda inner: st.one_of(
        st.lists(inner, max_size=2),
        st.dictionaries(st.sampled_from(KEYS), inner, max_size=3),
    ),
    max_leaves=5,
)  # fmt: skip


@settings(max_examples=120)
@given(st.sampled_from(sorted(WHOLE)), JSON)
def test_schema_and_program_agree_on_one_field_gone_wrong(name: str, value: Any) -> None:
    record = {**WHOLE, name: value}
    valid = validator().is_valid(record)
    try:
        parse_record(record)
        taken = True
    except RecordError:
        taken = False
    if name in ("parameters", "observables"):  # their entries are looked at one by one, when they are taken
        assert taken or not valid
    elif not (name in ("sequence", "started") and valid):  # steps and times likewise
        assert taken == valid


def test_the_schema_in_the_docs_is_current() -> None:
    assert json.loads(SCHEMA_FILE.read_text("utf-8")) == record_schema()


def test_names_and_texts() -> None:
    assert clean_name("  e\u0301  ") == "é"
    assert clean_text(" e\u0301\n") == " é\n"
    for bad in ("", " ", "a\nb", "a\0", "\ud800", "x" * 201, 5, None):
        with pytest.raises(ValueError, match="a name"):
            clean_name(bad)
    for bad in ("a\0", "\udfff", 5, None):
        with pytest.raises(ValueError, match="text"):
            clean_text(bad)


def test_long_values_are_shortened() -> None:
    assert len(shorten("x" * 500)) == 60
    assert shorten("x") == "'x'"


def test_an_error_carries_what_it_says() -> None:
    with pytest.raises(RecordError) as caught:
        parse_record({**WHOLE, "planned_shots": 0})
    assert (caught.value.field, caught.value.found, caught.value.wanted) == (
        "planned_shots",
        "0",
        "a number of at least 1",
    )
    assert str(caught.value) == "planned_shots: found 0, wanted a number of at least 1"


SHOT = {"machine": "heron", "started": "2026-10-05T21:14:03Z", "sequence": "s"}


@pytest.mark.parametrize(
    ("changes", "wanted"),
    [
        (
            {"sequence": {"name": "s", "steps": [{"name": "a", "colour": 1}]}},
            "one of name, duration, settings",
        ),
        ({"sequence": {"name": "s", "steps": [{"name": "a", "setings": {}}]}}, "is 'settings' meant?"),
        ({"sequence": {"name": "s", "steps": [{"duration": 1}]}}, "this field; a step needs name"),
        ({"sequence": {"name": "s", "steps": [], "colour": 1}}, "one of name, steps"),
        ({"frames": [{"camera": "side"}]}, "this field; a frame needs camera, role and path"),
        ({"derivation": {"name": "fit", "colour": 1}}, "one of name, version, settings"),
        ({"colour": 1}, "one of format, uid"),
        ({"readings": {"room": 20}}, "taken with take --sensors"),
    ],
)
def test_a_part_is_told_its_own_fields(changes: dict[str, Any], wanted: str) -> None:
    with pytest.raises(RecordError, match=re.escape(wanted)):
        parse_record({**SHOT, **changes})


def test_a_version_that_is_a_number_is_taken_as_its_text() -> None:
    for stated, text in ((2, "2"), (2.1, "2.1"), ("2", "2")):
        derivation = parse_record({**SHOT, "derivation": {"name": "fit", "version": stated}}).derivation
        assert isinstance(derivation, Derivation)
        assert derivation.version == text
    for wrong in (True, math.nan, [2]):
        with pytest.raises(RecordError, match=r"derivation\.version: .*wanted text"):
            parse_record({**SHOT, "derivation": {"name": "fit", "version": wrong}})
