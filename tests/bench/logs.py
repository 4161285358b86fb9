"""Bump-test logs of known plants, for timing and for judging on the truth."""

import numpy as np

from fitters.fit import BumpData


def bump_log(model, *, span, rows, noise, seed, level=50.0):
    """Three moves held unequally; noise as a share of the largest answer.

    Returns times [s], CO and PV.
    """
    t = np.linspace(0.0, span, rows)
    at = span * np.array([0.08, 0.42, 0.72])
    at = t[np.searchsorted(t, at)]
    levels = np.array([40.0, 45.0, 38.0, 42.0])
    co = levels[np.searchsorted(at, t, side="right")]
    answer = sum(d * model.step_response(t - a) for a, d in zip(at, np.diff(levels), strict=True))
    rng = np.random.default_rng(seed)
    pv = level + answer + noise * np.ptp(answer) * rng.normal(size=rows)
    return t, co, pv


def write_csv(path, t, co, pv):
    """Write what a plain logger would."""
    lines = ["Time (s),CO (%),PV (degC)"]
    lines += [f"{a:.6g},{b:.6g},{c:.8g}" for a, b, c in zip(t, co, pv, strict=True)]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


def log_data(t, co, pv):
    """Give the log as the fitters take it."""
    new = np.concatenate([[True], np.diff(co) != 0.0])
    return BumpData(t=t, pv=pv, co_times=t[new], co_values=co[new])
