# ruff: noqa: E501
"""Records that are refused: what is said, and that nothing of them is left."""

from __future__ import annotations

import math
from collections.abc import Mapping
from decimal import Decimal
from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from sqlalchemy import func, select

from nightfold import tables
from nightfold.store import Store


def record(number: int = 0, **changes: Any) -> dict[str, Any]:
    """Return a shot record, `number` minutes into a night."""
    base: dict[str, Any] = {
        "machine": "heron",
        "started": f"2026-10-05T{20 + number // 60:02d}:{number % 60:02d}:00+00:00",
        "sequence": "hold",
        "parameters": {"coil": 1.5, "hold": 20},
    }
    return {**base, **changes}


def count(store: Store) -> dict[str, int]:
    """Return how many rows every table has."""
    with store._session.reading() as connection:
        return {
            name: connection.execute(select(func.count()).select_from(table)).scalar_one()
            for name, table in tables.metadata.tables.items()
            if name != "turn"
        }


def reasons(store: Store, *records: Any) -> list[str]:
    return [item.reason for item in store.take(records).refused]


def frame(**changes: str) -> dict[str, str]:
    return {"camera": "side", "role": "atoms", "path": "frames/1.tif", **changes}


# ---------------------------------------------------------------- refused: the same uid, other settings


def settings_of_thirty(store: Store) -> None:
    store.take([record(n, uid=f"u{n}", parameters={"coil": 1.5, "hold": n, "on": True}) for n in range(30)])


@pytest.mark.parametrize(
    ("changes", "field", "found", "wanted"),
    [
        ({"parameters": {"coil": 1.5, "hold": 77, "on": True}}, "parameters.hold", "77", "3.0"),
        ({"parameters": {"coil": 1.6, "hold": 3, "on": True}}, "parameters.coil", "1.6", "1.5"),
        ({"parameters": {"coil": 1.5, "hold": 3, "on": False}}, "parameters.on", "False", "True"),
        ({"parameters": {"coil": 1.5, "hold": 3}}, "parameters.on", "nothing", "True"),
        ({"parameters": {"coil": 1.5, "hold": 3, "on": True, "new": 4}}, "parameters.new", "4", "no such"),
        ({"started": "2026-10-05T20:03:01+00:00"}, "started", "20:03:01", "20:03:00"),
        ({"sequence": "other"}, "sequence", "heron: other", "machine and sequence"),
        ({"machine": "other"}, "sequence", "other: hold", "machine and sequence"),
        ({"reference": True}, "reference", "True", "as stored"),
        ({"scan": "late"}, "scan", "'late'", "no label"),
    ],
)  # fmt: skip
def test_the_same_uid_with_other_settings(
    store: Store, changes: dict[str, Any], field: str, found: str, wanted: str
) -> None:
    settings_of_thirty(store)
    before = count(store)
    own = record(3, uid="u3", parameters={"coil": 1.5, "hold": 3, "on": True}, observables={"fresh": 1})
    outcome = store.take([record(100), {**own, **changes}, record(101)])
    assert outcome.new == 2
    (refused,) = outcome.refused
    assert (refused.source, refused.line) == ("records", 2)
    assert refused.reason.startswith(f"{field}: found ")
    assert found in refused.reason.split("wanted")[0]
    assert wanted in refused.reason.split("wanted")[1]
    grown = {name: n - before[name] for name, n in count(store).items() if n != before[name]}
    assert grown.keys() <= {"shot", "shot_value", "value_set", "set_value"}, (
        "something of the refused record was left"
    )


def test_the_same_uid_twice_in_one_batch_with_other_settings(store: Store) -> None:
    outcome = store.take([record(0, uid="u"), record(0, uid="u", parameters={"coil": 2.0, "only_here": 1})])
    assert outcome.new == 1
    assert outcome.refused[0].reason.startswith("parameters.coil: found 2.0, wanted 1.5")
    assert "only_here" not in set(store.parameters().name)


def test_an_unknown_uid_is_not_amended(store: Store) -> None:
    (reason,) = reasons(store, {"uid": "nobody", "observables": {"ghost": 1}})
    assert reason.startswith("uid: found 'nobody', wanted the uid of a shot in the store")
    assert store.observables().empty


# ---------------------------------------------------------------- refused: what cannot be read

NAN = math.nan
BAD: list[tuple[str, Any, str, str, str]] = [
    ("not an object", 5, "found 5", "", "one JSON object"),
    ("no machine", {"started": "2026-10-05T20:00:00Z", "sequence": "s"}, "machine", "nothing", "this field"),
    ("unknown field", record(mashine="x"), "mashine", "'x'", "'machine' meant"),
    ("format 2", record(format=2), "format", "2", "format 1"),
    ("uid a number", record(uid=5), "uid", "5", "text"),
    ("uid empty", record(uid=""), "uid", "''", "1 to 200"),
    ("machine NUL", record(machine="a\0b"), "machine", "x00", "printable"),
    ("started a number", record(started=5), "started", "5", "ISO 8601"),
    ("no offset", record(started="2026-10-05T20:00:00"), "started", "2026-10-05T20:00:00", "offset"),
    ("date alone", record(started="2026-10-05"), "started", "2026-10-05", "ISO 8601"),
    ("no such day", record(started="2026-02-30T20:00:00Z"), "started", "2026-02-30", "ISO 8601"),
    ("far past", record(started="1600-01-01T00:00:00Z"), "started", "1600", "1900 and 2200"),
    ("far away", record(started="9999-12-31T23:59:59-23:59"), "started", "9999", "1900 and 2200"),
    ("sequence a number", record(sequence=3), "sequence", "3", "a name"),
    ("sequence nameless", record(sequence={"steps": []}), "sequence.name", "nothing", "this field"),
    ("step nameless", record(sequence={"name": "s", "steps": [{"name": ""}]}), "sequence.steps.0.name", "''", "1 to"),
    ("step twice over", record(sequence={"name": "s", "steps": [{"name": "e", "duration": 1}]},
                               parameters={"e.duration": 2}), "parameters.e.duration", "a setting of a step", "once"),
    ("scan a number", record(scan=4), "scan", "4", "text"),
    ("swept a text", record(swept="coil"), "swept", "'coil'", "a list"),
    ("swept absent", record(swept=["coil", "zz"]), "swept", "'zz'", "parameter of this record"),
    ("swept null", record(parameters={"coil": None}, swept=["coil"]), "swept", "'coil'", "parameter of this record"),
    ("planned nothing", record(planned_shots=0), "planned_shots", "0", "at least 1"),
    ("planned a half", record(planned_shots=2.5), "planned_shots", "2.5", "whole number"),
    ("last a text", record(last="true"), "last", "'true'", "true or false"),
    ("reference 1", record(reference=1), "reference", "1", "true or false"),
    ("parameters a list", record(parameters=[1]), "parameters", "[1]", "an object"),
    ("parameter nameless", record(parameters={"": 1}), "parameters", "''", "1 to 200"),
    ("parameter blank", record(parameters={"  ": 1}), "parameters", "'  '", "1 to 200"),
    ("parameter NUL", record(parameters={"a\0": 1}), "parameters", "x00", "printable"),
    ("parameter of line ends", record(parameters={"a\nb": 1}), "parameters", "nb", "printable"),
    ("parameter long", record(parameters={"x" * 201: 1}), "parameters", "xxx", "1 to 200"),
    ("parameter name a number", record(parameters={5: 1}), "parameters.5", "5", "text"),
    ("name twice", record(parameters={"a": 1, " a ": 2}), "parameters.a", "twice", "once"),
    ("name twice composed", record(parameters={"\u00e9": 1, "e\u0301": 2}), "parameters.\u00e9", "twice", "once"),
    ("text NUL", record(parameters={"a": "x\0"}), "parameters.a", "x00", "without NUL"),
    ("text half surrogate", record(parameters={"a": "\ud800"}), "parameters.a", "ud800", "surrogate"),
    ("nested", record(parameters={"a": {"b": 1}}), "parameters.a", "{'b': 1}", "value and unit"),
    ("list of texts", record(parameters={"a": ["x"]}), "parameters.a", "'x'", "numbers only"),
    ("list of truths", record(parameters={"a": [True]}), "parameters.a", "True", "numbers only"),
    ("list of lists", record(parameters={"a": [[1]]}), "parameters.a", "[1]", "numbers only"),
    ("bytes", record(parameters={"a": b"x"}), "parameters.a", "b'x'", "a number, text"),
    ("complex", record(parameters={"a": 1j}), "parameters.a", "1j", "a number, text"),
    ("duration type", record(parameters={"a": np.timedelta64(5, "s")}), "parameters.a", "timedelta", "a number, text"),
    ("too large", record(parameters={"a": 10**400}), "parameters.a", "1000", "a number, text"),
    ("too large ratio", record(parameters={"a": Fraction(10**400)}), "parameters.a", "Fraction", "a number, text"),
    ("signalling nan", record(parameters={"a": Decimal("sNaN")}), "parameters.a", "sNaN", "a number, text"),
    ("unit unknown", record(parameters={"a": {"value": 1, "unit": "blorps"}}), "parameters.a.unit", "'blorps'", "examples: A"),
    ("unit a number", record(parameters={"a": {"value": 1, "unit": 5}}), "parameters.a.unit", "5", "a unit"),
    ("unit odd", record(parameters={"a": {"value": 1, "unit": "m; import os"}}), "parameters.a.unit", "import", "examples: A"),
    ("unit of a text", record(parameters={"a": {"value": "x", "unit": "A"}}), "parameters.a", "'x'", "beside a number"),
    ("unit of a truth", record(parameters={"a": {"value": True, "unit": "A"}}), "parameters.a", "True", "beside a num"),
    ("observables a list", record(observables=[1]), "observables", "[1]", "an object"),
    ("observable a text", record(observables={"n": "5"}), "observables.n", "'5'", "a number or null"),
    ("observable a truth", record(observables={"n": True}), "observables.n", "True", "a number or null"),
    ("observable a list", record(observables={"n": [1]}), "observables.n", "[1]", "a number or null"),
    ("observable nameless", record(observables={"": 1}), "observables", "''", "1 to 200"),
    ("observable twice", record(observables={"n": 1, "n ": 1}), "observables.n", "twice", "once"),
    ("observable too", record(observables={"coil": 1}), "observables.coil", "an observable", "another name"),
    ("stderr negative", record(observables={"n": {"value": 1, "stderr": -0.5}}), "observables.n.stderr", "-0.5", "least 0"),
    ("stderr minus inf", record(observables={"n": {"value": 1, "stderr": -math.inf}}), "observables.n.stderr", "-inf", "least 0"),
    ("stderr a text", record(observables={"n": {"value": 1, "stderr": "2"}}), "observables.n.stderr", "'2'", "least 0"),
    ("stderr a truth", record(observables={"n": {"value": 1, "stderr": True}}), "observables.n.stderr", "True", "least 0"),
    ("sigma", record(observables={"n": {"value": 1, "sigma": 2}}), "observables.n", "sigma", "stderr"),
    ("observable unit", record(observables={"n": {"value": 1, "unit": "zorks"}}), "observables.n.unit", "'zorks'", "examples: A"),
    ("frame", record(frames=[{"camera": "side"}]), "frames.0.role", "nothing", "this field"),
    ("frame twice", record(frames=[frame(), frame(path="other")]), "frames", "side", "once"),
    ("note a number", record(note=5), "note", "5", "text"),
    ("failed true", record(failed=True), "failed", "True", "text"),
    ("failed empty", record(failed=" "), "failed", "' '", "a reason"),
    ("derivation a number", record(derivation=5), "derivation", "5", "a name"),
    ("derivation nameless", record(derivation={"name": ""}), "derivation.name", "''", "1 to 200"),
    ("derivation object", record(derivation={"name": "x", "settings": {"a": object()}}), "derivation.settings", "object", "JSON"),
    ("derivation text", record(derivation={"name": "x", "settings": {"a": "\ud800"}}), "derivation.settings", "ud800", "JSON"),
    ("amendment empty", {"uid": "x"}, "observables", "nothing", "this field"),
]  # fmt: skip


@pytest.mark.parametrize(
    ("bad", "field", "found", "wanted"), [case[1:] for case in BAD], ids=[case[0] for case in BAD]
)
def test_a_bad_record_says_why_and_leaves_nothing(
    store: Store, bad: Any, field: str, found: str, wanted: str
) -> None:
    if isinstance(bad, Mapping) and "machine" in bad and bad["machine"] == "heron":
        bad = {**bad, "machine": "nobody", "observables": bad.get("observables", {"unheard": 1})}
    outcome = store.take([record(10), bad, record(11)])
    assert outcome.new == 2, "good records of the batch are kept"
    (refused,) = outcome.refused
    assert refused.line == 2
    assert refused.reason.startswith(field)
    before, after = refused.reason.split("wanted", 1)
    assert found in before
    assert wanted in after
    assert store.machines() == ["heron"]
    assert set(store.parameters().name) == {"coil", "hold"}
    assert store.observables().empty
    sizes = count(store)
    assert (sizes["shot"], sizes["sequence"], sizes["derivation"]) == (2, 1, 0)


def test_refused_records_leave_no_unit(store: Store) -> None:
    bad = record(
        0, parameters={"coil": {"value": 1, "unit": "A"}}, observables={"n": {"value": 1, "stderr": -1}}
    )
    outcome = store.take(
        [record(1), bad, record(2, parameters={"coil": {"value": 3, "unit": "V"}, "hold": 20})]
    )
    assert outcome.new == 2
    assert store.parameters().set_index("name").unit["coil"] == "V"


@pytest.mark.parametrize(
    ("first", "second", "message"),
    [
        (5, "five", "'five' (text), wanted a number"),
        ("x", 5, "5.0 (number), wanted a text"),
        (True, 1, "1.0 (number), wanted a truth"),
        (1, True, "True (truth), wanted a number"),
        (True, "yes", "'yes' (text), wanted a truth"),
        ({"value": 1, "unit": "ms"}, {"value": 1, "unit": "A"}, "found 'A', wanted a unit that converts to ms"),
        ({"value": 1, "unit": "Hz"}, {"value": 1, "unit": "rad/s"}, "found 'rad/s', wanted a unit that converts to Hz"),
    ],
)  # fmt: skip
def test_kind_and_unit_are_those_stated_first(store: Store, first: Any, second: Any, message: str) -> None:
    assert store.take([record(0, parameters={"a": first})]).new == 1
    (reason,) = reasons(store, record(1, parameters={"a": second}))
    assert reason.startswith("parameters.a")
    assert message in reason


@pytest.mark.parametrize("text", ["true", "True", "FALSE"])
def test_a_truth_written_as_text(store: Store, text: str) -> None:
    store.take([record(0, parameters={"on": True}), record(1, uid="u", parameters={"on": text})])
    assert store.shot("u").parameters["on"].value is (text.lower() == "true")


def test_an_observable_is_no_parameter_later(store: Store) -> None:
    store.take([record(0, observables={"atoms": 1})])
    assert reasons(store, record(1, parameters={"atoms": 1}))[0].startswith(
        "parameters.atoms: found a parameter"
    )
    assert reasons(store, record(2, observables={"coil": 1}))[0].startswith(
        "observables.coil: found an observable"
    )
