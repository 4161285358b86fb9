"""What a stage has noticed: a value, not a log line."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Level = Literal["stop", "care", "note"]

#: Worst first: the order in which a reader must see them.
SEVERITY: dict[str, int] = {"stop": 0, "care": 1, "note": 2}

#: Cautions of level "care" that stand in every report and so do not colour its verdict.
ALWAYS = frozenset(
    {"check-action", "equation-and-units", "permit-and-change", "safety-not-assessed", "motion"}
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Caution:
    """One thing the reader must know, with the number behind it.

    Attributes
    ----------
    code : str
        Stable name for programs, lower case with hyphens.
    level : {"stop", "care", "note"}
        "stop" withholds settings, "care" restricts their use, "note" informs.
    text : str
        A sentence or two to a person on site: what was seen and what to do.
    value, limit : float or None
        The observed value and the limit it was held against; None where there is no number.
    """

    code: str
    level: Level
    text: str
    value: float | None = None
    limit: float | None = None


def worst_first(cautions: list[Caution]) -> tuple[Caution, ...]:
    """Order cautions by severity, keeping the given order within one level."""
    return tuple(sorted(cautions, key=lambda c: SEVERITY[c.level]))
