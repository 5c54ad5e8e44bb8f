"""Scores added up and set in tables (Markdown)."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from tests.calibration.scans import AWKWARD, HOPELESS, STATED
from tests.calibration.scoring import Score

CLEAN, WITH_OUTLIERS = "clean", "outliers"
NONE = "–"


@dataclass
class Tally:
    """Counts over any number of scores."""

    scans: int = 0
    success: int = 0
    trusted: int = 0
    trusted_wrong: int = 0
    visible: int = 0
    visible_trusted_wrong: int = 0
    flagged: int = 0
    planted: int = 0
    found: int = 0
    numbers: int = 0
    inside: Any = field(default_factory=lambda: np.zeros(2))
    codes: Counter[str] = field(default_factory=Counter)
    advice: Counter[str] = field(default_factory=Counter)

    @classmethod
    def of(cls, scores: Iterable[Score]) -> Tally:
        total = cls()
        for score in scores:
            total.scans += len(score.success)
            total.success += int(score.success.sum())
            total.trusted += int(score.trusted.sum())
            total.trusted_wrong += int((score.trusted & score.wrong).sum())
            total.visible += int(score.visible.sum())
            total.visible_trusted_wrong += int((score.trusted & score.wrong & score.visible).sum())
            total.flagged += int((score.flagged > 0).sum())
            total.planted += score.planted
            total.found += score.found
            for inside in score.inside.values():
                total.numbers += len(inside)
                total.inside = total.inside + inside.sum(axis=0)
            total.codes.update(score.codes)
            total.advice.update(score.advice)
        return total

    def share(self, count: int, of: int | None = None) -> float:
        whole = self.scans if of is None else of
        return 100 * count / whole if whole else float("nan")

    @property
    def coverage(self) -> tuple[float, float]:
        return self.share(self.inside[0], self.numbers), self.share(self.inside[1], self.numbers)

    @property
    def warned(self) -> float:
        return self.share(self.scans - self.trusted)


def percent(value: float, digits: int = 1) -> str:
    return NONE if value != value else f"{value:.{digits}f}"


def pair(values: tuple[float, float]) -> str:
    return NONE if values[0] != values[0] else f"{values[0]:.1f} / {values[1]:.1f}"


def set_table(head: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    """Return a Markdown table."""
    lines = [list(head), *(list(row) for row in rows)]
    widths = [max(len(line[i]) for line in lines) for i in range(len(head))]
    text = [" | ".join(cell.ljust(width) for cell, width in zip(line, widths, strict=True)) for line in lines]
    rule = " | ".join("-" * max(width, 3) for width in widths)
    return "\n".join(f"| {line} |" for line in [text[0], rule, *text[1:]])


class Report:
    """Everything that is said of a run."""

    def __init__(self, scores: list[Score]) -> None:
        self.scores = scores
        self.models = list(dict.fromkeys(s.model for s in scores))
        self.sizes = sorted({s.n for s in scores})

    def tally(self, **wanted: Any) -> Tally:
        """Return the counts of scores whose attributes are (among) those wanted."""

        def fits(score: Score) -> bool:
            return all(
                getattr(score, name) in value if isinstance(value, tuple) else getattr(score, name) == value
                for name, value in wanted.items()
            )

        return Tally.of(score for score in self.scores if fits(score))

    def main_table(self, digits: int = 1) -> str:
        head = (
            "",
            "success clean",
            "with outliers",
            "coverage clean, 68.3 / 95",
            "with outliers, 68.3 / 95",
            "false flags",
            "outliers found",
            "hopeless warned",
            "false alarms",
        )
        groups: list[tuple[str, dict[str, Any]]] = [(model, {"model": model}) for model in self.models]
        groups += [(f"n = {n}", {"n": n}) for n in self.sizes]
        groups += [("all", {})]
        return set_table(head, [self._main_row(name, wanted) for name, wanted in groups])

    def _main_row(self, name: str, wanted: dict[str, Any]) -> list[str]:
        clean, bad = self.tally(kind=CLEAN, **wanted), self.tally(kind=WITH_OUTLIERS, **wanted)
        return [
            f"**{name}**" if name == "all" else name,
            percent(clean.share(clean.success)),
            percent(bad.share(bad.success)),
            pair(clean.coverage),
            pair(bad.coverage),
            percent(clean.share(clean.flagged)),
            percent(bad.share(bad.found, bad.planted), 0),
            percent(self.tally(kind=HOPELESS, **wanted).warned),
            percent(clean.warned),
        ]

    def cells_table(self) -> str:
        """Return coverage and false alarms of clean scans by model and n."""
        head = ("clean, by model and n", *(f"n = {n}: 68.3 / 95, alarms, flags" for n in self.sizes))

        def cell(model: str, n: int) -> str:
            tally = self.tally(model=model, n=n, kind=CLEAN)
            return f"{pair(tally.coverage)}, {percent(tally.warned)}, {percent(tally.share(tally.flagged))}"

        return set_table(head, [[model, *(cell(model, n) for n in self.sizes)] for model in self.models])

    def names_table(self) -> str:
        """Return coverage of every reported name of clean scans."""
        rows = []
        for model in self.models:
            chosen = [s for s in self.scores if s.model == model and s.kind == CLEAN]
            for name in dict.fromkeys(name for s in chosen for name in s.inside):
                row = [model, name]
                for n in (*self.sizes, None):
                    parts = [s.inside[name] for s in chosen if name in s.inside and n in (s.n, None)]
                    row.append(pair(tuple(100 * np.concatenate(parts).mean(axis=0))) if parts else NONE)
                rows.append(row)
        head = ("model", "name", *(f"n = {n}" for n in self.sizes), "all")
        return set_table(head, rows)

    def noise_table(self) -> str:
        """Return what becomes of clean scans by how they scatter and by background."""
        head = ("clean, by scatter and background", "success", "68.3 / 95", "false flags", "false alarms")
        rows = []
        for attribute in ("noise", "background"):
            for value in sorted({getattr(s, attribute) for s in self.scores if s.kind == CLEAN}):
                tally = self.tally(kind=CLEAN, **{attribute: value})
                flags = percent(tally.share(tally.flagged))
                label = f"{attribute} {value}".replace("noise ", "")
                row = [label, percent(tally.share(tally.success)), pair(tally.coverage), flags]
                rows.append([*row, percent(tally.warned)])
        return set_table(head, rows)

    def awkward_table(self) -> str:
        """Return what becomes of scans that are not as assumed, and of those with stated uncertainties."""
        head = ("kind", "success", "68.3 / 95", "trusted", "trusted and wrong", "of visible", "what is said")
        kinds = (CLEAN, WITH_OUTLIERS, *dict.fromkeys((*STATED, *AWKWARD)))
        return set_table(head, [self._awkward_row(kind) for kind in kinds if self.tally(kind=kind).scans])

    def _awkward_row(self, kind: str) -> list[str]:
        tally = self.tally(kind=kind)
        return [
            kind,
            percent(tally.share(tally.success)),
            pair(tally.coverage),
            percent(tally.share(tally.trusted)),
            percent(tally.share(tally.trusted_wrong)),
            percent(tally.share(tally.visible_trusted_wrong, tally.visible)),
            said(tally, 4),
        ]

    def wrong_table(self) -> str:
        """Return the share trusted and wrong by model and awkward kind."""
        kinds = [k for k in (CLEAN, *AWKWARD) if self.tally(kind=k).scans]

        def cell(model: str, kind: str) -> str:
            tally = self.tally(model=model, kind=kind)
            wrong = percent(tally.share(tally.trusted_wrong))
            if kind == "misfit":
                wrong += f" ({percent(tally.share(tally.visible_trusted_wrong, tally.visible))})"
            return f"{percent(tally.share(tally.trusted), 0)}, {wrong}" if tally.scans else NONE

        rows = [[model, *(cell(model, kind) for kind in kinds)] for model in self.models]
        return set_table(("trusted, trusted and wrong", *kinds), rows)

    def warnings_table(self) -> str:
        """Return the codes given to good scans and to hopeless ones."""
        groups: dict[str, dict[str, Any]] = {"clean": {"kind": CLEAN}, "outliers": {"kind": WITH_OUTLIERS}}
        groups |= {kind: {"kind": kind} for kind in HOPELESS}
        tallies = {name: self.tally(**wanted) for name, wanted in groups.items()}
        tallies = {name: tally for name, tally in tallies.items() if tally.scans}
        codes = list(dict.fromkeys(c for t in tallies.values() for c, _ in t.codes.most_common()))
        codes += [f"({c})" for c in dict.fromkeys(c for t in tallies.values() for c in t.advice)]

        def cell(tally: Tally, code: str) -> str:
            count = tally.advice[code[1:-1]] if code.startswith("(") else tally.codes[code]
            return percent(tally.share(count))

        rows = [["any (not trusted)", *(percent(t.warned) for t in tallies.values())]]
        rows += [[code, *(cell(t, code) for t in tallies.values())] for code in codes]
        return set_table(("warning (advice in brackets)", *tallies), rows)

    def alarms_table(self) -> str:
        """Return which warnings clean scans of each model get, and what hopeless ones are missed."""
        rows = []
        for model in self.models:
            missed = []
            for kind in HOPELESS:
                tally = self.tally(model=model, kind=kind)
                if tally.scans:
                    missed.append(f"{kind} {percent(100 - tally.warned)}")
            rows.append([model, said(self.tally(model=model, kind=CLEAN), 4), ", ".join(missed)])
        return set_table(("model", "clean scans warned of (%)", "hopeless scans not warned of (%)"), rows)

    def targets_table(self) -> str:
        """Return found against wanted."""
        clean, bad = self.tally(kind=CLEAN), self.tally(kind=WITH_OUTLIERS)
        each = {model: self.tally(kind=CLEAN, model=model) for model in self.models}
        hopeless = self.tally(kind=HOPELESS)
        rows: list[tuple[str, str, str, bool]] = []

        def add(what: str, wanted: str, found: float, met: Callable[[float], bool], who: str = "") -> None:
            rows.append((what, wanted, f"{percent(found)} {who}".strip(), met(found)))

        def worst(measure: Callable[[Tally], float], ideal: float = 0.0) -> tuple[float, str]:
            name = max(each, key=lambda model: abs(measure(each[model]) - ideal))
            return measure(each[name]), name

        add("success, clean", ">= 99.5", clean.share(clean.success), lambda v: v >= 99.5)
        add("success, with outliers", ">= 97", bad.share(bad.success), lambda v: v >= 97)
        for row, level, pooled, single in ((0, 68.27, 2.0, 5.0), (1, 95.0, 1.0, 2.5)):
            add(
                f"coverage of {level:g} %, pooled",
                f"± {pooled:g}",
                clean.coverage[row],
                lambda v, level=level, pooled=pooled: abs(v - level) <= pooled,  # type: ignore[misc]
            )
            value, name = worst(lambda t, row=row: t.coverage[row], level)  # type: ignore[misc]
            add(
                f"coverage of {level:g} %, worst model",
                f"± {single:g}",
                value,
                lambda v, level=level, single=single: abs(v - level) <= single,  # type: ignore[misc]
                name,
            )
        value, name = worst(lambda t: t.share(t.flagged))
        add("false outlier flags, worst model", "<= 2", value, lambda v: v <= 2, name)
        add("hopeless scans warned", ">= 99", hopeless.warned, lambda v: v >= 99)
        add("false alarms, pooled", "<= 3", clean.warned, lambda v: v <= 3)
        value, name = worst(lambda t: t.warned)
        add("false alarms, worst model", "<= 5", value, lambda v: v <= 5, name)
        head = ("target (%)", "wanted", "found", "")
        return set_table(head, [(*row[:3], "met" if row[3] else "**missed**") for row in rows])

    def everything(self) -> str:
        """Return all tables."""
        parts = (
            ("Targets", self.targets_table()),
            ("By model and by number of points", self.main_table()),
            ("By both", self.cells_table()),
            ("Every reported name, clean scans", self.names_table()),
            ("By scatter and background", self.noise_table()),
            ("What is not as assumed", self.awkward_table()),
            ("The same by model (misfits: of visible ones in brackets)", self.wrong_table()),
            ("Warnings", self.warnings_table()),
            ("Warnings by model", self.alarms_table()),
        )
        return "\n\n".join(f"### {title}\n\n{table}" for title, table in parts)


def said(tally: Tally, most: int) -> str:
    """Return the commonest warnings and how often they are given, in percent."""
    found = [f"{code} {percent(tally.share(count))}" for code, count in tally.codes.most_common(most)]
    return ", ".join(found)
