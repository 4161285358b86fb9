"""Is the test good enough to take a gain from: one table of checks, each with its limit and source.

::

    facts.py   log and bumps -> noise, and what the PV did after each bump, worked out once
    rule.py    one row of the table
    shape.py   a quick look at all moves together: common response, a gain each, what is left over
    load.py    one load step beside the moves
    record.py  checks of the record: the columns, the mode, is there a move at all
    answer.py  checks of the answer: its size, baseline, rows, resolution, ranges, hold
    storage.py checks of how the PV came into the file: cycles, filters, archives, spikes
    moves.py   checks across the moves: answered after they were made, alike, by nothing else
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

from pipeline.findings import Caution, worst_first
from pipeline.settings import LoopSheet
from pipeline.testquality.answer import ANSWER_RULES
from pipeline.testquality.facts import gather
from pipeline.testquality.moves import MOVE_RULES
from pipeline.testquality.record import RECORD_RULES
from pipeline.testquality.rule import Rule
from pipeline.testquality.storage import STORAGE_RULES

if TYPE_CHECKING:
    from pipeline.bumps import Bump
    from pipeline.intake.log import Log

__all__ = ["RULES", "Quality", "Rule", "Verdict", "judge"]

Verdict = Literal["use", "use with care", "do not use"]

RULES: tuple[Rule, ...] = (*RECORD_RULES, *ANSWER_RULES, *STORAGE_RULES, *MOVE_RULES)


@dataclass(frozen=True, slots=True, kw_only=True)
class Quality:
    """The verdict on a test.

    Attributes
    ----------
    verdict : {"use", "use with care", "do not use"}
    findings : tuple of Caution
        Worst first; each ends with the one thing to do about it.
    """

    verdict: Verdict
    findings: tuple[Caution, ...]


def judge(log: Log, bumps: Sequence[Bump], *, sheet: LoopSheet | None = None) -> Quality:
    """Judge a bump test.

    Parameters
    ----------
    log : Log
    bumps : sequence of Bump
        As `find_bumps` gave them.
    sheet : LoopSheet or None
        For the declared ranges.

    Returns
    -------
    Quality
        "do not use" with any finding of level "stop", "use with care" with any of level "care".
    """
    facts = gather(log, tuple(bumps), sheet or LoopSheet())
    findings: list[Caution] = []
    for rule in RULES:
        if rule.needs_bumps and not facts.answers:
            continue
        found = rule.check(facts)
        if found is not None:
            level, value, limit, text = found
            findings.append(Caution(code=rule.code, level=level, text=text, value=value, limit=limit))
    levels = {f.level for f in findings}
    verdict: Verdict = "do not use" if "stop" in levels else "use with care" if "care" in levels else "use"
    return Quality(verdict=verdict, findings=worst_first(findings))
