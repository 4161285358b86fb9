"""Published tuning rules as they stand in their sources, one function each."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.forms import from_series

if TYPE_CHECKING:
    from pipeline.loop.types import Kind
    from pipeline.tuning.reduced import FirstOrder, Ultimate

#: Closed-loop time constant of lambda tuning [lags] (common practice).
_LAMBDA = 3.0
#: Least closed-loop time constant over the dead time of the internal-model PI [1]:
#: Bequette (2003), Process Control, table 9-2, after Rivera, Morari and Skogestad (1986).
_LEAST_FILTER = 1.7


@dataclass(frozen=True, slots=True, kw_only=True)
class Settings:
    """What a rule gives, standard equation: gain [CO unit / PV unit], Ti and Td [s]."""

    kind: Kind
    gain: float
    integral: float = np.inf
    derivative: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Facts:
    """What rules are written in: the process with one lag and with two, and its ultimate point."""

    one: FirstOrder | None
    two: FirstOrder | None
    ultimate: Ultimate | None


def simc(f: Facts) -> list[Settings]:
    """Apply Skogestad's rules with the closed-loop time constant equal to the dead time.

    Parameters
    ----------
    f : Facts

    References
    ----------
    Skogestad (2003), J. Process Control 13, 291-309: Kc = T1 / (K 2 L), Ti = min(T1, 8 L),
    Td = T2 in the series equation.
    """
    out = []
    if f.one is not None and f.one.dead_time > 0.0 and f.one.lag > 0.0:
        out.append(
            Settings(kind="PI", gain=0.5 / (f.one.slope * f.one.dead_time), integral=_simc_integral(f.one))
        )
    if f.two is not None and f.two.dead_time > 0.0 and f.two.second_lag > 0.0:
        # The half that the second lag took may have made it the larger one.
        large, small = max(f.two.lag, f.two.second_lag), min(f.two.lag, f.two.second_lag)
        ordered = replace(f.two, lag=large, second_lag=small)
        gain, integral, derivative = from_series(
            0.5 / (ordered.slope * ordered.dead_time), _simc_integral(ordered), small
        )
        out.append(Settings(kind="PID", gain=gain, integral=integral, derivative=derivative))
    return out


def _simc_integral(p: FirstOrder) -> float:
    return min(p.lag, 8.0 * p.dead_time)


def amigo(f: Facts) -> list[Settings]:
    """Apply the approximate M-constrained integral gain optimisation.

    Parameters
    ----------
    f : Facts

    References
    ----------
    Åström and Hägglund (2006), Advanced PID Control, eq. 7.5 and 7.7, and their limits for
    integrating processes: 0.35, 13.4; 0.45, 8, 0.5.
    """
    p = f.one
    if p is None or p.dead_time == 0.0:
        return []
    late, lag = p.dead_time, p.lag
    if p.integrates:
        k = p.gain * late
        return [
            Settings(kind="PI", gain=0.35 / k, integral=13.4 * late),
            Settings(kind="PID", gain=0.45 / k, integral=8.0 * late, derivative=0.5 * late),
        ]
    gain = 0.15 + (0.35 - late * lag / (late + lag) ** 2) * lag / late
    integral = 0.35 * late + 13.0 * late * lag**2 / (lag**2 + 12.0 * late * lag + 7.0 * late**2)
    out = [Settings(kind="PI", gain=gain / p.gain, integral=integral)]
    if lag > 0.0:
        out.append(
            Settings(
                kind="PID",
                gain=(0.2 + 0.45 * lag / late) / p.gain,
                integral=late * (0.4 * late + 0.8 * lag) / (late + 0.1 * lag),
                derivative=0.5 * late * lag / (0.3 * late + lag),
            )
        )
    return out


def lambda_tuning(f: Facts) -> list[Settings]:
    """Cancel the lag and ask for three times its time constant in closed loop.

    Parameters
    ----------
    f : Facts

    Notes
    -----
    Common practice: Kc = T / (K (lambda + L)), Ti = T with lambda three lags.
    """
    p = f.one
    if p is None or p.integrates or p.lag == 0.0:
        return []
    return [Settings(kind="PI", gain=p.lag / (p.gain * (_LAMBDA * p.lag + p.dead_time)), integral=p.lag)]


def internal_model(f: Facts) -> list[Settings]:
    """Apply the internal-model PI for a lag and a dead time.

    Parameters
    ----------
    f : Facts

    References
    ----------
    Rivera, Morari and Skogestad (1986), Ind. Eng. Chem. Process Des. Dev. 25, 252-265, table
    II (from memory): Kc = T / (K lambda), Ti = T, lambda at least 1.7 L and above 0.2 T.
    """
    p = f.one
    if p is None or p.integrates or p.lag == 0.0 or p.dead_time == 0.0:
        return []
    wanted = max(_LEAST_FILTER * p.dead_time, 0.2 * p.lag)
    return [Settings(kind="PI", gain=p.lag / (p.gain * wanted), integral=p.lag)]


def ziegler_nichols_step(f: Facts) -> list[Settings]:
    """Apply the step-response rules.

    Parameters
    ----------
    f : Facts

    References
    ----------
    Ziegler and Nichols (1942), Trans. ASME 64, 759-768: with a = slope times dead time, P 1/a;
    PI 0.9/a, 3.33 L; PID 1.2/a, 2 L, L/2.
    """
    p = f.one
    if p is None or p.dead_time == 0.0 or p.lag == 0.0:
        return []
    a, late = p.slope * p.dead_time, p.dead_time
    return [
        Settings(kind="P", gain=1.0 / a),
        Settings(kind="PI", gain=0.9 / a, integral=late / 0.3),
        Settings(kind="PID", gain=1.2 / a, integral=2.0 * late, derivative=0.5 * late),
    ]


def ziegler_nichols_ultimate(f: Facts) -> list[Settings]:
    """Apply the rules for the ultimate gain and period.

    Parameters
    ----------
    f : Facts

    References
    ----------
    Ziegler and Nichols (1942): P 0.5 Ku; PI 0.45 Ku, Pu/1.2; PID 0.6 Ku, Pu/2, Pu/8.
    """
    u = f.ultimate
    if u is None:
        return []
    return [
        Settings(kind="P", gain=0.5 * u.gain),
        Settings(kind="PI", gain=0.45 * u.gain, integral=u.period / 1.2),
        Settings(kind="PID", gain=0.6 * u.gain, integral=u.period / 2.0, derivative=u.period / 8.0),
    ]


def tyreus_luyben(f: Facts) -> list[Settings]:
    """Apply the calmer rules for the ultimate gain and period.

    Parameters
    ----------
    f : Facts

    References
    ----------
    Tyreus and Luyben (1992), Ind. Eng. Chem. Res. 31, 2625-2628, as in Bequette (2003), table
    6-2: PI Ku/3.2, 2.2 Pu; PID Ku/2.2, 2.2 Pu, Pu/6.3.
    """
    u = f.ultimate
    if u is None:
        return []
    return [
        Settings(kind="PI", gain=u.gain / 3.2, integral=2.2 * u.period),
        Settings(kind="PID", gain=u.gain / 2.2, integral=2.2 * u.period, derivative=u.period / 6.3),
    ]


def cohen_coon(f: Facts) -> list[Settings]:
    """Apply the quarter-decay rules.

    Parameters
    ----------
    f : Facts

    References
    ----------
    Cohen and Coon (1953), Trans. ASME 75, 827-834, with r = dead time over lag.
    """
    p = f.one
    if p is None or p.integrates or p.lag == 0.0 or p.dead_time == 0.0:
        return []
    r, late = p.dead_time / p.lag, p.dead_time
    k = p.gain * r
    return [
        Settings(kind="P", gain=(1.0 + r / 3.0) / k),
        Settings(kind="PI", gain=(0.9 + r / 12.0) / k, integral=late * (30.0 + 3.0 * r) / (9.0 + 20.0 * r)),
        Settings(kind="PD", gain=(1.25 + r / 6.0) / k, derivative=late * (6.0 - 2.0 * r) / (22.0 + 3.0 * r)),
        Settings(
            kind="PID",
            gain=(4.0 / 3.0 + r / 4.0) / k,
            integral=late * (32.0 + 6.0 * r) / (13.0 + 8.0 * r),
            derivative=4.0 * late / (11.0 + 2.0 * r),
        ),
    ]


def chien_hrones_reswick(f: Facts) -> list[Settings]:
    """Apply the set-point rules that are labelled "no overshoot".

    Parameters
    ----------
    f : Facts

    References
    ----------
    Chien, Hrones and Reswick (1952), Trans. ASME 74, 175-185: P 0.3/a; PI 0.35/a, 1.2 T; PID
    0.6/a, T, L/2, with a = gain times dead time over lag.
    """
    p = f.one
    if p is None or p.integrates or p.lag == 0.0 or p.dead_time == 0.0:
        return []
    a = p.slope * p.dead_time
    return [
        Settings(kind="P", gain=0.3 / a),
        Settings(kind="PI", gain=0.35 / a, integral=1.2 * p.lag),
        Settings(kind="PID", gain=0.6 / a, integral=p.lag, derivative=0.5 * p.dead_time),
    ]


def ho_hang_cao(f: Facts, *, gain_margin: float = 3.0, phase_margin: float = 60.0) -> list[Settings]:
    """Apply the closed form for a gain margin and a phase margin.

    Parameters
    ----------
    f : Facts
    gain_margin : float
        [1].
    phase_margin : float
        [degrees].

    References
    ----------
    Ho, Hang and Cao (1995), Automatica 31, 497-502 (formula from memory).
    """
    p = f.one
    if p is None or p.integrates or p.lag == 0.0 or p.dead_time == 0.0:
        return []
    am, late = gain_margin, p.dead_time
    wp = (am * np.radians(phase_margin) + 0.5 * np.pi * am * (am - 1.0)) / ((am**2 - 1.0) * late)
    inverse = 2.0 * wp - 4.0 * wp**2 * late / np.pi + 1.0 / p.lag
    if inverse <= 0.0:
        return []
    return [Settings(kind="PI", gain=wp * p.lag / (am * p.gain), integral=1.0 / inverse)]
