"""Measured numbers beside what is promised, as Markdown tables and as strict JSON."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass


@dataclass(frozen=True)
class Figure:
    """A measured number beside what is promised: between `low` and `high`, both included.

    `interval` is what the number may be off by (95 %, unless the name says otherwise), where that
    is known; the promise is judged by the number itself.
    """

    name: str
    value: float
    low: float = -math.inf
    high: float = math.inf
    unit: str = "%"
    interval: tuple[float, float] | None = None

    @property
    def kept(self) -> bool:
        """Whether the promise is kept; what could not be measured does not keep it."""
        return self.low <= self.value <= self.high

    @property
    def target(self) -> str:
        """The promise in words; a dash for what is information only."""
        if math.isfinite(self.low) and math.isfinite(self.high):
            return f"{self.low:g} to {self.high:g} {self.unit}"
        if math.isfinite(self.low):
            return f"at least {self.low:g} {self.unit}"
        return f"at most {self.high:g} {self.unit}" if math.isfinite(self.high) else "-"

    @property
    def measured(self) -> str:
        """The number with its unit and interval."""
        text = f"{self.value:.3g} {self.unit}".strip()
        if self.interval is None:
            return text
        return f"{text} ({self.interval[0]:.3g} to {self.interval[1]:.3g})"

    def __str__(self) -> str:
        """Return one line."""
        return f"{self.name}: {self.value:.3g} {self.unit} ({self.target})"


def plain(figure: Figure) -> dict[str, object]:
    """Return a figure for strict JSON: what is not finite is null."""
    values = {**asdict(figure), "kept": figure.kept}
    if figure.interval is not None:
        values["interval"] = [end if math.isfinite(end) else None for end in figure.interval]
    return {
        name: None if isinstance(value, float) and not math.isfinite(value) else value
        for name, value in values.items()
    }


def table(title: str, figures: Sequence[Figure]) -> str:
    """Return figures as a Markdown table."""
    lines = [f"### {title}", "", "| figure | measured | target | |", "|---|---|---|---|"]
    for figure in figures:
        mark = "" if figure.target == "-" else "kept" if figure.kept else "**missed**"
        lines.append(f"| {figure.name} | {figure.measured} | {figure.target.strip()} | {mark} |")
    return "\n".join([*lines, ""])


@dataclass(frozen=True)
class Grid:
    """A table of numbers that promise nothing by themselves."""

    title: str
    head: tuple[str, ...]
    rows: tuple[tuple[str | float, ...], ...]

    def __str__(self) -> str:
        """Return Markdown; numbers to three digits, a dash for none."""
        lines = [f"#### {self.title}", "", _line(self.head), _line(["---"] * len(self.head))]
        return "\n".join([*lines, *map(_line, self.rows), ""])

    def plain(self) -> dict[str, object]:
        """Return the table for strict JSON: what is not finite is null."""
        rows = [
            [None if isinstance(v, float) and not math.isfinite(v) else v for v in row]
            for row in self.rows
        ]
        return {"title": self.title, "head": self.head, "rows": rows}


def _line(cells: Sequence[str | float]) -> str:
    shown = [
        cell if isinstance(cell, str) else "-" if math.isnan(cell) else f"{cell:.3g}"
        for cell in cells
    ]
    return f"| {' | '.join(shown)} |"
