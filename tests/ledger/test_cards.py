"""Machine cards in the store: which is in force, which were, and one that is changed while shots come in."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from nightfold.errors import CardError, NotFound
from nightfold.opening import open_store
from nightfold.store import Store

START = datetime(2026, 10, 5, 19, tzinfo=UTC)
UseCard = Callable[..., None]


def shot(number: int, *, hours: float = 0, **fields: Any) -> dict[str, Any]:
    started = START + timedelta(hours=hours, seconds=20 * number)
    return {
        "machine": "heron", "sequence": "hold", "started": started.isoformat(),
        "parameters": {"current": 60.0 + number},
        "observables": {"atoms": 1e5 - number, "width": 20.0 + number}, **fields,
    }  # fmt: skip


@pytest.fixture
def two(anywhere: str) -> Iterator[tuple[Store, Store]]:
    """Return two writers of one store."""
    with open_store(anywhere) as one, open_store(anywhere) as other:
        yield one, other


@pytest.fixture
def use(tmp_path: Path) -> UseCard:
    """Return a function that brings a card of heron into force."""

    def use_card(store: Store, text: str = "") -> None:
        path = tmp_path / "heron.toml"
        path.write_text('machine = "heron"\n' + text)
        store.use_card(path)

    return use_card


def test_the_unit_of_bare_numbers(two: tuple[Store, Store], use: UseCard) -> None:
    """The writer has taken shots without units; then another process uses a card that states them."""
    writer, other = two
    writer.take([shot(0)])
    use(other, '[parameters.current]\nunit = "A"\n[observables.atoms]\nunit = "atoms"\n')
    assert writer.take([shot(1), shot(0)]).known == 1
    current = {"value": 61500, "unit": "mA"}
    assert writer.take([shot(2, parameters={"current": current})]).new == 1
    assert writer.shots(["current"])["current"].tolist() == [60.0, 61.0, 61.5]
    assert writer.shots(["current"], ["atoms"]).attrs["units"] == {"current": "A", "atoms": "atoms"}
    wrong = writer.take([shot(3, parameters={"current": {"value": 3, "unit": "MHz"}})]).refused
    assert "wanted a unit that converts to A" in wrong[0].reason


def test_the_kind_of_a_new_parameter(two: tuple[Store, Store], use: UseCard) -> None:
    writer, other = two
    writer.take([shot(0)])
    use(other, '[parameters.axis]\nkind = "text"\n[parameters.flag]\nkind = "truth"\n')
    parameters = {"current": 61, "axis": "007", "flag": "true"}
    assert writer.take([shot(1, parameters=parameters)]).new == 1
    assert writer.shots(["axis", "flag"]).iloc[-1][["axis", "flag"]].tolist() == ["007", True]
    refused = writer.take([shot(2, parameters={**parameters, "axis": 7})]).refused
    assert "wanted a text" in refused[0].reason


def test_how_long_a_label_is_resumed(two: tuple[Store, Store], use: UseCard) -> None:
    writer, other = two
    writer.take([shot(0, scan="loss")])
    writer.take([shot(1, scan="loss", hours=3)])
    use(other, 'rejoin_within = "2 h"\n')
    writer.take([shot(2, scan="loss", hours=4)])
    writer.take([shot(3, scan="loss", hours=8)])
    assert [(scan.key, scan.shots) for scan in writer.scans()] == [("loss#1", 3), ("loss#2", 1)]
    use(other, 'rejoin_within = "12 h"\n')
    writer.take([shot(4, scan="loss", hours=16)])
    assert [(scan.key, scan.shots) for scan in writer.scans()] == [("loss#1", 3), ("loss#2", 2)]


def test_zone_boundary_and_main_observable(two: tuple[Store, Store], use: UseCard) -> None:
    writer, other = two
    writer.take([shot(k, scan="loss", swept=["current"], hours=-9) for k in range(3)])  # 10:00 UTC
    assert writer.nights()["night"].tolist() == [date(2026, 10, 4)]
    assert writer.scan("loss").main_observable == "atoms"
    use(other, 'zone = "Europe/Vienna"\nmain_observable = "width"\n[observables.width]\nunit = "um"\n')
    assert writer.nights()["night"].tolist() == [date(2026, 10, 5)]  # 12:00 in Vienna
    assert (writer.zone("heron"), writer.scan("loss").main_observable) == ("Europe/Vienna", "width")
    use(other, 'zone = "Europe/Vienna"\nnight_boundary = "12:30"\n')
    assert writer.nights()["night"].tolist() == [date(2026, 10, 4)]


def test_naive_times_from_the_next_batch_on(two: tuple[Store, Store], use: UseCard) -> None:
    writer, other = two
    naive = shot(1, started="2026-10-06T01:00:00")
    assert "with an offset" in writer.take([shot(0), naive]).refused[0].reason
    use(other, 'zone = "Europe/Vienna"\nnaive_times = true\n')
    assert writer.take([naive]).new == 1
    assert writer.shots()["started"].iloc[-1].isoformat() == "2026-10-05T23:00:00+00:00"
    use(other, 'zone = "Europe/Vienna"\n')
    assert writer.take([shot(2, started="2026-10-06T01:01:00")]).refused


def test_in_the_middle_of_a_stream(two: tuple[Store, Store], use: UseCard) -> None:
    """A live source waits for each shot; the card comes between two of them."""
    writer, other = two

    def live() -> Iterator[dict[str, Any]]:
        yield shot(0)
        use(other, '[parameters.current]\nunit = "A"\n')
        yield shot(1)
        yield shot(2, parameters={"current": {"value": 62000, "unit": "mA"}})

    assert writer.take(live()).new == 3
    assert writer.shots(["current"])["current"].tolist() == [60.0, 61.0, 62.0]


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ('[parameters.current]\nunit = "mA"\n', "parameters.current.unit: found 'mA', wanted 'A'"),
        ('[parameters.current]\nkind = "text"\n', "parameters.current.kind: found text, the store has number"),
        ('[observables.current]\n', "observables.current: found an entry, wanted none: the store has a parameter"),
        ('[parameters.atoms]\n', "parameters.atoms: found an entry, wanted none: the store has an observable"),
    ],
)  # fmt: skip
def test_a_card_against_the_store_changes_nothing(
    two: tuple[Store, Store], use: UseCard, text: str, said: str
) -> None:
    writer, other = two
    use(other, '[parameters.current]\nunit = "A"\n')
    writer.take([shot(0)])
    with pytest.raises(CardError, match=said):
        use(other, 'zone = "Europe/Vienna"\n[observables.width]\nunit = "um"\n' + text)
    assert writer.zone("heron") == "UTC"
    assert len(writer.cards_used("heron")) == 1
    assert writer.observables().set_index("name")["unit"]["width"] is None
    assert writer.take([shot(1), shot(0)]).new == 1


def test_all_that_is_wrong_is_said_at_once(store: Store, use: UseCard) -> None:
    use(store, '[parameters.current]\nunit = "A"\n')
    store.take([shot(0)])
    with pytest.raises(CardError) as caught:
        use(store, '[parameters.current]\nunit = "mA"\n[parameters.atoms]\n')
    assert "parameters.current.unit" in str(caught.value)
    assert "parameters.atoms" in str(caught.value)


def test_the_cards_used(anywhere: str, use: UseCard) -> None:
    first, second = 'zone = "UTC"\n', 'zone = "UTC"\nrejoin_within = "2 h"\n'
    with open_store(anywhere) as store:
        store.take([shot(0)])
        assert store.cards_used("heron") == []
        before = datetime.now(UTC)
        for text in (first, first, second, first):  # the same again is no change; one used again is
            use(store, text)
        used = store.cards_used("heron")
        assert [card.toml.partition("\n")[2] for card in used] == [first, second, first]
        assert [card.changes for card in used] == [
            (),
            ('+rejoin_within = "2 h"',),
            ('-rejoin_within = "2 h"',),
        ]
        assert [card.in_force for card in used] == [False, False, True]
        assert before < used[0].at < used[1].at < used[2].at
        assert store.cards()["heron"].rejoin_within_s == 86400
        with pytest.raises(NotFound, match="machine 'egret'"):
            store.cards_used("egret")


NAIVE = 'naive_times = true\nzone = "{}"\n'


def test_the_zone_of_times_without_an_offset_stays(two: tuple[Store, Store], use: UseCard) -> None:
    writer, other = two
    use(other, NAIVE.format("Europe/Vienna"))
    use(other, NAIVE.format("Europe/London"))  # nothing was taken by the first
    local = [shot(0, started="2026-10-05T21:00:00")]
    assert writer.take(local).new == 1
    with pytest.raises(CardError, match=r"zone: found 'Europe/Vienna'.*wanted 'Europe/London'.*naive_times"):
        use(other, NAIVE.format("Europe/Vienna"))
    use(other, 'zone = "Europe/Vienna"\n')  # shows times in it, and reads none
    (refused,) = writer.take(local).refused
    assert "naive_times = true in the machine card" in refused.reason
    with pytest.raises(CardError, match="wanted 'Europe/London'"):
        use(other, NAIVE.format("Europe/Vienna"))
    use(other, NAIVE.format("Europe/London"))
    assert writer.take(local).known == 1


def test_the_zone_of_naive_times_of_sensors_stays(two: tuple[Store, Store], use: UseCard) -> None:
    writer, other = two
    use(other, NAIVE.format("Europe/Vienna"))
    reading = {"machine": "heron", "at": "2026-10-05T21:00:00", "readings": {"room": 20.0}}
    assert writer.take_sensors([reading]).new == 1
    with pytest.raises(CardError, match="zone: found 'Europe/London'"):
        use(other, NAIVE.format("Europe/London"))


def test_a_zone_may_change_where_no_naive_time_was_read(two: tuple[Store, Store], use: UseCard) -> None:
    writer, other = two
    use(other, 'zone = "Europe/Vienna"\n')
    writer.take([shot(0)])
    use(other, 'zone = "Europe/London"\n')
    use(other, NAIVE.format("Europe/Paris"))
