"""The same settings on every plausible model, and the back-off that follows."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np

from pipeline.findings import Caution
from pipeline.loop.batch_response import batch_final, batch_overshoot, batch_setpoint
from pipeline.loop.margins import MarginTable, margin_table, margins
from pipeline.loop.rounding import rounded
from pipeline.loop.simulate import predict
from pipeline.loop.stack import stack_loops
from pipeline.loop.sweep import Grid
from pipeline.tuning.criteria import gain_range
from pipeline.tuning.types import BackedOff, Bands, Criteria

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.process import ProcessModel
    from pipeline.loop.forms import Entered, Entry
    from pipeline.loop.types import Controller
    from pipeline.tuning.types import Tuning

    Reals = NDArray[np.float64]

#: Percentiles of a band [%].
_PERCENTILES = (5.0, 50.0, 95.0)
#: Points of the step band [1].
_POINTS = 256
#: Horizon of the step band over the median model's settling time [1].
_HORIZON = 3.0
#: Gain factors tried before the exact one is closed in on [1].
_FACTORS = np.geomspace(1.0, 0.1, 14)
#: The factor is found to this [1].
_FACTOR_TOLERANCE = 1e-3
#: A percentile this little above what was asked is met [degrees].
_NEAR = 0.02
#: Grid of each model's own range of gains.
_LIMITS_GRID = Grid(per_decade=40, floor=0.3, reach=1e2)
#: A gain is given up for at least so much phase margin at the percentile [degrees].
_WORTH_SLOWING = 3.0


def bands(models: Sequence[ProcessModel], controller: Controller) -> Bands:
    """Give one controller's margins and step response over plausible models.

    Parameters
    ----------
    models : sequence of ProcessModel
        Draws of one structure, at least one.
    controller : Controller

    Returns
    -------
    Bands
    """
    table = margin_table(stack_loops(models, [controller]))
    return _bands(models, controller, table)


def _bands(models: Sequence[ProcessModel], controller: Controller, table: MarginTable) -> Bands:
    stable = np.flatnonzero(table.stable)
    over = np.full(len(models), np.inf)
    if stable.size:
        kept = [models[int(i)] for i in stable]
        middle = kept[int(np.argsort(table.phase_margin[stable])[stable.size // 2])]
        nominal = predict(middle, controller)
        end = float(nominal.setpoint.t[-1])
        settled = nominal.settling_time if np.isfinite(nominal.settling_time) else end
        horizon = min(_HORIZON * settled, 2.0 * end)
        t, pv = batch_setpoint(kept, [controller], horizon=horizon, points=_POINTS)
        over[stable] = batch_overshoot(pv, batch_final(kept, [controller]))
        low, high = np.percentile(pv, [_PERCENTILES[0], _PERCENTILES[2]], axis=0)
    else:
        t = low = high = np.zeros(0)
    return Bands(
        phase_margin=_three(table.phase_margin),
        gain_margin=_three(table.gain_margin),
        max_sensitivity=_three(table.max_sensitivity),
        overshoot=_three(over),
        unstable_share=1.0 - stable.size / len(models),
        t=_frozen(t),
        low=_frozen(low),
        high=_frozen(high),
    )


def _frozen(x: Reals) -> Reals:
    out = np.array(x, dtype=float)
    out.flags.writeable = False
    return out


def _three(x: Reals) -> tuple[float, float, float]:
    """Give the percentiles, counted rather than interpolated so that infinities keep their place."""
    a, b, c = (float(np.percentile(x, p, method="inverted_cdf")) for p in _PERCENTILES)
    return a, b, c


@dataclass(frozen=True, kw_only=True)
class _Slower:
    """The settings made slower by a factor and rounded, over all plausible models.

    On an integrating process a lower gain alone lowers the phase margin: it rolls. There the
    integral time grows as the gain falls, which stretches the loop's time and keeps its shape.
    """

    models: Sequence[ProcessModel]
    controller: Controller
    stretched: bool
    entry: Entry
    #: Tables already worked out, by factor.
    known: dict[float, MarginTable] = field(default_factory=dict)

    def settings(self, factor: float) -> tuple[Controller, Entered]:
        c = self.controller
        longer = c.integral_time / factor if self.stretched else c.integral_time
        return rounded(replace(c, gain=c.gain * factor, integral_time=longer), self.entry)

    def table(self, factor: float) -> MarginTable:
        if factor not in self.known:
            self.known[factor] = margin_table(stack_loops(self.models, [self.settings(factor)[0]]))
        return self.known[factor]

    def held(self, factor: float, percentile: float) -> float:
        """Give the phase margin at a percentile of the models [degrees]."""
        return float(np.percentile(self.table(factor).phase_margin, percentile, method="inverted_cdf"))

    def lowered(self, percentile: float, asked: float) -> float | None:
        """Give the largest factor on the gain alone that holds, from each model's own range of gains."""
        only = Criteria(phase_margin=asked, gain_margin=None, max_sensitivity=None, overshoot=None)
        r = gain_range(stack_loops(self.models, [self.controller]), only, _LIMITS_GRID)
        low, high = (np.nan_to_num(x, nan=end) for x, end in ((r.low, np.inf), (r.high, 0.0)))
        # The grid's straight lines may leave an end a little too high.
        tried = np.unique(np.minimum(high[high > 0.0], 1.0))[::-1] * (1.0 - _FACTOR_TOLERANCE)
        needed = (1.0 - percentile / 100.0) * len(self.models)
        return next((float(f) for f in tried if np.sum((low <= f) & (f <= high)) >= needed), None)


def _slower(tuning: Tuning, models: Sequence[ProcessModel], entry: Entry) -> _Slower:
    stretched = tuning.model.integrators > 0 and tuning.controller.kind in ("PI", "PID")
    return _Slower(models=models, controller=tuning.controller, stretched=stretched, entry=entry)


def back_off(
    tuning: Tuning, sources: Mapping[str, Sequence[ProcessModel]], criteria: Criteria, entry: Entry
) -> tuple[BackedOff, str]:
    """Lower the gain until the percentile phase margin holds, and round to what can be entered.

    Parameters
    ----------
    tuning : Tuning
    sources : mapping of str to sequence of ProcessModel
        Plausible models of one structure, by what they were drawn from.
    criteria : Criteria
    entry : Entry
        How the controller takes its settings.

    Returns
    -------
    BackedOff
        Of the rounded settings, after the largest factor up to one on the gain that holds the
        phase margin at the percentile. `held` is False where no factor does, as on loops that
        need their gain; the factor is then the one that comes nearest, and a remark says so.
    str
        The source that ruled: the one that leaves the least phase margin.
    """
    by_source = {name: _slower(tuning, models, entry) for name, models in sources.items()}
    ruling = min(by_source, key=lambda name: by_source[name].held(1.0, criteria.percentile))
    slower = by_source[ruling]
    stretched = slower.stretched
    asked = criteria.percentile_phase_margin
    factor, held = 1.0, True
    remarks: list[Caution] = []
    if asked is not None:
        factor, held, best = _factor(slower, criteria.percentile, asked)
        if not held:
            remarks.append(
                Caution(
                    code="back-off-not-enough",
                    level="care",
                    value=best,
                    limit=asked,
                    text=f"No lower gain holds {asked:.3g} degrees of phase margin at the asked percentile "
                    f"of the plausible models; the nearest, {best:.1f} degrees, is at {factor:.2f} of the gain. "
                    "A better test would narrow the models.",
                )
            )
    if factor < 1.0 and stretched:
        remarks.append(
            Caution(
                code="integral-time-lengthened",
                level="note",
                value=factor,
                limit=None,
                text=f"For uncertainty the gain was multiplied and the integral time divided by {factor:.2f}: "
                "on an integrating process a lower gain alone would roll.",
            )
        )
    controller, entered = slower.settings(factor)
    backed_off = BackedOff(
        controller=controller,
        entered=entered,
        margins=margins(tuning.model, controller),
        prediction=predict(tuning.model, controller),
        bands=_bands(slower.models, controller, slower.table(factor)),
        factor=factor,
        held=held,
        remarks=tuple(remarks),
    )
    return backed_off, ruling


def _factor(slower: _Slower, percentile: float, asked: float) -> tuple[float, bool, float]:
    """Give the largest factor that holds, whether one does, and the phase margin there."""
    first = slower.held(1.0, percentile)
    if first >= asked:
        return 1.0, True, first
    guess = None if slower.stretched else slower.lowered(percentile, asked)
    above, over, best = 1.0, first, (first, 1.0)
    ladder = _FACTORS[1:] if guess is None else np.array([guess, *_FACTORS[guess > _FACTORS]])
    for x in ladder:
        value = slower.held(float(x), percentile)
        if value >= asked:
            break
        best = max(best, (value, float(x)))
        above, over = float(x), value
    else:
        # nothing holds it: slow down only for a gain worth having
        return (best[1], False, best[0]) if best[0] > first + _WORTH_SLOWING else (1.0, False, first)
    if guess is not None and float(x) == guess:
        return guess, True, value
    below, under = float(x), value
    while above - below > _FACTOR_TOLERANCE and under - asked >= _NEAR:
        guess = below + (above - below) * (under - asked) / max(under - over, 1e-12)
        guess = min(max(guess, below + 0.1 * (above - below)), above - 0.1 * (above - below))
        value = slower.held(guess, percentile)
        if value >= asked:
            below, under = guess, value
        else:
            above, over = guess, value
    return below, True, under
