"""Numbers read off a response, with our own definitions."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.signal import lfilter

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from pipeline.loop.types import Controller

    Reals = NDArray[np.float64]
    Ratio = tuple[Reals, Reals]

#: Settled: within this share of the final value for good [1]. Common practice.
SETTLING_BAND = 0.05
#: A peak this little above the final value is rounding [share of the final value].
_NO_PEAK = 1e-4


@dataclass(frozen=True, slots=True, kw_only=True)
class StepNumbers:
    """Overshoot [%], rise, settling and peak time [s]; definitions as in `Prediction`."""

    overshoot: float
    rise_time: float
    settling_time: float
    peak_time: float


def measure(t: Reals, y: Reals, final: float) -> StepNumbers:
    """Read a step response.

    Parameters
    ----------
    t : (n,) ndarray
        Times since the step, rising [s].
    y : (n,) ndarray
        Response; zero before the first time.
    final : float
        Its final value, known beforehand; inf or zero if it has none worth the name.

    Returns
    -------
    StepNumbers
        Overshoot and times inf without a finite final value other than zero.
    """
    if not np.isfinite(final) or final == 0.0 or not np.all(np.isfinite(y)):
        moved = bool(np.any(np.abs(y) > 1e-9)) or not np.isfinite(final)
        none = np.inf if moved else 0.0
        return StepNumbers(overshoot=none, rise_time=np.inf, settling_time=np.inf, peak_time=np.inf)
    share = y / final
    top = int(np.argmax(share))
    above = float(share[top]) - 1.0
    peak_time = float(t[top]) if above > _NO_PEAK else np.inf
    outside = np.flatnonzero(np.abs(share - 1.0) > SETTLING_BAND)
    if outside.size == 0:
        settling = float(t[0])
    elif outside[-1] == y.size - 1:
        settling = np.inf
    else:
        k = int(outside[-1])
        level = 1.0 + SETTLING_BAND * np.sign(share[k] - 1.0)
        settling = _crossing(t, share, k, level)
    low, high = _first(t, share, 0.1), _first(t, share, 0.9)
    return StepNumbers(
        overshoot=max(100.0 * above, 0.0),
        rise_time=high - low if np.isfinite(high) else np.inf,
        settling_time=settling,
        peak_time=peak_time,
    )


def _crossing(t: Reals, y: Reals, k: int, level: float) -> float:
    gap = y[k + 1] - y[k]
    return float(t[k] + (t[k + 1] - t[k]) * (level - y[k]) / gap) if gap != 0.0 else float(t[k + 1])


def _first(t: Reals, y: Reals, level: float) -> float:
    over = np.flatnonzero(y >= level)
    if over.size == 0:
        return np.inf
    k = int(over[0])
    return float(t[0]) if k == 0 else _crossing(t, y, k - 1, level)


def _low_order(forcing: Ratio, loop: Ratio) -> tuple[float, int]:
    """Give F / (1 + L) near s = 0 as value * s**order."""
    num = np.convolve(forcing[0], loop[1])
    top, bottom = (np.pad(x, (max(map(len, loop)) - len(x), 0)) for x in loop)
    den = np.convolve(forcing[1], top + bottom)
    if not np.any(num):
        return 0.0, 0
    i, k = (int(np.argmax(p[::-1] != 0.0)) for p in (num, den))
    return float(num[::-1][i] / den[::-1][k]), i - k


def final_value(forcing: Ratio, loop: Ratio) -> float:
    """Give where a stable loop's step response ends: the limit of F / (1 + L) at s = 0.

    Parameters
    ----------
    forcing, loop : pair of (n,) ndarray
        Numerator and denominator of F and L, descending powers.

    Returns
    -------
    float
    """
    value, order = _low_order(forcing, loop)
    return value if order == 0 else 0.0 if order > 0 else np.inf * np.sign(value)


def integral_value(forcing: Ratio, loop: Ratio) -> float:
    """Give the integral of a stable loop's step response: the limit of F / ((1 + L) s) at s = 0.

    Parameters
    ----------
    forcing, loop : pair of (n,) ndarray
        As in `final_value`.

    Returns
    -------
    float
        inf if the response does not end at zero. For a load step and integral action its
        size is integral time over gain.

    References
    ----------
    Åström and Hägglund (1995), PID Controllers, ch. 4: the integral gain is the inverse of
    the integrated error.
    """
    value, order = _low_order(forcing, loop)
    return value if order == 1 else 0.0 if order > 1 else np.inf * np.sign(value)


def noise_gain(c: Controller) -> float:
    """Give the CO's standard deviation for PV noise that changes from scan to scan.

    Parameters
    ----------
    c : Controller

    Returns
    -------
    float
        CO standard deviation per PV-noise standard deviation [CO unit / PV unit]. The
        integral term is left out: it averages such noise. A controller without a scan is
        taken to see the noise anew every tenth of its shortest filter time.
    """
    if c.kind == "I":
        return 0.0
    lead = c.derivative_time if c.kind in ("PD", "PID") else 0.0
    taus = [tau for tau in (c.pv_filter, c.derivative_filter if lead > 0.0 else 0.0) if tau > 0.0]
    if not taus:
        return c.gain if lead == 0.0 else np.inf
    every = c.scan or min(taus) / 10.0
    n = int(min(20.0 * max(taus) / every, 1e5)) + 2
    pulse = np.zeros(n)
    pulse[0] = 1.0
    seen = _held_lag(c.pv_filter, pulse, every)
    out = seen.copy()
    if lead > 0.0 and c.derivative_filter > 0.0:
        out += lead / c.derivative_filter * (seen - _held_lag(c.derivative_filter, seen, every))
    return c.gain * float(np.sqrt(np.sum(out**2)))


def _held_lag(tau: float, x: Reals, every: float) -> Reals:
    """Pass samples through a lag the way a scanned controller does: the new sample counts at once."""
    if tau <= 0.0:
        return x
    a = np.exp(-every / tau)
    return np.asarray(lfilter([1.0 - a], [1.0, -a], x), dtype=float)
