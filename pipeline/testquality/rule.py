"""One row of the table of checks."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from pipeline.findings import Level
from pipeline.testquality.facts import Facts

#: Where a limit comes from that no paper gives.
PRACTICE = "common practice"

#: Level, observed value, limit and sentence of a finding; None where there is nothing to say.
Found = tuple[Level, float | None, float | None, str] | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Rule:
    """One row of the table.

    Attributes
    ----------
    code : str
        Stable name of the finding.
    source : str
        Where the limits come from.
    check : callable
        Gives (level, value, limit, sentence) or None; the sentence ends with what to do.
    needs_bumps : bool
        Only asked when there is an answer to judge.
    """

    code: str
    source: str
    check: Callable[[Facts], Found]
    needs_bumps: bool = True


def unit_of(facts: Facts) -> str:
    """Give the PV's unit with a blank before it, empty if it is not known."""
    unit = facts.log.pv_column.unit
    return f" {unit}" if unit else ""
