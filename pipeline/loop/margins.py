"""Margins of a loop in every sense, with exact dead time."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.search import minima
from pipeline.loop.stack import LoopStack, stack_loops
from pipeline.loop.sweep import (
    FINE,
    Crossings,
    Grid,
    Sweep,
    frequency_grid,
    gain_crossings,
    phase_crossings,
    sweep,
    unstable_roots,
)
from pipeline.loop.types import Crossing, Margins

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.process import ProcessModel
    from pipeline.loop.types import Controller

    Reals = NDArray[np.float64]

#: Grid of a batch, whose crossings and peaks lie near the loops' own frequencies.
_COARSE = Grid(per_decade=24, floor=0.15, reach=1e2)
#: Steps in which a peak is closed in on: to rounding, and to a part in ten thousand even of a sharp one.
_EXACT, _NEAR = 34, 24


@dataclass(frozen=True, kw_only=True)
class MarginTable:
    """Margins of many loops; the values of one row mean what `Margins` says.

    Attributes
    ----------
    stable : (m,) ndarray of bool
    phase_margin : (m,) ndarray [degrees]
    gain_margin, gain_reduction_margin, max_sensitivity : (m,) ndarray [1]
    """

    stable: NDArray[np.bool_]
    phase_margin: Reals
    gain_margin: Reals
    gain_reduction_margin: Reals
    max_sensitivity: Reals

    def __len__(self) -> int:
        return int(self.stable.size)


def margins(model: ProcessModel, controller: Controller) -> Margins:
    """Give every margin of one loop.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller

    Returns
    -------
    Margins
        `crossings` lists the phase crossings as far up as |L| exceeds 0.02, and always the
        first; with dead time there is no last one.
    """
    return margins_of(stack_loops([model], [controller]))


def margins_of(loops: LoopStack) -> Margins:
    """Give every margin of a one-row stack; see `margins`."""
    s = sweep(loops, frequency_grid(loops, FINE))
    gains, phases = gain_crossings(s), phase_crossings(s)
    listed = _list(gains, phases)
    if unstable_roots(s)[0] > 0.5:
        return Margins(
            stable=False,
            phase_margin=0.0,
            gain_margin=1.0,
            gain_reduction_margin=1.0,
            max_sensitivity=np.inf,
            max_complementary=np.inf,
            delay_margin=0.0,
            gain_crossover=np.inf,
            phase_crossover=np.inf,
            crossings=listed,
        )
    pm, pm_omega, delay = np.inf, np.inf, np.inf
    if gains.row.size:
        worst = int(np.argmin(np.abs(gains.past)))
        pm, pm_omega = float(np.degrees(np.abs(gains.past[worst]))), float(gains.omega[worst])
        delay = float(np.min(np.mod(gains.past, 2.0 * np.pi) / gains.omega))
    gm, reduction = _gain_limits(s, phases)
    gm_omega = np.inf
    if phases.row.size:
        nearest = int(np.argmin(np.abs(-phases.log_gain - np.log(gm[0])))) if np.isfinite(gm[0]) else -1
        if nearest >= 0 and abs(-phases.log_gain[nearest] - np.log(gm[0])) < 1e-9:
            gm_omega = float(phases.omega[nearest])
    return Margins(
        stable=True,
        phase_margin=pm,
        gain_margin=float(gm[0]),
        gain_reduction_margin=float(reduction[0]),
        max_sensitivity=float(_sensitivity(s)[0]),
        max_complementary=float(_complementary(s)[0]),
        delay_margin=delay,
        gain_crossover=pm_omega,
        phase_crossover=gm_omega,
        crossings=listed,
    )


def batch_margins(models: Sequence[ProcessModel], controller: Controller) -> MarginTable:
    """Give one controller's margins on many models of one structure.

    Parameters
    ----------
    models : sequence of ProcessModel
    controller : Controller

    Returns
    -------
    MarginTable
        One row a model.
    """
    return margin_table(stack_loops(models, [controller]))


def margin_table(loops: LoopStack, *, sensitivity: bool = True) -> MarginTable:
    """Give the margins of stacked loops.

    Parameters
    ----------
    loops : LoopStack
    sensitivity : bool
        False leaves Ms out (inf), which saves half the time.

    Returns
    -------
    MarginTable
    """
    s = sweep(loops, frequency_grid(loops, _COARSE))
    stable = unstable_roots(s) < 0.5
    gains, phases = gain_crossings(s), phase_crossings(s)
    pm = np.full(len(loops), np.inf)
    np.minimum.at(pm, gains.row, np.degrees(np.abs(gains.past)))
    gm, reduction = _gain_limits(s, phases)
    ms = _sensitivity(s, _NEAR) if sensitivity else np.full(len(loops), np.inf)
    return MarginTable(
        stable=stable,
        phase_margin=np.where(stable, pm, 0.0),
        gain_margin=np.where(stable, gm, 1.0),
        gain_reduction_margin=np.where(stable, reduction, 1.0),
        max_sensitivity=np.where(stable, ms, np.inf),
    )


def _list(gains: Crossings, phases: Crossings) -> tuple[Crossing, ...]:
    found = [
        Crossing(kind="gain", omega=float(w), phase_margin=float(np.degrees(p)))
        for w, p in zip(gains.omega, gains.past, strict=True)
    ]
    found += [
        Crossing(kind="phase", omega=float(w), magnitude=float(np.exp(g)))
        for w, g in zip(phases.omega, phases.log_gain, strict=True)
    ]
    return tuple(sorted(found, key=lambda c: c.omega))


def _gain_limits(s: Sweep, phases: Crossings) -> tuple[Reals, Reals]:
    """Give how far the gain may rise and fall: crossings, and L at zero and infinite frequency."""
    loops = s.loops
    up, down = np.full(len(loops), np.inf), np.zeros(len(loops))
    limit = -phases.log_gain
    rise = limit > 0.0
    np.minimum.at(up, phases.row[rise], np.exp(limit[rise]))
    np.maximum.at(down, phases.row[~rise], np.exp(limit[~rise]))
    static, direct = loops.static(), loops.direct()
    with np.errstate(divide="ignore", invalid="ignore"):
        # L(inf) turns for ever with dead time, so its size is a limit whatever its sign.
        ends = [
            (1.0 / np.abs(static), (static < 0.0) & np.isfinite(static)),
            (
                1.0 / np.abs(direct),
                (direct != 0.0) & np.isfinite(direct) & ((loops.delay > 0.0) | (direct < 0.0)),
            ),
        ]
    for size, real in ends:
        up = np.where(real & (size > 1.0), np.minimum(up, size), up)
        down = np.where(real & (size <= 1.0), np.maximum(down, size), down)
    return up, down


def _peak(s: Sweep, value: Reals, f: object, steps: int) -> Reals:
    """Refine each row's smallest value from every dip within a quarter of the smallest."""
    assert callable(f)
    x = np.log(s.omega)
    low = value.min(axis=1)
    mid = value[:, 1:-1]
    dip = (mid <= value[:, :-2]) & (mid <= value[:, 2:]) & (mid <= 1.25 * low[:, None])
    row, k = np.nonzero(dip)
    if row.size:
        _, best = minima(lambda z, i: f(s.loops.response(np.exp(z), row[i])), x[k], x[k + 2], steps=steps)
        np.minimum.at(low, row, best)
    return np.asarray(low, dtype=float)


def _ends(s: Sweep) -> tuple[NDArray[np.bool_], Reals, Reals]:
    return s.loops.delay > 0.0, s.loops.static(), s.loops.direct()


def _sensitivity(s: Sweep, steps: int = _EXACT) -> Reals:
    """Give Ms, its limits at zero and infinite frequency included."""
    value = np.abs((s.bottom + s.top) / s.bottom)
    nearest = _peak(s, value, lambda response: np.abs(1.0 + response), steps)
    late, static, direct = _ends(s)
    at_zero = np.where(np.isfinite(static), np.abs(1.0 + static), np.inf)
    at_infinity = np.where(late, np.abs(1.0 - np.abs(direct)), np.abs(1.0 + direct))
    with np.errstate(divide="ignore"):
        return np.asarray(1.0 / np.minimum(np.minimum(nearest, at_zero), at_infinity), dtype=float)


def _complementary(s: Sweep) -> Reals:
    """Give Mt, its limits at zero and infinite frequency included."""
    with np.errstate(divide="ignore"):
        value = np.abs((s.bottom + s.top) / s.top)
        nearest = _peak(s, value, lambda response: np.abs(1.0 + 1.0 / response), _EXACT)
        late, static, direct = _ends(s)
        at_zero = np.where(np.isfinite(static), np.abs(1.0 + 1.0 / static), 1.0)
        at_infinity = np.where(late, np.abs(1.0 - 1.0 / np.abs(direct)), np.abs(1.0 + 1.0 / direct))
        at_infinity = np.where(direct == 0.0, np.inf, at_infinity)
        return np.asarray(1.0 / np.minimum(np.minimum(nearest, at_zero), at_infinity), dtype=float)
