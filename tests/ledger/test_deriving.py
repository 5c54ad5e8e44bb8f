"""Derived quantities of the card in a store: read, versioned, refused as records, and followed when data change."""

from __future__ import annotations

import math
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from nightfold import Store, open_store
from nightfold.errors import CardError, ChoiceNeeded, NotFound, RecordError

CARD = """\
machine = "heron"
main_observable = "polarisation"
[parameters.aom_frequency]
unit = "MHz"
[parameters.hold_time]
unit = "ms"
[observables.atom_number]
unit = "atoms"
[derived.detuning]
expression = "2*aom_frequency - 160 MHz"
unit = "MHz"
range = [-50, 50]
description = "of the imaging light"
[derived.polarisation]
expression = "(atom_number[up] - atom_number[down]) / (atom_number[up] + atom_number[down])"
"""
UseCard = Callable[[str], None]


@pytest.fixture
def use_card(store: Store, tmp_path: Path) -> UseCard:
    def use(text: str) -> None:
        path = tmp_path / "card.toml"
        path.write_text(text, encoding="utf-8")
        store.use_card(path)

    return use


def record(
    second: int, aom: float = 80.5, up: float = 6e4, down: float = 3e4, **fields: Any
) -> dict[str, Any]:
    return {
        "uid": f"shot-{second}",
        "machine": "heron",
        "sequence": "image",
        "started": f"2026-10-05T20:{second // 60:02d}:{second % 60:02d}Z",
        "parameters": {"aom_frequency": aom, "hold_time": 3.0},
        "observables": {
            "atom_number[up]": {"value": up, "stderr": up / 100},
            "atom_number[down]": {"value": down, "stderr": down / 100},
        },
        **fields,
    }


def reason(store: Store, one: dict[str, Any]) -> str:
    intake = store.take([one])
    assert (intake.new, len(intake.refused)) == (0, 1)
    return intake.refused[0].reason


def test_derived_quantities_are_columns_as_any_other(store: Store, use_card: UseCard) -> None:
    use_card(CARD)
    store.take([record(k, 80 + k) for k in range(3)])
    table = store.shots(
        ["detuning", "aom_frequency"], ["polarisation", "polarisation_stderr", "atom_number[up]"]
    )
    assert table["detuning"].tolist() == [0.0, 2.0, 4.0]
    assert table["polarisation"].tolist() == pytest.approx([1 / 3] * 3)
    stderr = 2 * math.hypot(3e4 * 600, 6e4 * 300) / 9e4**2
    assert table["polarisation_stderr"].tolist() == pytest.approx([stderr] * 3)
    assert table.attrs["units"] == {
        "detuning": "MHz", "aom_frequency": "MHz", "polarisation": "", "atom_number[up]": "atoms",
    }  # fmt: skip
    assert store.shots(["detuning"], limit=1)["detuning"].tolist() == [4.0]


def test_they_are_listed_with_their_expressions(store: Store, use_card: UseCard) -> None:
    use_card(CARD)
    store.take([record(0)])
    parameters = store.parameters().set_index("name")["expression"].to_dict()
    assert (parameters["detuning"], parameters["aom_frequency"]) == ("2*aom_frequency - 160 MHz", "")
    observables = store.observables().set_index("name")["expression"].to_dict()
    assert observables["polarisation"].startswith("(atom_number[up] - ")
    derived = store.derived()
    assert derived[["machine", "name", "of", "unit", "version", "in_force"]].to_numpy().tolist() == [
        ["heron", "detuning", "parameter", "MHz", "1", True],
        ["heron", "polarisation", "observable", "", "1", True],
    ]
    assert store.derived("heron").equals(derived)
    with pytest.raises(NotFound, match="machine 'crane'"):
        store.derived("crane")


def test_a_shot_shows_them_marked_as_derived(store: Store, use_card: UseCard) -> None:
    use_card(CARD)
    store.take([record(0, swept=["detuning"]), record(1, parameters={"hold_time": 1}, observables={})])
    shot = store.shot("shot-0")
    assert (shot.parameters["detuning"].value, shot.parameters["detuning"].swept) == (1.0, True)
    assert shot.parameters["detuning"].derived == "2*aom_frequency - 160 MHz"
    assert shot.parameters["aom_frequency"].derived is None
    assert shot.observables["polarisation"].value == pytest.approx(1 / 3)
    assert shot.observables["polarisation"].derived is not None
    bare = store.shot("shot-1")
    assert "detuning" not in bare.parameters
    assert math.isnan(bare.observables["polarisation"].value)


def test_a_missing_input_is_no_value(store: Store, use_card: UseCard) -> None:
    use_card(CARD)
    one_cloud = {"atom_number[up]": {"value": 5e4, "stderr": 500}}
    bare = {"atom_number[up]": 6e4, "atom_number[down]": {"value": 3e4, "stderr": 300}}
    store.take(
        [
            record(0, observables=one_cloud),
            record(1, observables=bare),
            record(2, parameters={"hold_time": 1}),
        ]
    )
    table = store.shots(["detuning"], ["polarisation", "polarisation_stderr"])
    assert np.array_equal(table["detuning"], [1.0, 1.0, math.nan], equal_nan=True)
    assert np.isnan(table["polarisation"]).tolist() == [True, False, False]
    assert np.isnan(table["polarisation_stderr"]).tolist() == [True, True, False]


def test_without_any_shot_that_has_the_inputs_the_columns_are_empty_numbers(
    store: Store, use_card: UseCard
) -> None:
    use_card(CARD)
    store.take([record(0, parameters={}, observables={})])
    table = store.shots(["detuning"], ["polarisation"])
    assert table["detuning"].isna().all()
    assert table["polarisation"].isna().all()


def test_a_value_stated_under_a_derived_name_is_refused(store: Store, use_card: UseCard) -> None:
    use_card(CARD)
    said = reason(store, record(0, parameters={"aom_frequency": 80, "detuning": 0}))
    assert said.startswith(
        "parameters.detuning: found a value, wanted none: the card of heron derives detuning by"
    )
    said = reason(store, record(0, observables={"polarisation": 0.5}))
    assert said.startswith("observables.polarisation: found a value, wanted none: the card of heron derives")
    store.take([record(0)])
    said = reason(store, {"uid": "shot-0", "observables": {"polarisation": 0.5}})
    assert "the card of heron derives polarisation" in said
    with pytest.raises((RecordError, NotFound)):
        store.correct(["shot-0"], {"detuning": 3}, "wrong")
    assert store.shots()["uid"].tolist() == ["shot-0"]


def test_what_is_swept_must_be_made_of_what_the_record_states(store: Store, use_card: UseCard) -> None:
    use_card(CARD)
    said = reason(store, record(0, parameters={"hold_time": 1}, swept=["detuning"]))
    assert (
        said
        == "swept: found 'detuning', wanted aom_frequency in this record: the card derives detuning of it"
    )
    assert "the name of a parameter" in reason(store, record(0, swept=["polarisation"]))


def test_corrections_and_late_readings_are_followed(store: Store, use_card: UseCard) -> None:
    use_card(CARD)
    store.take([record(0)])
    store.correct(["shot-0"], {"aom_frequency": {"value": 81000, "unit": "kHz"}}, "misread")
    store.take([{"uid": "shot-0", "observables": {"atom_number[up]": {"value": 3e4, "stderr": 300}}}])
    table = store.shots(["detuning"], ["polarisation"])
    assert (table["detuning"].tolist(), table["polarisation"].tolist()) == ([2.0], [0.0])


def test_a_changed_expression_is_a_new_version_for_all_shots(store: Store, use_card: UseCard) -> None:
    use_card(CARD)
    store.take([record(0)])
    first = store.derived().set_index("name").loc["detuning", "since"]
    use_card(CARD.replace("160 MHz", "158 MHz"))
    assert store.shots(["detuning"])["detuning"].tolist() == [3.0]
    use_card(CARD.replace('unit = "MHz"\nrange', 'unit = "kHz"\nrange'))
    assert store.shots(["detuning"]).attrs["units"] == {"detuning": "kHz"}
    assert store.shots(["detuning"])["detuning"].tolist() == [1000.0]
    use_card(CARD)
    known = store.derived(versions=True).set_index("name").loc["detuning"]
    assert known["version"].tolist() == ["1", "2", "3"]
    assert known["in_force"].tolist() == [True, False, False]
    assert known["since"].tolist()[0] == first
    assert store.shots(["detuning"])["detuning"].tolist() == [1.0]


def test_a_card_cannot_derive_what_was_recorded(store: Store, use_card: UseCard) -> None:
    store.take([record(0, parameters={"aom_frequency": 80, "detuning": 1}), record(1)])
    with pytest.raises(CardError) as problem:
        use_card(CARD)
    assert str(problem.value) == (
        "card of heron: derived.detuning: found an entry, wanted another name: the store has a parameter of that name"
    )
    assert store.cards() == {}
    assert store.derived().empty
    store.take([record(2, observables={"polarisation": 1})])
    with pytest.raises(CardError, match=r"derived.polarisation: .*the store has an observable of that name"):
        use_card(CARD.replace("derived.detuning", "derived.offset"))


def test_a_quantity_keeps_its_kind(store: Store, use_card: UseCard) -> None:
    use_card(CARD)
    with pytest.raises(CardError, match=r"derived.detuning.expression: found the other kind of quantity"):
        use_card(CARD.replace("2*aom_frequency - 160 MHz", "aom_frequency * atom_number / atom_number"))


def test_a_quantity_that_the_card_has_no_longer_is_gone_and_its_name_free(
    store: Store, use_card: UseCard
) -> None:
    use_card(CARD)
    store.take([record(0)])
    without = CARD.split("[derived.detuning]")[0].replace("polarisation", "atom_number")
    use_card(without)
    with pytest.raises(NotFound, match="'detuning'"):
        store.shots(["detuning"])
    assert store.derived().empty
    assert store.derived(versions=True)["in_force"].tolist() == [False, False]
    store.take([record(1, parameters={"aom_frequency": 80, "detuning": 7})])
    with pytest.raises(CardError, match="the store has a parameter of that name"):
        use_card(CARD)


def test_a_parameter_that_scans_go_along_cannot_leave_the_card(store: Store, use_card: UseCard) -> None:
    use_card(CARD)
    store.take([record(k, 80 + k, swept=["detuning"], scan="line") for k in range(5)])
    with pytest.raises(
        CardError,
        match=r"derived.detuning: found nothing, wanted an entry: the store has scans along it; put it back",
    ):
        use_card(CARD.replace("detuning", "offset"))
    assert store.scan("line").axes[0].values == (0, 2, 4, 6, 8)


def test_machines_that_derive_a_name_otherwise_must_be_named(store: Store, use_card: UseCard) -> None:
    use_card(CARD)
    use_card(CARD.replace("heron", "crane").replace("160", "200"))
    store.take([record(0), record(1, machine="crane")])
    with pytest.raises(ChoiceNeeded, match="the machines do not derive it alike; name the machine"):
        store.shots(["detuning"])
    assert store.shots(["detuning"], machine="crane")["detuning"].tolist() == [-39.0]
    assert store.shots([], ["polarisation"])["polarisation"].tolist() == pytest.approx([1 / 3] * 2)
    use_card(
        CARD.replace("heron", "egret").split("[derived.detuning]")[0].replace("polarisation", "atom_number")
    )
    store.take([record(2, machine="egret", parameters={"detuning": {"value": 1, "unit": "MHz"}})])
    with pytest.raises(ChoiceNeeded, match="name the machine"):
        store.shots(["detuning"])


def test_another_writer_sees_the_card(store_path: Path, tmp_path: Path) -> None:
    path = tmp_path / "card.toml"
    path.write_text(CARD, encoding="utf-8")
    with open_store(store_path) as one, open_store(store_path) as other:
        other.take([record(0)])
        one.use_card(path)
        assert "derives detuning" in reason(other, record(1, parameters={"aom_frequency": 80, "detuning": 1}))
        assert other.shots(["detuning"])["detuning"].tolist() == [1.0]


def test_a_bad_expression_writes_nothing_and_names_the_line(
    store: Store, use_card: UseCard, tmp_path: Path
) -> None:
    with pytest.raises(CardError) as problem:
        use_card(CARD.replace("- 160 MHz", "- hold_time"))
    assert str(problem.value) == (
        f"{tmp_path / 'card.toml'}:10: derived.detuning.expression: found 2 * aom_frequency (MHz) - hold_time (ms), "
        "wanted units of one kind (ms does not convert to MHz)"
    )
    assert store.machines() == []


def test_opening_a_store_checks_no_expression(store_path: Path, store: Store, use_card: UseCard) -> None:
    use_card(CARD)
    store.take([record(0)])
    program = (
        f"import sys, nightfold\nwith nightfold.open_store({str(store_path)!r}) as store:\n"
        f" print(store.take([{record(1)!r}]).new)\n"
        "print([name for name in ('asteval', 'nightfold.formulas.formula') if name in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True)
    assert done.stdout == "1\n[]\n"
