from __future__ import annotations

import hashlib
from datetime import time
from pathlib import Path
from unicodedata import normalize

import pytest

from nightfold.card import MachineCard, NamedQuantity, parse_card, read_card, starter_card, without_cloud
from nightfold.errors import CardError

FULL = """\
machine = "heron"
species = ["39K", "87Rb"]
zone = "Europe/Vienna"
night_boundary = "11:30"
rejoin_within = "36 h"
naive_times = true
main_observable = "atom_number"

[parameters.coil_current]
unit = "A"
range = [0, 120]
description = "current of the Feshbach coils"

[parameters.imaging_axis]
kind = "text"

[parameters.anything]

[observables.atom_number]
unit = "atoms"
range = [0, inf]

[observables."optical depth"]
unit = "1"
"""


def test_every_key_arrives() -> None:
    card = parse_card(FULL)
    assert card.machine == "heron"
    assert card.species == ("39K", "87Rb")
    assert (card.zone, card.night_boundary) == ("Europe/Vienna", time(11, 30))
    assert card.rejoin_within_s == 36 * 3600
    assert card.naive_times is True
    assert card.main_observable == "atom_number"
    coil = card.parameters["coil_current"]
    assert coil == NamedQuantity("coil_current", "A", 0.0, 120.0, "current of the Feshbach coils", "number")
    assert card.parameters["imaging_axis"].kind == "text"
    assert card.parameters["anything"] == NamedQuantity("anything")
    assert card.observables["atom_number"].high == float("inf")
    assert card.observables["optical depth"].unit == ""
    assert card.toml == FULL
    assert card.digest == hashlib.sha256(FULL.encode()).hexdigest()


def test_a_machine_is_enough() -> None:
    assert parse_card('machine = "heron"\n') == MachineCard("heron", toml='machine = "heron"\n')


def test_clouds_share_the_entry_of_their_observable() -> None:
    card = parse_card(FULL + '\n[observables."atom_number[down]"]\nunit = "atoms"\n')
    assert card.observable("atom_number[up]") is card.observables["atom_number"]
    assert card.observable("atom_number[down]") is card.observables["atom_number[down]"]
    assert card.observable("atom_number") is card.observables["atom_number"]
    assert card.observable("temperature[up]") is None
    assert [without_cloud(name) for name in ("a[b]", "a", "[b]", "a[b")] == ["a", "a", "[b]", "a[b"]


def test_plausible_range() -> None:
    coil = parse_card(FULL).parameters["coil_current"]
    assert [coil.plausible(value) for value in (0.0, 120.0, 120.1, float("nan"))] == [
        True,
        True,
        False,
        False,
    ]
    assert NamedQuantity("x").plausible(1e300)


@pytest.mark.parametrize(
    ("text", "seconds"),
    [('"24 h"', 86400.0), ("3600", 3600.0), ("0.5", 0.5), ('"90 min"', 5400.0), ("0", 0.0)],
)
def test_rejoin_within(text: str, seconds: float) -> None:
    assert parse_card(f'machine = "a"\nrejoin_within = {text}').rejoin_within_s == seconds


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "heron.toml: machine: found nothing, wanted the name of the machine"),
        ("machine = 3", "heron.toml:1: machine: found 3, wanted a name in quotes"),
        ('machine = "a"\n\nspecis = []', "heron.toml:3: specis: found a key that is not known"),
        ('machine = "a"\nspecis = []', "is 'species' meant?"),
        ('machine = "a"\nspecies = ["K39"]', "heron.toml:2: species: found 'K39', wanted a list of isotopes"),
        ('machine = "a"\nspecies = "39K"', "heron.toml:2: species: found '39K', wanted a list of isotopes"),
        (
            'machine = "a"\nzone = "Europe/Wienna"',
            "heron.toml:2: zone: found 'Europe/Wienna', wanted an IANA time",
        ),
        ('machine = "a"\nzone = "Europe/Wienna"', "Europe/Vienna"),
        ('machine = "a"\nzone = "../etc"', "zone: found '../etc'"),
        ('machine = "a"\nnight_boundary = "25:00"', "found '25:00', wanted a time of day, such as \"12:00\""),
        ('machine = "a"\nnight_boundary = 12', "found 12, wanted a time of day"),
        ('machine = "a"\nrejoin_within = "24 kg"', "found '24 kg', wanted a time, such as \"24 h\""),
        ('machine = "a"\nrejoin_within = -1', "found -1, wanted a time"),
        ('machine = "a"\nrejoin_within = nan', "found nan, wanted a time"),
        ('machine = "a"\nnaive_times = "yes"', "naive_times: found 'yes', wanted true or false"),
        ('machine = "a"\nparameters = 3', "parameters: found 3, wanted a table of names"),
        (
            'machine = "a"\n[parameters]\nx = 3',
            "heron.toml:3: parameters.x: found 3, wanted a table: [parameters.x]",
        ),
        (
            'machine = "a"\n# [parameters.x]\n[parameters."coil 1"]\nunit = "Amp re"',
            "heron.toml:4: parameters.coil 1.unit: found 'Amp re', wanted a unit that is known",
        ),
        (
            'machine = "a"\n[parameters.x]\nunit = "A"\nrange = [3, 2]',
            "heron.toml:4: parameters.x.range: found [3, 2], wanted [lowest, highest]",
        ),
        (
            'machine = "a"\n[parameters.x]\nrange = [1]',
            "parameters.x.range: found [1], wanted [lowest, highest]",
        ),
        ('machine = "a"\n[parameters.x]\nrange = [0, true]', "found [0, True], wanted [lowest, highest]"),
        ('machine = "a"\n[parameters.x]\nrange = [0, nan]', "found [0, nan], wanted [lowest, highest]"),
        (
            'machine = "a"\n[parameters.x]\nkind = "bool"',
            'found \'bool\', wanted "number", "text" or "truth"',
        ),
        (
            'machine = "a"\n[parameters.x]\nkind = "text"\nunit = "A"',
            "heron.toml:4: parameters.x.unit: found a unit",
        ),
        (
            'machine = "a"\n[observables.x]\nkind = "text"',
            "observables.x.kind: found a key that is not known",
        ),
        (
            'machine = "a"\n[parameters.x]\n[observables.x]',
            "observables.x: found a name that is also a parameter",
        ),
        (
            'machine = "a"\n[parameters.x]\ndescription = 3',
            "parameters.x.description: found 3, wanted a text",
        ),
        (
            'machine = "a"\nmain_observable = "atoms"\n[observables.atom_number]',
            ":2: main_observable: found 'atoms', wanted an observable of this card, such as atom_number",
        ),
        ('machine = "a"\nmain_observable = "atoms"', "wanted an observable of this card; it has none yet"),
        ('machine = "a"\n[parameters.""]', "wanted a name of 1 to 200 printable characters"),
        ('machine = "a"\nmachine = "b"', "heron.toml: this is no TOML"),
    ],
)
def test_faults_name_file_line_key_found_and_wanted(text: str, message: str) -> None:
    with pytest.raises(CardError) as problem:
        parse_card(text, source="heron.toml")
    assert message in str(problem.value)


def test_names_are_brought_into_one_form() -> None:
    card = parse_card('machine = "a"\n[parameters."cafe\u0301"]\nunit = "A"')
    assert list(card.parameters) == ["caf\u00e9"]
    with pytest.raises(CardError, match="the name a second time"):
        parse_card('machine = "a"\n[parameters."cafe\u0301"]\n[parameters."caf\u00e9"]')
    with pytest.raises(CardError, match="also a parameter"):
        parse_card('machine = "a"\n[parameters."cafe\u0301"]\n[observables."caf\u00e9"]')


def test_sensors_are_named_with_unit_range_and_description() -> None:
    card = parse_card(
        'machine = "a"\n[sensors.room_temperature]\nunit = "degC"\nrange = [19, 23]\ndescription = "beside"'
    )
    assert card.sensors == {
        "room_temperature": NamedQuantity("room_temperature", "degC", 19.0, 23.0, "beside", "number")
    }
    for kind, other in (("parameters", "a parameter"), ("observables", "an observable")):
        with pytest.raises(CardError, match=f"card:4: sensors.x: found a name that is also {other}"):
            parse_card(f'machine = "a"\n[{kind}.x]\nunit = "A"\n[sensors.x]')


def test_a_file_with_byte_order_mark_and_windows_line_ends(tmp_path: Path) -> None:
    path = tmp_path / "heron.toml"
    path.write_bytes(b"\xef\xbb\xbf" + FULL.replace("\n", "\r\n").encode())
    card = read_card(path)
    assert card.machine == "heron"
    assert card.parameters == parse_card(FULL).parameters


def test_files_that_cannot_be_read(tmp_path: Path) -> None:
    with pytest.raises(CardError, match=r"none\.toml: the card cannot be read \(No such file or directory\)"):
        read_card(tmp_path / "none.toml")
    with pytest.raises(CardError, match="the card cannot be read"):
        read_card(tmp_path)
    latin = tmp_path / "latin.toml"
    latin.write_bytes(b'machine = "a"\nzone = "caf\xe9"\n')
    with pytest.raises(CardError, match=r"latin\.toml:2: found byte 0xe9, wanted UTF-8 text"):
        read_card(latin)


@pytest.mark.parametrize("machine", ["heron", 'he"ron \\ two', "Rei\u0301her 🪶"])
def test_a_starter_card_is_a_card(machine: str) -> None:
    card = parse_card(starter_card(machine, "Europe/Vienna"))
    assert (card.machine, card.zone, card.parameters) == (normalize("NFC", machine), "Europe/Vienna", {})


def test_the_examples_of_a_starter_card_are_right() -> None:
    lines = starter_card("heron").splitlines()
    opened = [line.removeprefix("# ") if "=" in line or line.startswith("# [") else line for line in lines]
    card = parse_card("\n".join(opened))
    assert card.main_observable == "atom_number"
    assert card.parameters["coil_current"].high == 120


def test_the_example_in_the_docs_is_a_card_and_its_tables_name_every_key() -> None:
    page = (Path(__file__).parents[1] / "docs" / "machine-card.md").read_text(encoding="utf-8")
    card = parse_card(page.split("```toml\n")[1].split("```")[0])
    assert (card.machine, card.zone, card.main_observable) == ("heron", "Europe/Vienna", "atom_number")
    for title, table in (
        ("the machine", ""),
        ("a parameter", "[parameters.x]"),
        ("an observable", "[observables.x]"),
        ("a sensor", "[sensors.x]"),
        ("a derived quantity", "[derived.x]"),
    ):
        section = page.split(f"## Keys of {title}")[1].split("\n## ")[0]
        documented = [line.split("`")[1] for line in section.splitlines() if line.startswith("| `")]
        with pytest.raises(CardError) as problem:
            parse_card(f'machine = "a"\n{table}\nunheard = 1\n')
        known = str(problem.value).split("wanted one of ")[1].split(", ")
        groups = ("parameters", "observables", "sensors", "derived")
        assert documented == [key for key in known if key not in groups]
