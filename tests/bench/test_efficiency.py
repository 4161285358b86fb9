"""How close the fit comes to the least scatter that any unbiased fit can have.

Run with: pytest tests/bench/test_efficiency.py -m bench -s
"""

import numpy as np
import pytest
from logs import bump_log
from many import PROCESSES, ROWS, models

from fitters.process import ProcessModel

pytestmark = pytest.mark.bench

#: Root-mean-square error over the Cramer-Rao bound, at most [1].
EFFICIENCY = 1.10


def truth_of(name):
    """True values by name; lags as sum and product, which real and complex poles both have."""
    process, _ = PROCESSES[name]
    return dict(zip(NAMES[name], values_of(process), strict=True))


NAMES = {
    "first order": ("gain", "lag", "dead time"),
    "second order": ("gain", "product of lags", "sum of lags", "dead time"),
    "integrator": ("integrating gain", "dead time"),
}


def values_of(process):
    """Gain, denominator without its constant, dead time."""
    inner = np.array(process.denominator[: len(process.denominator) - process.integrators])
    return np.array([process.gain, *(inner[:-1] / inner[-1]), process.dead_time])


def process_of(values, integrators):
    return ProcessModel(
        numerator=(values[0],),
        denominator=(*values[1:-1], 1.0, *([0.0] * integrators)),
        dead_time=float(values[-1]),
    )


def cramer_rao(name, noise):
    """Least standard errors by the Fisher matrix (Kay 1993, 3.31), slopes by central differences.

    The level is unknown; a drift is too where the process integrates, since a load that is not
    quite balanced then drifts always and is always fitted.
    """
    process, span = PROCESSES[name]
    values = values_of(process)

    def answer(v):
        model = process_of(v, process.integrators)
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
    return np.sqrt(np.diag(np.linalg.inv(fisher)))[: values.size]


@pytest.mark.parametrize("noise", [0.01, 0.03])
@pytest.mark.parametrize("name", PROCESSES)
def test_errors_are_as_small_as_the_log_allows(name, noise):
    truth, bound = truth_of(name), cramer_rao(name, noise)
    fitted, chosen = models(name, noise=noise)
    error = np.array([values_of(m) for m in fitted]) - np.array(list(truth.values()))
    ratio = np.sqrt(np.mean(error**2, axis=0)) / bound
    told = dict(zip(truth, ratio.round(3).tolist(), strict=True))
    print(f"\n{name}, noise {100 * noise:.0f} %: chosen {100 * chosen:.1f} %, error over bound {told}")
    assert np.all(ratio <= EFFICIENCY)
