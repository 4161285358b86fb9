"""The table of checks on a test: each with its limit, where it comes from, and what to do."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from pipeline.findings import Level
from pipeline.testquality.facts import FEW, Facts

if TYPE_CHECKING:
    from pipeline.intake.log import Log

#: Share of rows on which a CO must change before it looks like a controller's [1].
_BUSY = 0.2
#: How near to the end of a declared range counts as at it, as a share of the span [1].
_AT_END = 0.002

#: Level, observed value, limit and sentence of a finding; None where there is nothing to say.
_Found = tuple[Level, float | None, float | None, str] | None


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
    check: Callable[[Facts], _Found]
    needs_bumps: bool = True


def _unit(facts: Facts) -> str:
    unit = facts.log.pv_column.unit
    return f" {unit}" if unit else ""


def _constant_pv(facts: Facts) -> _Found:
    if np.nanmax(facts.log.pv) > np.nanmin(facts.log.pv):
        return None
    return (
        "stop",
        0.0,
        None,
        (
            f'The PV "{facts.log.pv_column.name}" never changes. Check that the right column was '
            "exported and that the transmitter is alive."
        ),
    )


def _busy(log: Log) -> float:
    return float(np.mean(np.diff(log.co) != 0.0)) if log.co.size > 1 else 0.0


def _closed_loop(facts: Facts) -> _Found:
    """A set point that moves, with an output that is always at work, is a controller in automatic."""
    log = facts.log
    if log.automatic is not None and not any(b.used for b in facts.bumps):
        share = float(np.mean(log.automatic))
        if share > 0.5 or any("automatic" in b.reason for b in facts.bumps):
            return (
                "stop",
                share,
                0.0,
                (
                    "The test was taken in automatic, as its mode column says: feedback hides the "
                    "process. Put the controller in manual and move the CO by hand."
                ),
            )
    if log.sp is None or _busy(log) <= _BUSY:
        return None
    moved = np.flatnonzero(np.diff(log.sp) != 0.0)
    if moved.size == 0 or moved.size > 0.1 * log.sp.size:
        return None
    return (
        "stop",
        float(moved.size),
        0.0,
        (
            f"The log was taken in automatic: the set point moves {moved.size} "
            f"{'time' if moved.size == 1 else 'times'} and the CO works after it on "
            f"{100.0 * _busy(log):.0f} % of the rows. Put the controller in manual and move the CO by "
            "hand."
        ),
    )


def _no_move(facts: Facts) -> _Found:
    log = facts.log
    if facts.bumps:
        return None
    if float(np.ptp(log.co)) == 0.0:
        return (
            "stop",
            0.0,
            None,
            (
                f'The CO "{log.co_column.name}" is {log.co[0]:g} from the first row to the last: nothing '
                "was moved. Move it by one clean step and hold it."
            ),
        )
    busy = _busy(log)
    if busy > _BUSY:
        return (
            "stop",
            busy,
            _BUSY,
            (
                f"No deliberate move: the CO changes on {100.0 * busy:.0f} % of the rows and holds no "
                "level, as a controller under routine control makes it, and feedback can imitate a "
                "process. Put the controller in manual, move the CO by one clean step and hold it."
            ),
        )
    return (
        "stop",
        None,
        None,
        ("The CO only chatters around one level: nothing was moved. Move it by one clean step and hold it."),
    )


def _no_answer(facts: Facts) -> _Found:
    if not facts.bumps or facts.answers or _closed_loop(facts) is not None:
        return None
    reasons = sorted({b.reason for b in facts.bumps if not b.used}) or [
        "too few rows around the moves hold a PV"
    ]
    return (
        "stop",
        0.0,
        1.0,
        (
            f"None of the {len(facts.bumps)} moves can be used: {'; '.join(reasons)}. Repeat the test in "
            "manual with every row logged."
        ),
    )


def _small(facts: Facts) -> _Found:
    if facts.noise <= 0.0:
        return None
    ratio = facts.travel / facts.noise
    if ratio > 10.0:
        return None
    moved = max(abs(m.after - b.moves[0].before) for b in facts.bumps if b.used for m in b.moves)
    wanted = moved * 10.0 / max(ratio, 1.0)
    text = (
        f"The PV moved {facts.travel:.3g}{_unit(facts)} with noise of {facts.noise:.2g}{_unit(facts)}, a "
        f"ratio of {ratio:.1f}. Use a move of about {wanted:.2g} instead of {moved:.2g}, if the process "
        "allows it."
    )
    return ("stop", ratio, 5.0, text) if ratio < 5.0 else ("care", ratio, 10.0, text)


def _baseline(facts: Facts) -> _Found:
    first = facts.answers[0].bump
    at = first.moves[0].at_s
    rows = int(np.sum((facts.log.t >= first.start_s) & (facts.log.t < at) & np.isfinite(facts.log.pv)))
    if rows >= 30 or (rows >= 10 and at - first.start_s >= facts.rise_s):
        return None
    return (
        "care",
        float(rows),
        30.0,
        (
            f"Only {rows} rows ({at - first.start_s:.3g} s) before the first move: noise and drift are "
            "poorly known. Log at least 30 rows, and one time constant, before moving."
        ),
    )


def _drift(facts: Facts) -> _Found:
    """Straight line through the second half of the first baseline, carried over one rise."""
    first = facts.answers[0].bump
    at = first.moves[0].at_s
    use = (facts.log.t >= 0.5 * (first.start_s + at)) & (facts.log.t < at) & np.isfinite(facts.log.pv)
    n = int(use.sum())
    if n < 2 * FEW or facts.travel <= 0.0:
        return None
    x = facts.log.t[use] - facts.log.t[use].mean()
    y = facts.log.pv[use] - facts.log.pv[use].mean()
    slope = float(x @ y) / float(x @ x)
    rest = y - slope * x
    error = float(np.sqrt(rest @ rest / (n - 2) / (x @ x)))
    share = abs(slope) * max(facts.rise_s, at - first.start_s) / facts.travel
    # four standard errors: slow noise makes them too small by about two
    if share <= 0.05 or abs(slope) <= 4.0 * error:
        return None
    return (
        "care",
        share,
        0.05,
        (
            f"The PV was not steady before the first move: it went on by {100.0 * share:.0f} % of its "
            "later answer over the same time. The fit takes a straight drift out; wait for a steady PV "
            "before the next test."
        ),
    )


def _gap(facts: Facts) -> _Found:
    known = np.isfinite(facts.log.pv)
    t = facts.log.t[known]
    holes = np.diff(t)
    worst = 0.0
    for a in facts.answers:
        at = a.bump.moves[0].at_s
        near = (t[1:] > at) & (t[:-1] < at + 2.0 * a.rise_s)
        worst = max(worst, float(np.max(holes[near], initial=0.0)))
    limit = max(0.25 * facts.rise_s, 5.0 * facts.log.interval)
    if worst <= limit:
        return None
    text = (
        f"No PV for {worst:.3g} s while it was answering a move (63 % of the answer takes "
        f"{facts.rise_s:.3g} s): the dead time is unknown by that much. Export again without gaps."
    )
    return ("stop" if worst > max(facts.rise_s, limit) else "care"), worst, limit, text


def _samples(facts: Facts) -> _Found:
    rows = float(np.median([a.rise_rows for a in facts.answers]))
    if rows >= 8.0:
        return None
    return (
        ("stop" if rows < 3.0 else "care"),
        rows,
        8.0,
        (
            f"Only {rows:.0f} rows lie on the rise of the PV, logged every {facts.log.interval:.3g} s. "
            "Log faster: at least 8 rows on the rise."
        ),
    )


def _quantised(facts: Facts) -> _Found:
    if facts.travel <= 0.0 or facts.resolution <= 0.0:
        return None
    # all bumps are fitted together, and the largest answer tells most
    share = facts.resolution / max(a.travel for a in facts.answers)
    if share < 0.01:
        return None
    return (
        ("stop" if share > 0.10 else "care"),
        share,
        0.01,
        (
            f"The PV is stored in steps of {facts.resolution:.3g}{_unit(facts)}, {100.0 * share:.1f} % "
            "of its largest answer. Export with more digits, or make a larger move."
        ),
    )


def _pv_at_end(facts: Facts) -> _Found:
    span, low, high = facts.sheet.pv.span, facts.sheet.pv.low, facts.sheet.pv.high
    if span is None or low is None or high is None:
        return None
    pv = facts.log.pv
    at = (pv <= low + _AT_END * span) | (pv >= high - _AT_END * span)
    rows = sum(
        int(np.sum(at & (facts.log.t >= a.bump.moves[0].at_s) & (facts.log.t <= a.bump.end_s)))
        for a in facts.answers
    )
    if rows < 2:
        return None
    return (
        "stop",
        float(rows),
        1.0,
        (
            f"The PV lies at the end of its range ({low:g} to {high:g}{_unit(facts)}) on {rows} rows "
            "after a move: the transmitter, not the process, made that part. Make a smaller move in the "
            "middle of the range."
        ),
    )


def _co_at_end(facts: Facts) -> _Found:
    co, limits = facts.sheet.co, facts.sheet.limits
    low = limits.co_low if limits.co_low is not None else co.low
    high = limits.co_high if limits.co_high is not None else co.high
    levels = [m.after for a in facts.answers for m in a.bump.moves]
    ends = [v for v in levels if (low is not None and v <= low) or (high is not None and v >= high)]
    if not ends:
        return None
    return (
        "care",
        ends[0],
        low if low is not None and ends[0] <= low else high,
        (
            f"The CO was moved to the end of its range ({ends[0]:g}), where a final element often does "
            "not follow. Repeat the test between 10 and 90 % of the range."
        ),
    )


def _frozen(facts: Facts) -> _Found:
    """A run of equal values far longer than the others, after a move, in a PV that otherwise changes."""
    known = np.isfinite(facts.log.pv)
    t, pv = facts.log.t[known], facts.log.pv[known]
    edges = np.flatnonzero(np.concatenate([[True], np.diff(pv) != 0.0, [True]]))
    runs = np.diff(edges)
    typical = float(np.percentile(runs, 90.0))
    for a in facts.answers:
        at = a.bump.moves[0].at_s
        starts = t[edges[:-1]]
        inside = (starts > at) & (starts < at + 2.0 * a.rise_s)
        if not np.any(inside):
            continue
        longest = int(np.max(runs[inside]))
        if longest >= 10 and longest > 8.0 * typical:
            return (
                "stop",
                float(longest),
                8.0 * typical,
                (
                    f"The PV stands still for {longest} rows while it was answering the move at {at:.6g} "
                    "s: the signal was frozen. Check the transmitter and the logger, and repeat the "
                    "test."
                ),
            )
    return None


def _short_hold(facts: Facts) -> _Found:
    short = [a for a in facts.answers if a.bump.end_s - a.bump.moves[-1].at_s < 10.0 * facts.log.interval]
    if short and len(short) == len(facts.answers):
        return (
            "stop",
            10.0,
            10.0,
            (
                "No move is held for 10 rows: the answer cannot be seen. Hold the CO until the PV has "
                "settled or its slope is plain."
            ),
        )
    late = float(np.median([a.late for a in facts.answers]))
    if late <= 0.10:
        return None
    return (
        "note",
        late,
        0.10,
        (
            f"The PV was still moving when the holds ended ({100.0 * late:.0f} % of its way in the last "
            "fifth). If the process does not integrate, hold longer to know its gain."
        ),
    )


_PRACTICE = "common practice"
RULES: tuple[Rule, ...] = (
    Rule(code="constant-pv", source=_PRACTICE, check=_constant_pv, needs_bumps=False),
    Rule(code="closed-loop", source=_PRACTICE, check=_closed_loop, needs_bumps=False),
    Rule(code="no-move", source=_PRACTICE, check=_no_move, needs_bumps=False),
    Rule(code="no-usable-move", source=_PRACTICE, check=_no_answer, needs_bumps=False),
    Rule(
        code="small-move",
        source="PV move over noise: above 10 good, below 5 poor (common practice)",
        check=_small,
    ),
    Rule(
        code="short-baseline", source="30 to 50 rows and one time constant (common practice)", check=_baseline
    ),
    Rule(code="drifting-baseline", source="below 5 % of the PV move (common practice)", check=_drift),
    Rule(
        code="gap-on-rise", source="no hole longer than a quarter of the rise (common practice)", check=_gap
    ),
    Rule(code="few-samples", source="8 to 10 points on the rise (common practice)", check=_samples),
    Rule(
        code="quantised-pv",
        source="below 1 % of the PV move good, above 10 % poor (common practice)",
        check=_quantised,
    ),
    Rule(code="pv-at-range-end", source=_PRACTICE, check=_pv_at_end),
    Rule(code="co-at-range-end", source="stay inside 10 to 90 % (common practice)", check=_co_at_end),
    Rule(code="frozen-pv", source=_PRACTICE, check=_frozen),
    Rule(code="short-hold", source="settled, or the slope plain (common practice)", check=_short_hold),
)
