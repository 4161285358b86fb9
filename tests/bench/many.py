"""Many seeded logs of one process, fitted, for counting how often the fit keeps its word."""

import numpy as np
from joblib import Parallel, delayed
from logs import bump_log, log_data

from fitters.choose import choose
from fitters.process import ProcessModel

ROWS = 300
LOGS = 500
#: Name: structure, process, length of the log [s]. Lags, dead time and log interval as in the trade.
PROCESSES = {
    "first order": (ProcessModel(numerator=(1.2,), denominator=(20.0, 1.0), dead_time=5.0), 300.0),
    "second order": (
        ProcessModel(numerator=(1.2,), denominator=(20.0 * 8.0, 28.0, 1.0), dead_time=5.0),
        400.0,
    ),
    "integrator": (ProcessModel(numerator=(0.01,), denominator=(1.0, 0.0), dead_time=5.0), 200.0),
}


def coloured(rng, t, correlation):
    """First-order autoregressive noise of unit variance, white where the correlation time is zero."""
    fresh = rng.normal(size=t.size)
    if correlation == 0.0:
        return fresh
    memory = np.exp(-(t[1] - t[0]) / correlation)
    out = np.empty(t.size)
    out[0] = fresh[0]
    for i in range(1, t.size):
        out[i] = memory * out[i - 1] + np.sqrt(1.0 - memory**2) * fresh[i]
    return out


def fit_of(name, seed, *, noise, correlation=0.0):
    """Fit one seeded log; the candidate of the true structure and whether it was chosen.

    `noise` is a share of the response, `correlation` the noise's correlation time [s].
    """
    process, span = PROCESSES[name]
    t, co, pv = bump_log(process, span=span, rows=ROWS, noise=0.0, seed=0)
    pv = pv + noise * np.ptp(pv) * coloured(np.random.default_rng(seed), t, correlation)
    choice = choose(log_data(t, co, pv))
    fit = next(c.fit for c in choice.candidates if c.fit.structure == name)
    return fit, choice.best.structure == name


def intervals_of(name, seed, wanted, **log):
    """Give value, low and high of the wanted parameters, (p, 3), and whether the structure was chosen."""
    fit, chosen = fit_of(name, seed, **log)
    found = [fit.parameter(w) for w in wanted]
    return np.array([[p.value, p.low, p.high] for p in found]), chosen


def model_of(name, seed, **log):
    """Give the fitted process of the true structure and whether it was chosen."""
    fit, chosen = fit_of(name, seed, **log)
    return fit.model, chosen


def models(name, *, logs=LOGS, **log):
    """Give the fitted processes, and the share of logs where the structure was chosen."""
    out = Parallel(n_jobs=2)(delayed(model_of)(name, seed, **log) for seed in range(logs))
    return [o[0] for o in out], float(np.mean([o[1] for o in out]))


def many(name, wanted, *, logs=LOGS, **log):
    """Give (logs, p, 3) values and interval ends, and the share of logs where the structure was chosen."""
    jobs = (delayed(intervals_of)(name, seed, wanted, **log) for seed in range(logs))
    out = Parallel(n_jobs=2)(jobs)
    return np.array([o[0] for o in out]), float(np.mean([o[1] for o in out]))
