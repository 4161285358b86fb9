"""Checks of the record: are these the right columns, who moved the CO, was it moved at all."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.signal import lfilter

from pipeline.testquality.facts import Facts
from pipeline.testquality.rule import PRACTICE, Found, Rule

if TYPE_CHECKING:
    from pipeline.intake.log import Log

#: Share of rows on which a CO must change before it looks like a controller's [1].
_BUSY = 0.2
#: Squared correlation from which the PV is the CO in another unit [1]: no measurement is that clean.
_SAME_SIGNAL = 0.9999
#: Share of rows on which a measured PV changes at the least, where a set point does not [1].
_MOVED_BY_HAND = 0.05
#: Share of rows on which an output that is moved by hand stands still, and on which a measured value does [1].
_HELD, _MOVES_ON = 0.95, 0.5
#: Correlation with what a lag makes of the steps from which one column follows another [1]; lags tried.
_FOLLOWS, _LAGS_TRIED = 0.95, 12
#: Rows from which columns can be told by what they do.
_FEWEST = 30
#: Shares of rows with two PVs for one time: care, stop [1].
_CONFLICTS_CARE, _CONFLICTS_STOP = 0.01, 0.10


def _wrong_column(facts: Facts) -> Found:
    """A PV that is the set point, or the CO itself in another unit, whatever its header says.

    A set point that tracks a measured PV in manual is usual and no fault.
    """
    log = facts.log
    known = np.isfinite(log.pv)
    pv, co = log.pv[known], log.co[known]
    if pv.size < 2 or np.ptp(pv) == 0.0:
        return None
    if log.sp is not None and float(np.mean(np.diff(pv) != 0.0)) < _MOVED_BY_HAND:
        same = float(np.mean(pv == log.sp[known]))
        if same > 0.99:
            return (
                "stop",
                same,
                0.99,
                (
                    f'The PV "{log.pv_column.name}" is the set point on {100.0 * same:.0f} % of the rows: '
                    "the wrong column was taken. Name the measured value with [columns] pv."
                ),
            )
    if np.ptp(co) == 0.0:
        return None
    square = float(np.corrcoef(pv, co)[0, 1]) ** 2
    if square <= _SAME_SIGNAL:
        return None
    return (
        "stop",
        square,
        _SAME_SIGNAL,
        (
            f'The PV "{log.pv_column.name}" does what the CO "{log.co_column.name}" does, row by row: it is '
            "the CO in another unit, or its feedback. Name the measured value with [columns] pv."
        ),
    )


def _swapped(facts: Facts) -> Found:
    """A PV that stands and steps like an output, and a CO that follows it like a measured value."""
    log = facts.log
    known = np.isfinite(log.pv)
    pv, co = log.pv[known], log.co[known]
    if pv.size < _FEWEST or np.ptp(pv) == 0.0 or np.ptp(co) == 0.0:
        return None
    if float(np.mean(np.diff(pv) == 0.0)) < _HELD or float(np.mean(np.diff(co) == 0.0)) > _MOVES_ON:
        return None
    followed = max(
        abs(float(np.corrcoef(lfilter([1.0 - a], [1.0, -a], pv - pv[0]), co)[0, 1]))
        for a in np.exp(-1.0 / np.geomspace(1.0, 0.2 * pv.size, _LAGS_TRIED))
    )
    if followed < _FOLLOWS:
        return None
    return (
        "stop",
        followed,
        _FOLLOWS,
        (
            f'The PV "{log.pv_column.name}" holds its level and steps, and the CO "{log.co_column.name}" follows '
            "it: PV and CO are swapped. Name them the other way round with [columns] pv and co."
        ),
    )


def _conflicts(facts: Facts) -> Found:
    """Many times that stand twice with different values: two sources were mixed."""
    count = sum(n.value or 0.0 for n in facts.log.notes if n.code == "duplicates-conflict")
    share = count / max(facts.log.rows, 1)
    if share <= _CONFLICTS_CARE:
        return None
    return (
        "stop" if share > _CONFLICTS_STOP else "care",
        share,
        _CONFLICTS_STOP if share > _CONFLICTS_STOP else _CONFLICTS_CARE,
        (
            f"{100.0 * share:.0f} % of the rows give a second, different value for a time that is already "
            "there: which one is true is unknown. Export one tag from one source."
        ),
    )


def _left_out(facts: Facts) -> Found:
    """Some moves are used and some are not."""
    out = [b for b in facts.bumps if not b.used]
    if not out or not facts.answers:
        return None
    return (
        "note",
        float(len(out)),
        0.0,
        (
            f"{len(out)} of {len(facts.bumps)} moves {'is' if len(out) == 1 else 'are'} left out: "
            f"{'; '.join(sorted({b.reason for b in out}))}. Look at them before you rely on the rest."
        ),
    )


def _constant_pv(facts: Facts) -> Found:
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


def _closed_loop(facts: Facts) -> Found:
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


def _no_move(facts: Facts) -> Found:
    log = facts.log
    if facts.bumps or _swapped(facts) is not None:
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


def _no_answer(facts: Facts) -> Found:
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


RECORD_RULES: tuple[Rule, ...] = (
    Rule(code="constant-pv", source=PRACTICE, check=_constant_pv, needs_bumps=False),
    Rule(code="closed-loop", source=PRACTICE, check=_closed_loop, needs_bumps=False),
    Rule(code="no-move", source=PRACTICE, check=_no_move, needs_bumps=False),
    Rule(code="no-usable-move", source=PRACTICE, check=_no_answer, needs_bumps=False),
    Rule(code="columns-swapped", source=PRACTICE, check=_swapped, needs_bumps=False),
    Rule(code="wrong-column", source=PRACTICE, check=_wrong_column, needs_bumps=False),
    Rule(code="conflicting-rows", source=PRACTICE, check=_conflicts, needs_bumps=False),
    Rule(code="moves-left-out", source=PRACTICE, check=_left_out),
)
