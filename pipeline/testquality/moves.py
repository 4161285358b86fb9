"""Checks across the moves: is each answered after it was made, alike, and by nothing else."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from pipeline.testquality.facts import Answer, Facts
from pipeline.testquality.load import find_load
from pipeline.testquality.rule import PRACTICE, Found, Rule
from pipeline.testquality.shape import Shape

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: Share of the answer the PV may have made before the move, and standard errors that make it clear [1].
_EARLY_SHARE, _EARLY_CLEAR = 0.03, 4.0
#: Share of the answer by which the PV may go on before the move, for a level to be drawn on from it [1].
_EARLY_STEADY = 0.05
#: Share of the moves that must show it [1].
_EARLY_MOVES = 0.6
#: Part of a rise before the move that is looked at, and rows averaged in it.
_EARLY_RISES, _EARLY_ROWS = 0.3, 3
#: Size of a disturbance as a share of the answer: care, stop [1]: a fifth costs a quarter of the gain.
_LOAD_CARE, _LOAD_STOP = 0.10, 0.75
#: Share of what the moves leave over that a load step must not leave [1].
_LOAD_LEAVES = 0.9
#: Share of the PV that the moves must explain before the rest is looked at [1].
_EXPLAINED = 0.8
#: Gain of a reversal over the gain of a move that goes on, below which there is a dead band [1].
_REVERSAL = 0.8
#: Largest over smallest gain of the moves: 1.25 is good (common practice) and the look is good to a tenth [1].
_GAINS_APART = 1.375
#: Standard errors between two gains that make them different [1].
_GAINS_CLEAR = 5.0
#: Share of the usual gain below which a move was not answered, and above which another jumped [1].
_STUCK, _JUMPED = 0.25, 1.5


def _early(facts: Facts) -> Found:
    """The answer begins before the move: PV and CO were stamped by two clocks."""
    looked = [e for a in facts.answers for e in [_before(facts, a)] if e is not None]
    if not looked:
        return None
    early = [share for share, _ in looked if share > _EARLY_SHARE]
    clear = sum(clear for _, clear in looked) / np.sqrt(len(looked))
    if len(early) < _EARLY_MOVES * len(looked) or clear < _EARLY_CLEAR:
        return None
    share = float(np.median(early))
    return (
        "stop",
        share,
        _EARLY_SHARE,
        (
            f"The PV has made {100.0 * share:.0f} % of its answer before the move is logged: CO and PV were "
            "stamped by different clocks, and the dead time cannot be found. Log both with one clock."
        ),
    )


def _before(facts: Facts, answer: Answer) -> tuple[float, float] | None:
    """Share of the answer made in the last rows before the move, and its size in standard errors."""
    known = np.isfinite(facts.log.pv)
    t, pv = facts.log.t[known], facts.log.pv[known]
    at = answer.bump.moves[0].at_s
    window = _EARLY_RISES * answer.rise_s
    # on the row before the move the CO still was the old one, so the PV knew nothing of the new
    last = np.flatnonzero((t < at) & (t >= at - window))[-_EARLY_ROWS:]
    base = np.flatnonzero((t < at - 2.0 * window) & (t >= max(answer.bump.start_s, at - 6.0 * window)))
    if last.size < 2 or base.size < 8 or answer.travel <= 0.0 or facts.noise <= 0.0:
        return None
    middle = float(t[base].mean())
    x = t[base] - middle
    slope = float(x @ pv[base]) / float(x @ x)
    # the tail of an earlier answer is no straight line
    if abs(slope) * 6.0 * window > _EARLY_STEADY * answer.travel:
        return None
    ahead = float(t[last].mean()) - middle
    excess = float(pv[last].mean()) - float(pv[base].mean()) - slope * ahead
    error = facts.noise * np.sqrt(1.0 / last.size + 1.0 / base.size + ahead**2 / float(x @ x))
    after = pv[(t >= at) & (t <= at + 2.0 * answer.rise_s)]
    way = np.sign(float(after[-1]) - answer.before) if after.size else 0.0
    return way * excess / answer.travel, way * excess / float(error)


def _load(facts: Facts) -> Found:
    """A load step and one gain for all moves explain the PV far better than a gain for each move."""
    shape = facts.shape
    if shape is None or shape.gains.size < 2 or facts.travel <= 0.0:
        return None
    used = [a.bump for a in facts.answers][: shape.gains.size]
    step = find_load(shape.t, shape.seen, used, facts.rise_s)
    if step is None or step.squares > _LOAD_LEAVES * float(shape.left @ shape.left):
        return None
    share = abs(step.size) / facts.travel
    if share < _LOAD_CARE:
        return None
    stop = share > _LOAD_STOP
    return (
        "stop" if stop else "care",
        share,
        _LOAD_STOP if stop else _LOAD_CARE,
        (
            f"Something other than the CO moved the PV by about {100.0 * share:.0f} % of an answer near "
            f"{step.at_s:.6g} s. Find out what it was, and repeat the test without it."
        ),
    )


def _usable(facts: Facts) -> tuple[Shape, NDArray[np.bool_]] | None:
    """Give the look and the gains that are well enough known to be compared, as a mask."""
    shape = facts.shape
    if shape is None or shape.explained < _EXPLAINED or shape.gains.size < 2:
        return None
    usual = float(np.median(np.abs(shape.gains)))
    known = shape.errors < 0.1 * usual
    return (shape, known) if int(known.sum()) >= 2 else None


def _dead_band(facts: Facts) -> Found:
    """Moves that turn round are answered less than moves that go on the same way."""
    usable = _usable(facts)
    if usable is None:
        return None
    shape, known = usable
    ways = np.sign(shape.sizes)
    turns = np.concatenate([[False], ways[1:] != ways[:-1]])
    goes_on = np.concatenate([[False], ways[1:] == ways[:-1]])
    turned, ahead = known & turns, known & goes_on
    if not np.any(turned) or not np.any(ahead):
        return None
    gain_turned, gain_ahead = float(np.median(shape.gains[turned])), float(np.median(shape.gains[ahead]))
    error = float(np.hypot(np.median(shape.errors[turned]), np.median(shape.errors[ahead])))
    ratio = gain_turned / gain_ahead if gain_ahead else 1.0
    if ratio >= _REVERSAL or abs(gain_ahead - gain_turned) < _GAINS_CLEAR * error:
        return None
    band = (1.0 - ratio) * float(np.median(np.abs(shape.sizes[turned])))
    return (
        "care",
        ratio,
        _REVERSAL,
        (
            f"Moves that turn round are answered with {100.0 * ratio:.0f} % of the gain of moves that go on: a "
            f"dead band of about {band:.2g} in the CO. Look for play in valve, damper or linkage before tuning."
        ),
    )


def _sticks(facts: Facts) -> Found:
    """One move is not answered at all and a later one too much: the final element sticks and jumps."""
    usable = _usable(facts)
    if usable is None or usable[0].gains.size < 3:
        return None
    shape, known = usable
    gains = shape.gains[known]
    if gains.size < 3:
        return None
    usual = float(np.mean(gains))
    stuck = gains / usual < _STUCK
    if not np.any(stuck) or float(np.max(gains / usual)) < _JUMPED * float(np.mean(gains / usual)):
        return None
    return (
        "stop",
        float(stuck.sum()),
        0.0,
        (
            f"{int(stuck.sum())} of {gains.size} moves had no answer and another was answered too much: the final "
            "element sticks and jumps. Have it repaired and checked before tuning."
        ),
    )


def _apart(facts: Facts) -> Found:
    """The moves are answered with different gains."""
    usable = _usable(facts)
    if usable is None:
        return None
    shape, known = usable
    gains, errors = shape.gains[known], shape.errors[known]
    low, high = int(np.argmin(np.abs(gains))), int(np.argmax(np.abs(gains)))
    apart = abs(gains[high] - gains[low])
    ratio = float(abs(gains[high]) / max(abs(gains[low]), 1e-300))
    if ratio < _GAINS_APART or apart < _GAINS_CLEAR * float(np.hypot(errors[low], errors[high])):
        return None
    return (
        "care",
        min(ratio, 1e6),
        _GAINS_APART,
        (
            f"The moves are answered with gains from {abs(gains[low]):.3g} to {abs(gains[high]):.3g}: the process "
            "differs with level or direction. Make smaller moves around the working point, up and down."
        ),
    )


MOVE_RULES: tuple[Rule, ...] = (
    Rule(code="answer-before-move", source=PRACTICE, check=_early),
    Rule(
        code="load-disturbance", source="none, small, comparable to the move (common practice)", check=_load
    ),
    Rule(code="sticking", source=PRACTICE, check=_sticks),
    Rule(
        code="dead-band", source="gain up over gain down 0.8 to 1.25 good (common practice)", check=_dead_band
    ),
    Rule(
        code="moves-differ", source="gain up over gain down 0.8 to 1.25 good (common practice)", check=_apart
    ),
)
