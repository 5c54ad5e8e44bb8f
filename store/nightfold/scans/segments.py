"""Cutting a run of shots into stretches in which the same few settings move: optimal by description length.

The cost of a stretch is a toll plus its length times the number of settings that move within it. A scan is
cheapest as one stretch (its length, plus one toll); an edit in its middle would charge every shot for a
second setting, so it is cheaper to pay another toll and begin anew there.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence

Names = frozenset[str]


def group_together(changes: Iterable[Names]) -> list[list[str]]:
    """Return the names in groups that changed at exactly the same places, each group sorted.

    Names of one group count as one moving setting: settings that move together do so.
    """
    places: dict[str, int] = {}
    for place, names in enumerate(changes):
        for name in names:
            places[name] = places.get(name, 0) | 1 << place
    groups: dict[int, list[str]] = {}
    for name in sorted(places):
        groups.setdefault(places[name], []).append(name)
    return list(groups.values())


def cut(changes: Sequence[Names], toll: float) -> list[tuple[int, int]]:
    """Return the cheapest cutting of a list of items into stretches ``(start, stop)``.

    Parameters
    ----------
    changes : sequence of frozenset of str
        What each item changed against the one before it; the first entry is ignored, and so is what changed
        at the first item of any stretch.
    toll : float
        Price of one more stretch, in item-settings. At equal cost there are more stretches.

    Notes
    -----
    Dynamic programming with exact pruning. The price of a stretch without its toll never falls when two
    stretches are joined, so a start that is no better than paying another toll now never will be; inside a
    scan all starts but its first drop out at once, and time grows linearly with the number of items.

    References
    ----------
    R. Killick, P. Fearnhead, I. A. Eckley, J. Am. Stat. Assoc. 107, 1590 (2012),
    doi:10.1080/01621459.2012.737745, theorem 3.1 (the pruning rule, with its constant K = 0).
    """
    prices = _Prices()
    best = [0.0]
    origin = [0]
    active: list[tuple[int, int]] = []
    for stop, names in enumerate(changes, start=1):
        if mark := prices.mark(names):
            active = [(start, seen | mark) for start, seen in active]
        active.append((stop - 1, 0))
        costs = [best[start] + (stop - start) * prices[seen] for start, seen in active]
        least = min(costs)
        best.append(least + toll)
        latest = len(costs) - 1 - costs[::-1].index(least)
        origin.append(active[latest][0])
        if max(costs) >= least + toll:
            active = [each for each, cost in zip(active, costs, strict=True) if cost < least + toll]
    return _walk_back(origin)


class _Prices(dict[int, int]):
    """How many settings move, for any collection of sets of changed names, held as bits of an integer."""

    def __init__(self) -> None:
        super().__init__({0: 0})
        self._marks: dict[Names, int] = {}
        self._met: list[Names] = []

    def mark(self, names: Names) -> int:
        """Return the bit of one set of names; 0 for the empty one."""
        if not names:
            return 0
        mark = self._marks.get(names)
        if mark is None:
            mark = self._marks[names] = 1 << len(self._met)
            self._met.append(names)
        return mark

    def __missing__(self, seen: int) -> int:
        """Return, and remember, the number of settings that moved in a collection of sets."""
        count = self[seen] = len(group_together(self._members(seen)))
        return count

    def _members(self, seen: int) -> Iterator[Names]:
        while seen:
            lowest = seen & -seen
            yield self._met[lowest.bit_length() - 1]
            seen ^= lowest


def _walk_back(origin: Sequence[int]) -> list[tuple[int, int]]:
    stretches = []
    stop = len(origin) - 1
    while stop > 0:
        stretches.append((origin[stop], stop))
        stop = origin[stop]
    return stretches[::-1]
