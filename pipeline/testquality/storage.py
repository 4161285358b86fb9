"""Checks of how the PV came into the file: cycling, smoothed, joined by lines, stored on change, with spikes."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from pipeline.testquality.facts import Facts
from pipeline.testquality.rule import PRACTICE, Found, Rule, unit_of
from pipeline.testquality.shape import spikes

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: Amplitude of a cycle as a share of the answer: care, stop [1].
_CYCLE_CARE, _CYCLE_STOP = 0.03, 0.10
#: Share of the baseline's variance a cycle must explain [1], and the cycles that must be seen.
_CYCLE_EXPLAINS, _CYCLES = 0.6, 2.5
#: Shortest period that is a cycle of the loop and no noise, in rises and in rows [1].
_CYCLE_RISES, _CYCLE_ROWS = 0.3, 6.0
#: Rows of a baseline from which a cycle or a filter can be told [rows]; periods tried.
_CYCLE_FEWEST, _PERIODS = 24, 80
#: Correlation of neighbouring rows above which noise was smoothed [1], and rows that show it [rows].
_SMOOTH, _SMOOTH_ROWS = 0.8, 50
#: Share of the moving rows on straight lines: care, stop [1].
_JOINED_CARE, _JOINED_STOP = 0.10, 0.30
#: Resolutions by which neighbours must differ to be moving, and may miss their line [1].
_JOINED_MOVING, _JOINED_OFF = 4.0, 1.05
#: Rows in line that are no chance, moving rows that show it, and lines beyond one a move that an archive makes.
_JOINED_RUN, _JOINED_FEWEST, _JOINED_CORNERS = 3, 10, 2
#: Share of rows that repeat the one before in a PV stored on change [1].
_HELD = 0.5
#: Smallest usual change over the median one: no small changes are stored [1].
_NO_SMALL = 0.5
#: Change stored at the least, as a share of the answer, from which it matters [1].
_ON_CHANGE = 0.01
#: Widest row spacing over the narrowest (90th and 10th percentile) of a log that is not scanned [1].
_UNEVEN = 3.0
#: Share of rows that are spikes from which they are more than a nuisance [1].
_MANY_SPIKES = 0.02
#: Levels of a current signal that mean failure [mA]: NAMUR NE 43, at or below 3.6 and at or above 21.
_FAILED = (3.6, 21.0)
#: Share of blank cells while the PV answers: care, stop [1].
_BAD_CARE, _BAD_STOP = 0.05, 0.25


def _first_baseline(facts: Facts) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    bump = facts.answers[0].bump
    known = np.isfinite(facts.log.pv)
    t, pv = facts.log.t[known], facts.log.pv[known]
    clean = (t >= bump.start_s) & (t < bump.moves[0].at_s) & ~spikes(pv, facts.noise)
    return t[clean], pv[clean]


def _cycle(t: NDArray[np.float64], y: NDArray[np.float64], shortest: float) -> tuple[float, float, float]:
    """Find the strongest cycle: its amplitude, its period [s] and the share of the variance it explains."""
    longest = (t[-1] - t[0]) / _CYCLES
    if longest <= shortest:
        return 0.0, 0.0, 0.0
    line = np.column_stack([np.ones(t.size), t - t.mean()])
    q, _ = np.linalg.qr(line)
    y = y - q @ (q.T @ y)
    whole = max(float(y @ y), 1e-300)
    best = (0.0, 0.0, 0.0)
    for period in np.geomspace(shortest, longest, _PERIODS):
        phase = 2.0 * np.pi * (t - t[0]) / period
        wave = np.column_stack([np.cos(phase), np.sin(phase)])
        wave = wave - q @ (q.T @ wave)
        solved, *_ = np.linalg.lstsq(wave, y, rcond=None)
        explained = float(np.sum((wave @ solved) ** 2)) / whole
        if explained > best[2]:
            best = (float(np.hypot(*solved)), float(period), explained)
    return best


def _oscillation(facts: Facts) -> Found:
    """A cycle before the first move that goes on afterwards: something else moves the process."""
    t, pv = _first_baseline(facts)
    if t.size < _CYCLE_FEWEST or facts.travel <= 0.0:
        return None
    shortest = max(_CYCLE_RISES * facts.rise_s, _CYCLE_ROWS * facts.log.interval)
    amplitude, period, explained = _cycle(t, pv, shortest)
    share = amplitude / facts.travel
    if explained < _CYCLE_EXPLAINS or share < _CYCLE_CARE:
        return None
    stop = share > _CYCLE_STOP
    return (
        "stop" if stop else "care",
        share,
        _CYCLE_STOP if stop else _CYCLE_CARE,
        (
            f"The PV cycles every {period:.3g} s before the first move, by {100.0 * share:.0f} % of its answer to "
            "either side. Find the cause first (a sticking valve, another loop, the tuning of this one)."
        ),
    )


def _smooth(facts: Facts) -> Found:
    """Noise whose neighbours agree was filtered on its way, unless the sheet says by how much."""
    if facts.sheet.controller.pv_filter_s is not None:
        return None
    t, pv = _first_baseline(facts)
    if t.size < _SMOOTH_ROWS or facts.resolution > 0.5 * facts.noise:
        return None
    q, _ = np.linalg.qr(np.column_stack([np.ones(t.size), t - t.mean(), (t - t.mean()) ** 2]))
    y = pv - q @ (q.T @ pv)
    along = float(y[1:] @ y[:-1]) / max(float(y @ y), 1e-300)
    if along < _SMOOTH:
        return None
    return (
        "care",
        along,
        _SMOOTH,
        (
            "The PV is smoother than a measurement usually is: there may be a filter in the transmitter, the "
            "input or the logger that the controller does not have. Find it and give [controller] pv_filter_s."
        ),
    )


def _joined(facts: Facts) -> Found:
    """Rows that lie exactly on lines between a few corners: an archive stored only the corners."""
    known = np.isfinite(facts.log.pv)
    t, pv = facts.log.t[known], facts.log.pv[known]
    if pv.size < 30 or facts.resolution <= 0.0:
        return None
    share_of_way = (t[1:-1] - t[:-2]) / (t[2:] - t[:-2])
    off = np.abs(pv[1:-1] - pv[:-2] - share_of_way * (pv[2:] - pv[:-2]))
    steps = np.abs(np.diff(pv))
    moving = np.minimum(steps[1:], steps[:-1]) > _JOINED_MOVING * facts.resolution
    # a row or two lie on a line by chance
    on_line = _in_runs(moving & (off <= _JOINED_OFF * facts.resolution), _JOINED_RUN)
    corners = int(np.sum(np.diff(on_line.astype(int)) < 0))
    if int(moving.sum()) < _JOINED_FEWEST or corners < _JOINED_CORNERS + sum(
        len(b.moves) for b in facts.bumps
    ):
        return None
    share = float(on_line.sum()) / float(moving.sum())
    if share < _JOINED_CARE:
        return None
    stop = share > _JOINED_STOP
    return (
        "stop" if stop else "care",
        share,
        _JOINED_STOP if stop else _JOINED_CARE,
        (
            f"{100.0 * share:.0f} % of the moving PV rows lie exactly on straight lines: an archive stored "
            "few points and joined them, so dead time and gain are unknown. Export the raw values of the test."
        ),
    )


def _in_runs(marks: NDArray[np.bool_], shortest: int) -> NDArray[np.bool_]:
    """Keep the marks that stand in runs of at least so many."""
    edges = np.flatnonzero(np.diff(np.concatenate([[0], marks.astype(np.int8), [0]])))
    kept = np.zeros(marks.size, dtype=bool)
    for begin, end in zip(edges[::2], edges[1::2], strict=True):
        if end - begin >= shortest:
            kept[begin:end] = True
    return kept


def _on_change(facts: Facts) -> Found:
    """No small change of the PV was ever stored: an archive or gateway waits for a larger one."""
    known = np.isfinite(facts.log.pv)
    t, pv = facts.log.t[known], facts.log.pv[known]
    steps = np.abs(np.diff(pv))
    # a change of the CO may have its row stored whatever the PV did
    real = steps[(steps > 0.0) & (np.diff(facts.log.co[known]) == 0.0)]
    if real.size < 10 or facts.travel <= 0.0:
        return None
    held = float(np.mean(steps == 0.0))
    spacing = np.percentile(np.diff(t), [10.0, 90.0])
    uneven = float(spacing[1]) > _UNEVEN * float(spacing[0])
    small = float(np.percentile(real, 5.0))
    # steps of one size are a coarse PV, which is said elsewhere; these have all sizes above the smallest
    coarse = small < 3.0 * facts.resolution
    if coarse or not (held > _HELD or uneven) or small < _NO_SMALL * float(np.median(real)):
        return None
    share = small / facts.travel
    if share < _ON_CHANGE:
        return None
    return (
        "care",
        share,
        _ON_CHANGE,
        (
            f"The PV was stored only when it had changed by {small:.3g}{unit_of(facts)}, {100.0 * share:.0f} % of "
            "its answer: what it did in between is unknown. Export raw values, with no exception limit on the tag."
        ),
    )


def _spiked(facts: Facts) -> Found:
    known = np.isfinite(facts.log.pv)
    pv = facts.log.pv[known]
    count = int(np.sum(spikes(pv, facts.noise) & (np.abs(pv - np.median(pv)) > facts.travel)))
    if not count:
        return None
    many = count > _MANY_SPIKES * pv.size
    return (
        "care" if many else "note",
        float(count),
        _MANY_SPIKES * pv.size,
        (
            f"{count} {'row stands' if count == 1 else 'rows stand'} far out and the PV is back at once; "
            "the fit gives such spikes little weight. Check the sensor and its wiring."
        ),
    )


def _failed(facts: Facts) -> Found:
    """A current signal at a level that reports a failure."""
    if (facts.log.pv_column.unit or "").lower() != "ma":
        return None
    pv = facts.log.pv[np.isfinite(facts.log.pv)]
    rows = int(np.sum((pv <= _FAILED[0]) | (pv >= _FAILED[1])))
    if rows < 2:
        return None
    return (
        "stop",
        float(rows),
        1.0,
        (
            f"The transmitter reports a failure on {rows} rows (at or below {_FAILED[0]:g} mA, or at or above "
            f"{_FAILED[1]:g} mA). Have it repaired, and repeat the test."
        ),
    )


def _bad_on_rise(facts: Facts) -> Found:
    """Cells without a PV while it answers; a long log has none by its nature."""
    if any(n.code == "long-layout" for n in facts.log.notes):
        return None
    t, lost, near = facts.log.t, np.isnan(facts.log.pv), np.zeros(facts.log.t.size, dtype=bool)
    for a in facts.answers:
        at = a.bump.moves[0].at_s
        near |= (t >= at) & (t <= at + 2.0 * a.rise_s)
    count = int(np.sum(lost & near))
    share = count / max(int(near.sum()), 1)
    if share <= _BAD_CARE or count < 3:
        return None
    stop = share > _BAD_STOP
    return (
        "stop" if stop else "care",
        share,
        _BAD_STOP if stop else _BAD_CARE,
        (
            f"{count} rows hold no usable PV while it was answering a move, {100.0 * share:.0f} % of them: "
            "the rise cannot be trusted. Check the signal, and export or repeat the test."
        ),
    )


STORAGE_RULES: tuple[Rule, ...] = (
    Rule(code="oscillation", source=PRACTICE, check=_oscillation),
    Rule(code="smooth-pv", source=PRACTICE, check=_smooth),
    Rule(
        code="joined-by-lines", source="none, some, more than 30 % of points (common practice)", check=_joined
    ),
    Rule(code="stored-on-change", source="below 1 % of the PV move good (common practice)", check=_on_change),
    Rule(code="spikes", source=PRACTICE, check=_spiked),
    Rule(code="failure-level", source="NAMUR NE 43 (from memory)", check=_failed),
    Rule(code="bad-on-rise", source="up to 5 %, off the rise (common practice)", check=_bad_on_rise),
)
