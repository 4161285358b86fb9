"""Checks of the answer: its size, what came before it, how it was recorded, how long it was watched."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from pipeline.findings import Level
from pipeline.testquality.facts import FEW, Answer, Facts, straight_line
from pipeline.testquality.rule import PRACTICE, Found, Rule, unit_of

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: PV move over noise: good, and poor [1].
_RATIO_GOOD, _RATIO_POOR = 10.0, 5.0
#: Rows before the first move; enough where they also last one rise [rows].
_BASELINE_ROWS, _BASELINE_FEWEST = 30, 10
#: Drift over one rise or the baseline's length, as a share of the PV move [1].
_DRIFT_SHARE = 0.05
#: Longest hole on the rise, as a share of it, and in rows for a log that is coarse anyway [1].
_GAP_SHARE, _GAP_ROWS = 0.25, 5.0
#: A hole that begins below the first share of an answer and ends above the second one hides its rise [1].
_HIDDEN = (0.2, 0.63)
#: Rows on the rise: enough, and too few for any fit [rows].
_RISE_ROWS, _RISE_FEWEST = 8.0, 3.0
#: Resolution as a share of the PV move: care, stop [1].
_STEP_SHARE_CARE, _STEP_SHARE_STOP = 0.01, 1.0 / 3.0
#: How near to the end of a declared range counts as at it, as a share of the span [1].
_AT_END = 0.002
#: Rows that may be equal by chance, and how many times the usual run is too many [1].
_FROZEN_ROWS, _FROZEN_RUNS = 9, 8.0
#: Shortest hold [rows]; share of the travel in the last fifth of a hold that has not settled [1].
_HOLD_ROWS, _LATE_SHARE = 10.0, 0.10
#: A hold shorter than the dead time and so many lags, on a process whose dead time is at least this share of
#: its lags, leaves them mixed [1]; how much longer to hold next time [1].
_HOLD_LAGS, _HOLD_DEAD, _HOLD_WANTED = 1.0, 0.25, 3.0


def _small(facts: Facts) -> Found:
    """The answer against the noise; with a drift, against where the drift was going by itself."""
    if facts.noise <= 0.0:
        return None
    # a line drawn on from slow noise leads far away: no answer is larger than the PV's largest travel
    largest = max(a.travel for a in facts.answers) / facts.noise
    ratio = float(np.median([min(a.over_noise, largest) for a in facts.answers]))
    if ratio >= _RATIO_GOOD:
        return None
    poor = ratio < _RATIO_POOR
    level: Level = "stop" if poor else "care"
    limit = _RATIO_POOR if poor else _RATIO_GOOD
    unit = unit_of(facts)
    moved = max(abs(m.after - b.moves[0].before) for b in facts.bumps if b.used for m in b.moves)
    wanted = moved * _RATIO_GOOD / max(ratio, 1.0)
    advice = f"Use a move of about {wanted:.2g} instead of {moved:.2g}, if the process allows it."
    if facts.travel > _RATIO_GOOD * facts.noise:
        text = (
            f"The PV went {facts.travel:.3g}{unit}, but little of that is an answer: it was on its way before "
            f"the move and went on the same way, a change of {ratio:.1f} times the noise. Wait for a steady PV. "
        )
    else:
        text = (
            f"The PV moved {facts.travel:.3g}{unit} with noise of {facts.noise:.2g}{unit}, a ratio of "
            f"{ratio:.1f}. "
        )
    return level, ratio, limit, text + advice


def _baseline(facts: Facts) -> Found:
    first = facts.answers[0].bump
    at = first.moves[0].at_s
    rows = int(np.sum((facts.log.t >= first.start_s) & (facts.log.t < at) & np.isfinite(facts.log.pv)))
    if rows >= _BASELINE_ROWS or (rows >= _BASELINE_FEWEST and at - first.start_s >= facts.rise_s):
        return None
    return (
        "care",
        float(rows),
        float(_BASELINE_ROWS),
        (
            f"Only {rows} rows ({at - first.start_s:.3g} s) before the first move: noise and drift are "
            "poorly known. Log at least 30 rows, and one time constant, before moving."
        ),
    )


def _drift(facts: Facts) -> Found:
    """Straight line through the second half of the first baseline, carried over one rise."""
    first = facts.answers[0].bump
    known = np.isfinite(facts.log.pv)
    line = straight_line(facts.log.t[known], facts.log.pv[known], first)
    if line is None or not line.clear or facts.travel <= 0.0:
        return None
    share = abs(line.slope) * max(facts.rise_s, first.moves[0].at_s - first.start_s) / facts.travel
    if share <= _DRIFT_SHARE:
        return None
    return (
        "care",
        share,
        _DRIFT_SHARE,
        (
            f"The PV was not steady before the first move: it went on by {100.0 * share:.0f} % of its "
            "later answer over the same time. The fit takes a straight drift out; wait for a steady PV "
            "before the next test."
        ),
    )


def _gap(facts: Facts) -> Found:
    known = np.isfinite(facts.log.pv)
    t = facts.log.t[known]
    holes = np.diff(t)
    worst = 0.0
    whole = False
    for a in facts.answers:
        at = a.bump.moves[0].at_s
        whole |= _hides_rise(t, facts.log.pv[known], a)
        near = (t[1:] > at) & (t[:-1] < at + 2.0 * a.rise_s)
        worst = max(worst, float(np.max(holes[near], initial=0.0)))
    limit = max(_GAP_SHARE * facts.rise_s, _GAP_ROWS * facts.log.interval)
    if worst <= limit and not whole:
        return None
    text = (
        f"No PV for {worst:.3g} s while it was answering a move (63 % of the answer takes "
        f"{facts.rise_s:.3g} s): the dead time is unknown by that much. Export again without gaps."
    )
    return ("stop" if whole or worst > max(facts.rise_s, limit) else "care"), worst, limit, text


def _hides_rise(t: NDArray[np.float64], pv: NDArray[np.float64], answer: Answer) -> bool:
    """Tell whether one hole lies between the start of an answer and most of it."""
    hold = np.flatnonzero((t >= answer.bump.moves[0].at_s) & (t <= answer.bump.end_s))
    if hold.size < FEW or answer.travel <= 0.0:
        return False
    share = np.abs(pv[hold] - answer.before) / answer.travel
    holes = np.diff(t[hold])
    wide = holes > _GAP_ROWS * float(np.median(holes))
    return bool(np.any(wide & (share[:-1] < _HIDDEN[0]) & (share[1:] > _HIDDEN[1])))


def _samples(facts: Facts) -> Found:
    rows = float(np.median([a.rise_rows for a in facts.answers]))
    if rows >= _RISE_ROWS:
        return None
    return (
        ("stop" if rows < _RISE_FEWEST else "care"),
        rows,
        _RISE_ROWS,
        (
            f"Only {rows:.0f} rows lie on the rise of the PV, logged every {facts.log.interval:.3g} s. "
            "Log faster: at least 8 rows on the rise."
        ),
    )


def _quantised(facts: Facts) -> Found:
    if facts.travel <= 0.0 or facts.resolution <= 0.0:
        return None
    # all bumps are fitted together, and the largest answer tells most
    share = facts.resolution / max(a.travel for a in facts.answers)
    if share < _STEP_SHARE_CARE:
        return None
    return (
        ("stop" if share > _STEP_SHARE_STOP else "care"),
        share,
        _STEP_SHARE_STOP if share > _STEP_SHARE_STOP else _STEP_SHARE_CARE,
        (
            f"The PV is stored in steps of {facts.resolution:.3g}{unit_of(facts)}, {100.0 * share:.1f} % "
            "of its largest answer. Export with more digits, or make a larger move."
        ),
    )


def _pv_at_end(facts: Facts) -> Found:
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
            f"The PV lies at the end of its range ({low:g} to {high:g}{unit_of(facts)}) on {rows} rows "
            "after a move: the transmitter, not the process, made that part. Make a smaller move in the "
            "middle of the range."
        ),
    )


def _co_at_end(facts: Facts) -> Found:
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


def _frozen(facts: Facts) -> Found:
    """A run of equal values far longer than the others, over a rise, in a PV that otherwise changes.

    A run that began before the move counts if the PV was alive before it and jumped after it: a
    quiet PV waiting out its dead time does neither.
    """
    known = np.isfinite(facts.log.pv)
    t, pv = facts.log.t[known], facts.log.pv[known]
    edges = np.flatnonzero(np.concatenate([[True], np.diff(pv) != 0.0, [True]]))
    begins, runs = edges[:-1], np.diff(edges)
    limit = max(_FROZEN_ROWS, _FROZEN_RUNS * float(np.percentile(runs, 90.0)))
    jump = np.append(np.abs(np.diff(pv[begins])), 0.0)
    for a in facts.answers:
        at = a.bump.moves[0].at_s
        start, end = t[begins], t[edges[1:] - 1]
        after = (start > at) & (start < at + 2.0 * a.rise_s)
        alive = begins >= np.searchsorted(t, a.bump.start_s) + _FROZEN_ROWS
        across = (start <= at) & (end > at) & alive & (jump > _RATIO_POOR * facts.noise)
        rows = int(np.max(runs[after | across], initial=0))
        if rows > limit:
            return (
                "stop",
                float(rows),
                limit,
                (
                    f"The PV stands still for {rows} rows around the move at {at:.6g} s: the signal was "
                    "frozen. Check the transmitter and the logger, and repeat the test."
                ),
            )
    return None


def _too_short(facts: Facts) -> Found:
    """A hold that ends while dead time and lag can still be traded for each other."""
    shape = facts.shape
    if shape is None:
        return None
    holds = [a.bump.end_s - a.bump.moves[-1].at_s for a in facts.answers]
    hold = float(np.max(holds))
    needed = shape.dead_time_s + _HOLD_LAGS * shape.order * shape.lag_s
    if shape.dead_time_s < _HOLD_DEAD * shape.order * shape.lag_s or hold >= needed:
        return None
    return (
        "care",
        hold,
        needed,
        (
            f"The moves are held for {hold:.3g} s, with a dead time near {shape.dead_time_s:.2g} s: too short to "
            f"tell dead time, lag and gain apart. Repeat and hold for {_HOLD_WANTED * needed:.2g} s."
        ),
    )


def _short_hold(facts: Facts) -> Found:
    short = [
        a for a in facts.answers if a.bump.end_s - a.bump.moves[-1].at_s < _HOLD_ROWS * facts.log.interval
    ]
    if short and len(short) == len(facts.answers):
        return (
            "stop",
            float(np.median([(a.bump.end_s - a.bump.moves[-1].at_s) / facts.log.interval for a in short])),
            _HOLD_ROWS,
            (
                "No move is held for 10 rows: the answer cannot be seen. Hold the CO until the PV has "
                "settled or its slope is plain."
            ),
        )
    late = float(np.median([a.late for a in facts.answers]))
    if late <= _LATE_SHARE:
        return None
    return (
        "note",
        late,
        _LATE_SHARE,
        (
            f"The PV was still moving when the holds ended ({100.0 * late:.0f} % of its way in the last "
            "fifth). If the process does not integrate, hold longer to know its gain."
        ),
    )


ANSWER_RULES: tuple[Rule, ...] = (
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
        source="below 1 % of the PV move good (common practice); a fit still holds at a fifth, not at two fifths",
        check=_quantised,
    ),
    Rule(code="pv-at-range-end", source=PRACTICE, check=_pv_at_end),
    Rule(code="co-at-range-end", source="stay inside 10 to 90 % (common practice)", check=_co_at_end),
    Rule(code="frozen-pv", source=PRACTICE, check=_frozen),
    Rule(
        code="hold-too-short",
        source="three to five lags after the dead time (common practice)",
        check=_too_short,
    ),
    Rule(code="short-hold", source="settled, or the slope plain (common practice)", check=_short_hold),
)
