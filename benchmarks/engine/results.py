"""What a benchmark finds: figures against what they must be, as a table or as JSON."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, field
from typing import Any

from benchmarks.engine.costs import Cost, machine


@dataclass(frozen=True, slots=True, kw_only=True)
class Figure:
    """One figure.

    Attributes
    ----------
    name, value, unit
        What it is; ``D`` is the processor time of decoding all bands once and nothing else.
    must, aim
        What it has to reach, and what it should; None where nothing was set for this size.
    is_at_least
        Whether more is better.
    costs
        Seconds behind a ratio, for the reader: they differ from machine to machine.
    """

    name: str
    value: float
    unit: str
    must: float | None = None
    aim: float | None = None
    is_at_least: bool = False
    costs: Mapping[str, Sequence[Cost]] = field(default_factory=dict)

    def meets(self, limit: float | None) -> bool:
        """Whether the figure reaches a limit; true without one."""
        if limit is None or math.isnan(self.value):
            return limit is None
        return self.value >= limit if self.is_at_least else self.value <= limit


@dataclass(frozen=True, slots=True, kw_only=True)
class Result:
    """The figures of one benchmark."""

    benchmark: str
    options: Mapping[str, Any]
    figures: Sequence[Figure]

    @property
    def is_good(self) -> bool:
        """Whether every figure is what it must be."""
        return all(figure.meets(figure.must) for figure in self.figures)

    def document(self) -> dict[str, Any]:
        """Return the result as JSON can hold it."""
        return {
            "benchmark": self.benchmark,
            "options": dict(self.options),
            "machine": machine(),
            "figures": [asdict(figure) for figure in self.figures],
        }

    def table(self) -> str:
        """Return the result as a table in Markdown."""
        rows = ["| figure | found | must | aim |", "|---|---|---|---|"]
        for figure in self.figures:
            sign = "≥" if figure.is_at_least else "≤"
            limits = [
                "" if limit is None else f"{sign} {limit:g}{'' if figure.meets(limit) else ' ✗'}"
                for limit in (figure.must, figure.aim)
            ]
            rows.append(
                f"| {figure.name} | {figure.value:.3g} {figure.unit} | {limits[0]} | {limits[1]} |"
            )
        return "\n".join(rows)
