"""How close the fit comes to the least scatter that any unbiased fit can have.

Run with: pytest tests/bench/test_efficiency.py -m bench -s
"""

import numpy as np
import pytest
from logs import bump_log
from many import PROCESSES, ROWS, many

from fitters.process import ProcessModel

pytestmark = pytest.mark.bench

#: Root-mean-square error over the Cramer-Rao bound, at most [1].
EFFICIENCY = 1.10


def settings_of(name):
    """True values, and how to build the process from them."""
    if name == "first order":
        return {"gain": 1.2, "lag": 20.0, "dead_time": 5.0}, lambda v: ([v[0]], [v[1], 1.0], v[2])
    if name == "second order":
        return {"gain": 1.2, "longer_lag": 20.0, "shorter_lag": 8.0, "dead_time": 5.0}, lambda v: (
            [v[0]],
            np.polymul([v[1], 1.0], [v[2], 1.0]),
            v[3],
        )
    return {"integrating_gain": 0.01, "dead_time": 5.0}, lambda v: ([v[0]], [1.0, 0.0], v[1])


def cramer_rao(name, noise):
    """Least standard errors by the Fisher matrix (Kay 1993, 3.31), slopes by central differences.

    The level is unknown; a drift is too where the process integrates, since a load that is not
    quite balanced then drifts always and is always fitted.
    """
    truth, build = settings_of(name)
    _, span = PROCESSES[name]
    values = np.array(list(truth.values()))

    def answer(v):
        num, den, dead_time = build(v)
        model = ProcessModel(numerator=tuple(num), denominator=tuple(den), dead_time=float(dead_time))
        return bump_log(model, span=span, rows=ROWS, noise=0.0, seed=0)[2]

    slopes = []
    for i in range(values.size):
        step = np.zeros(values.size)
        step[i] = 1e-5 * values[i]
        slopes.append((answer(values + step) - answer(values - step)) / (2.0 * step[i]))
    sd = noise * np.ptp(answer(values))
    slopes.append(np.ones(ROWS))
    if name == "integrator":
        slopes.append(np.linspace(0.0, 1.0, ROWS))
    fisher = np.array(slopes) @ np.array(slopes).T / sd**2
    return truth, np.sqrt(np.diag(np.linalg.inv(fisher)))[: values.size]


@pytest.mark.parametrize("noise", [0.01, 0.03])
@pytest.mark.parametrize("name", PROCESSES)
def test_errors_are_as_small_as_the_log_allows(name, noise):
    truth, bound = cramer_rao(name, noise)
    found, chosen = many(name, list(truth), noise=noise)
    error = found[:, :, 0] - np.array(list(truth.values()))
    ratio = np.sqrt(np.mean(error**2, axis=0)) / bound
    print(
        f"\n{name}, noise {100 * noise:.0f} %: chosen {100 * chosen:.1f} %",
        dict(zip(truth, ratio.round(3), strict=True)),
    )
    assert np.all(ratio <= EFFICIENCY)
