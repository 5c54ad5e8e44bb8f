"""One invented, messy month of a machine, as a list of things done to a store and as the truth they must leave behind.

The truth is kept in plain dicts, by rules written down here and nowhere else; nothing of nightfold is used for it.
"""

from __future__ import annotations

import csv
import json
import math
import random
from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

from nightfold import Store

VIENNA = ZoneInfo("Europe/Vienna")
Reading = tuple[float, float | None, str | None]
"""Value, stderr, derivation."""

CARD = """\
machine = "egret"
zone = "Europe/Vienna"
species = ["39K"]
rejoin_within = "{rejoin}"
naive_times = {naive}
main_observable = "atom_number"

[parameters.coil_current]
unit = "A"
range = [0, 120]

[parameters.hold_time]
unit = "ms"

[parameters.aom_frequency]
unit = "MHz"

[observables.atom_number]
unit = "atoms"

[observables.temperature]
unit = "nK"

[derived.detuning]
expression = "2*aom_frequency - {offset} MHz"
unit = "MHz"

[derived.polarisation]
expression = "(atom_number[up] - atom_number[down]) / (atom_number[up] + atom_number[down])"
{more}
"""

AT_REST = {"coil_current": 60.0, "hold_time": 100.0, "aom_frequency": 81.5, "axis": "x", "repump": True}


@dataclass
class TrueShot:
    """What is true of one shot: settings in the card's units, all its readings one after the other."""

    uid: str
    started: datetime
    sequence: str
    parameters: dict[str, Any]
    readings: dict[str, list[Reading]] = field(default_factory=dict)
    recorded: dict[str, Any] = field(default_factory=dict)
    """Settings as first recorded, where a person corrected them."""
    scan: str | None = None
    aside: str | None = None
    note: str | None = None
    reference: bool = False


@dataclass
class Month:
    """The month: shots by uid, what the store must say of scans, refusals, nights, sensors and edits."""

    folder: Path
    shots: dict[str, TrueShot] = field(default_factory=dict)
    labelled: dict[str, list[str]] = field(default_factory=dict)
    found: list[set[str]] = field(default_factory=list)
    nights: dict[str, int] = field(default_factory=dict)
    refused: int = 0
    room: dict[datetime, float] = field(default_factory=dict)
    base: dict[str, Any] = field(default_factory=lambda: dict(AT_REST))
    rng: random.Random = field(default_factory=lambda: random.Random(39))

    # ------------------------------------------------------------------ making shots

    def shot(self, when: datetime, sequence: str, night: str, **parameters: Any) -> TrueShot:
        """Add a shot to the truth."""
        uid = f"egret-{len(self.shots):04d}"
        shot = TrueShot(uid, when.astimezone(UTC), sequence, self.base | parameters)
        self.shots[uid] = shot
        self.nights[night] = self.nights.get(night, 0) + 1
        return shot

    def read(self, shot: TrueShot, by: str | None = None, **readings: tuple[float, float | None]) -> None:
        """Add readings, which take the place of earlier ones."""
        for name, (value, stderr) in readings.items():
            shot.readings.setdefault(name.replace("__", "["), []).append((value, stderr, by))

    def sweep(self, start: datetime, night: str, label: str | None, key: str | None, values: list[float],
              cycle: float = 15.0, sequence: str = "loss") -> list[TrueShot]:  # fmt: skip
        """Add a sweep of the coil current, read at once."""
        made = []
        for k, current in enumerate(values):
            shot = self.shot(start + timedelta(seconds=cycle * k), sequence, night, coil_current=current)
            shot.scan = label
            number = 1e5 * (1 - 0.6 / (1 + ((current - 61.3) / 0.2) ** 2)) * self.rng.gauss(1, 0.02)
            shot.readings["atom_number"] = [(number, 900.0, None)]
            made.append(shot)
        if key is not None:
            self.labelled.setdefault(key, []).extend(shot.uid for shot in made)
        elif label is None:
            self.found.append({shot.uid for shot in made})
        return made

    # ------------------------------------------------------------------ as records

    def record(self, shot: TrueShot, *, readings: bool = True, **more: Any) -> dict[str, Any]:
        """Return a shot as its control program might write it: units spelled this way and that."""
        parameters = dict(shot.parameters | shot.recorded)
        current, hold = parameters["coil_current"], parameters["hold_time"]
        style = self.rng.randrange(3)
        if style == 0:
            parameters["coil_current"] = {"value": current * 1000, "unit": "mA"}
            parameters["hold_time"] = {"value": hold / 1000, "unit": "s"}
        elif style == 1:
            parameters["coil_current"] = {"value": current, "unit": "A"}
        record: dict[str, Any] = {
            "format": 1, "uid": shot.uid, "machine": "egret", "sequence": shot.sequence, "parameters": parameters,
            "started": shot.started.astimezone(self.rng.choice([VIENNA, UTC])).isoformat(), "reference": shot.reference,
        }  # fmt: skip
        if shot.scan is not None:
            record |= {"scan": shot.scan, "swept": ["coil_current"]}
        if readings:
            record["observables"] = {
                name: {"value": rows[0][0], "stderr": rows[0][1]} for name, rows in shot.readings.items()
            }
        if shot.note is not None:
            record["note"] = shot.note
        return record | more

    def amendment(self, shot: TrueShot, step: int, *names: str) -> dict[str, Any]:
        """Return the readings of one step of a shot's analysis, as they come by themselves."""
        rows = {name: shot.readings[name][step] for name in names}
        by = {row[2] for row in rows.values()}.pop()
        found: dict[str, Any] = {"format": 1, "uid": shot.uid}
        found["observables"] = {name: {"value": row[0], "stderr": row[1]} for name, row in rows.items()}
        return found if by is None else found | {"derivation": {"name": by, "version": "2"}}

    def card(
        self, name: str, *, rejoin: str = "6 h", naive: bool = False, offset: int = 160, more: str = ""
    ) -> Path:
        """Write a machine card."""
        path = self.folder / name
        path.write_text(CARD.format(rejoin=rejoin, naive=str(naive).lower(), offset=offset, more=more))
        return path


def at(day: int, clock: str) -> datetime:
    """Return a local time of October 2026."""
    hour, minute = map(int, clock.split(":"))
    return datetime(2026, 10, day, hour, minute, tzinfo=VIENNA)


def shuffled(month: Month, items: list[Any]) -> list[Any]:
    """Return items in another order."""
    items = list(items)
    month.rng.shuffle(items)
    return items


def grid(low: float, high: float, points: int) -> list[float]:
    """Return equally spaced numbers."""
    return [low + (high - low) * k / (points - 1) for k in range(points)]


# ---------------------------------------------------------------------- what happened, day by day


def late_analysis(month: Month, store: Store) -> None:
    """5 October: two clouds; the analysis runs behind and hands over in bursts, out of order, some of it twice."""
    store.use_card(month.card("october.toml"))
    shots = []
    for k, current in enumerate(shuffled(month, grid(60.3, 62.3, 21) * 2)):
        shot = month.shot(
            at(5, "21:00") + timedelta(seconds=18 * k), "loss", "2026-10-05", coil_current=current
        )
        shot.scan = "two-clouds"
        up = 6e4 * (1 - 0.5 / (1 + ((current - 61.3) / 0.2) ** 2))
        shot.readings = {
            "atom_number[up]": [(up * month.rng.gauss(1, 0.02), 700.0, None)],
            "atom_number[down]": [(4e4 * month.rng.gauss(1, 0.02), 600.0, None)],
            "temperature": [(month.rng.gauss(400, 10), 12.0, None)],
        }
        shots.append(shot)
        month.labelled.setdefault("two-clouds#1", []).append(shot.uid)
    records = [month.record(shot, readings=False) for shot in shots]
    records[-1]["last"] = True
    assert store.take(records[:20]).new == 20
    late = [
        month.amendment(shot, 0, "atom_number[up]", "atom_number[down]")
        for shot in shuffled(month, shots[:20])
    ]
    assert store.take(late).amended == 20
    assert store.take(records[20:]).new == len(shots) - 20
    late = [month.amendment(shot, 0, "atom_number[up]", "atom_number[down]") for shot in shots[20:]]
    late += [month.amendment(shot, 0, "temperature") for shot in shots]
    done = store.take(shuffled(month, late + late[:7]))
    assert (done.amended, done.known) == (len(late), 7)
    store.fit("two-clouds", "lorentzian", observable="atom_number[up]")
    store.fit("two-clouds", "lorentzian", observable="polarisation")
    assert [fit.stale for fit in store.fits()] == [False, False]


def aborted_and_resumed(month: Month, store: Store) -> None:
    """6 October: stopped after 11 shots of 30, resumed after two hours; failures; a scan without a label between."""
    values = shuffled(month, grid(60.4, 62.2, 30))
    first = month.sweep(at(6, "20:00"), "2026-10-06", "loss-fine", "loss-fine#1", values[:11])
    free = month.sweep(at(6, "21:00"), "2026-10-06", None, None, grid(55.0, 58.0, 16), sequence="survey")
    rest = month.sweep(at(6, "22:04"), "2026-10-06", "loss-fine", "loss-fine#1", values[11:])
    first[4].aside = "the shutter stayed shut"
    first[4].readings.clear()
    rest[2].note = "Laser größtenteils unlocked ☹"
    records = [month.record(shot, planned_shots=30) for shot in (*first, *rest)]
    records[4]["failed"] = "the shutter stayed shut"
    records += [month.record(shot) for shot in free]
    path = month.folder / "october-06.jsonl"
    lines = [json.dumps(record) for record in records]
    lines[7:7] = ["{torn line", json.dumps({"format": 1, "machine": "egret", "sequence": "loss"})]
    path.write_text("\n".join(lines) + "\n")
    intake = store.take_file(path)
    assert (intake.new, len(intake.refused)) == (46, 2)
    assert [item.line for item in intake.refused] == [8, 9]
    assert store.take_file(path).known == 46
    assert store.scan("loss-fine").complete
    assert store.set_aside([rest[5].uid, rest[6].uid], "door open", by="ada") == 2
    assert store.put_back([rest[5].uid], by="bo") == 1
    rest[6].aside = "door open"
    assert store.set_aside([rest[6].uid], "door open") == 0


def clock_step(month: Month, store: Store) -> None:
    """7 October: the same label on another evening opens a round; amid it the clock goes back 40 minutes."""
    values = shuffled(month, grid(60.4, 62.2, 24))
    before = month.sweep(at(7, "22:00"), "2026-10-07", "loss-fine", "loss-fine#2", values[:12])
    after = month.sweep(at(7, "21:23"), "2026-10-07", "loss-fine", "loss-fine#2", values[12:])
    for shot in (*before, *after):
        store.take([month.record(shot)])


def mistyped(month: Month, store: Store) -> None:
    """9 October: the second half under a mistyped label; joined by hand, split in error and put back."""
    values = shuffled(month, grid(60.4, 62.2, 26))
    first = month.sweep(at(9, "20:00"), "2026-10-09", "loss-night", "loss-night#1", values[:13])
    second = month.sweep(at(9, "20:10"), "2026-10-09", "loss-nihgt", None, values[13:])
    store.take([month.record(shot) for shot in shuffled(month, first + second)])
    assert len(store.scans()) == 6
    store.join_scans(["loss-night", "loss-nihgt"], reason="mistyped", by="ada")
    month.labelled["loss-night#1"] += [shot.uid for shot in second]
    store.split_scan("loss-night", at=second[0].uid)
    assert len(store.scans()) == 6
    numbers = store.arrangements()
    store.undo_arrangement(int(numbers["number"].max()))
    late = month.sweep(at(9, "20:14"), "2026-10-09", "loss-night", "loss-night#1", [61.77], cycle=1.0)
    store.take([month.record(shot) for shot in late])


def new_card(month: Month, store: Store, other: Store) -> None:
    """12 October: somebody puts in a new card while shots come in."""
    values = shuffled(month, grid(60.4, 62.2, 18))
    shots = month.sweep(at(12, "23:00"), "2026-10-12", "with-probe", "with-probe#1", values)
    more = '\n[parameters.probe_power]\nunit = "mW"\n'
    for shot in shots[9:]:
        shot.parameters["probe_power"] = 1.25

    def coming() -> Iterator[dict[str, Any]]:
        for k, shot in enumerate(shots):
            if k == 9:
                other.use_card(month.card("october-12.toml", rejoin="3 h", offset=158, more=more))
            record = month.record(shot)
            if k > 12:
                record["parameters"]["probe_power"] = {"value": 1250.0, "unit": "uW"}
            yield record

    assert store.take(coming()).new == 18


def wrong_setting(month: Month, store: Store) -> None:
    """14 October: the supply's range was wrong, so all currents were recorded 1.02 times too high; corrected."""
    shots = month.sweep(
        at(14, "20:30"), "2026-10-14", "loss-late", "loss-late#1", shuffled(month, grid(60.4, 62.2, 20))
    )
    for shot in shots:
        shot.recorded = {"coil_current": round(shot.parameters["coil_current"] * 1.02, 6), "axis": "y"}
    records = [month.record(shot) for shot in shots]
    store.take(records)
    store.fit("loss-late", "lorentzian", observable="atom_number")
    for shot in shots:
        value = {"coil_current": {"value": shot.parameters["coil_current"], "unit": "A"}}
        assert store.correct([shot.uid], value, "supply in its 100 A range", by="cleo") == 1
    assert store.correct([], {"axis": "x"}, "camera turned", scan="loss-late") == 20
    assert store.take(records).known == 20
    assert store.fits("loss-late")[0].stale


def other_name(month: Month, store: Store) -> None:
    """15 October: for one evening the control program called the machine Egret."""
    values = shuffled(month, grid(60.4, 62.2, 14))
    first = month.sweep(at(15, "20:00"), "2026-10-15", "loss-xv", "loss-xv#1", values[:7])
    second = month.sweep(at(15, "20:03"), "2026-10-15", "loss-xv", "loss-xv#1", values[7:])
    store.take([month.record(shot) for shot in first])
    theirs = [month.record(shot, machine="Egret") for shot in second]
    for record in theirs:  # a machine without a card: units must be stated
        record["parameters"] |= {
            "coil_current": {"value": month.shots[record["uid"]].parameters["coil_current"], "unit": "A"},
            "hold_time": {"value": 100.0, "unit": "ms"},
            "aom_frequency": {"value": 81.5, "unit": "MHz"},
        }
    assert store.take(theirs).new == 7
    assert store.machines() == ["Egret", "egret"]
    store.merge_machines("Egret", "egret", reason="misconfigured", by="ada")
    assert store.machines() == ["egret"]
    assert store.take(theirs).known == 7


def references(month: Month, store: Store) -> None:
    """20 October: an edit; reference shots in between; one scan of a single shot."""
    month.base["aom_frequency"] = 81.7
    values = shuffled(month, grid(60.4, 62.2, 20))
    start = at(20, "21:00")
    shots = month.sweep(start, "2026-10-20", "with-references", "with-references#1", values)
    for k in range(5):
        shot = month.shot(start + timedelta(seconds=75 * k - 7), "loss", "2026-10-20")
        shot.reference = True
        shot.readings["atom_number"] = [(1e5 - 1000.0 * k, 800.0, None)]
        shots.append(shot)
    shots += month.sweep(at(20, "22:00"), "2026-10-20", "one-shot", "one-shot#1", [61.0])
    store.take([month.record(shot) for shot in shuffled(month, shots)])


def summer_time_ends(month: Month, store: Store) -> None:
    """24 to 25 October: a table of naive times across the hour that occurs twice; what is ambiguous is refused."""
    probe = '\n[parameters.probe_power]\nunit = "mW"\n'
    store.use_card(month.card("october-24.toml", rejoin="3 h", naive=True, offset=158, more=probe))
    start = datetime(
        2026, 10, 24, 23, 40, tzinfo=UTC
    )  # 01:40 local; 02:00-03:00 comes twice, from 00:00 to 02:00 UTC
    shots = month.sweep(start, "2026-10-24", "autumn", "autumn#1", grid(60.4, 62.2, 18), cycle=600.0)
    path = month.folder / "autumn.csv"
    with path.open("w", newline="") as file:
        table = csv.writer(file)
        table.writerow(["started", "uid", "sequence", "scan", "coil_current [mA]", "hold_time [s]", "aom_frequency",
                        "axis", "repump", "atom_number", "atom_number_stderr"])  # fmt: skip
        for shot in shots:
            own = shot.parameters
            local = shot.started.astimezone(VIENNA).replace(tzinfo=None).isoformat()
            number, stderr, _ = shot.readings["atom_number"][0]
            table.writerow([local, shot.uid, "loss", "autumn", repr(own["coil_current"] * 1000), "0.1", "81.7", "x",
                            "true", repr(number), repr(stderr)])  # fmt: skip
    from nightfold.intake.csvfile import CsvColumns

    intake = store.take_file(
        path, columns=CsvColumns(machine="egret", parameters=("axis", "repump"), swept=("coil_current",))
    )
    ambiguous = [shot for shot in shots if shot.started.astimezone(VIENNA).hour == 2]
    assert (intake.new, len(intake.refused)) == (len(shots) - len(ambiguous), len(ambiguous)) == (6, 12)
    assert store.take([month.record(shot) for shot in ambiguous]).new == 12
    minute = timedelta(minutes=1)
    for k in range(180):
        month.room[start + k * minute] = round(21 + 0.5 * math.sin(k / 30), 2)
    rows = []
    for k, (when, value) in enumerate(month.room.items()):
        room = {"value": value + 273.15, "unit": "K"} if k % 2 else {"value": value, "unit": "degC"}
        rows.append({"format": 1, "machine": "egret", "at": when.isoformat(), "readings": {"room": room}})
    assert store.take_sensors(rows[:1]).new == 1
    taken = store.take_sensors(shuffled(month, rows + rows[:30]))
    assert (taken.new, taken.known) == (179, 31)


def over_noon(month: Month, store: Store) -> None:
    """28 October: work that runs on across noon stays one night."""
    month.sweep(
        at(28, "11:40"), "2026-10-27", None, None, grid(40.0, 50.0, 60), cycle=30.0, sequence="survey"
    )
    store.take([month.record(month.shots[uid]) for uid in month.found[-1]])


def analysed_again(month: Month, store: Store) -> None:
    """31 October: the clouds of the 5th are read again by a better program; fits follow when asked."""
    shots = [month.shots[uid] for uid in month.labelled["two-clouds#1"]]
    for shot in shots:
        value, stderr, _ = shot.readings["atom_number[up]"][-1]
        shot.readings["atom_number[up]"].append((value * 1.1, (stderr or 0.0) * 1.1, "wide-roi"))
    assert store.take([month.amendment(shot, 1, "atom_number[up]") for shot in shots]).amended == len(shots)
    assert [fit.stale for fit in store.fits("two-clouds")] == [True, True]
    store.refit()
    assert not any(fit.stale for fit in store.fits())


def play(store: Store, other: Store, folder: Path) -> Month:
    """Play the month on a store (`other` is the same store, opened by somebody else), and return its truth."""
    month = Month(folder)
    for happening in (late_analysis, aborted_and_resumed, clock_step, mistyped):
        happening(month, store)
    new_card(month, store, other)
    for happening in (wrong_setting, other_name, references, summer_time_ends, over_noon, analysed_again):
        happening(month, store)
    return month
