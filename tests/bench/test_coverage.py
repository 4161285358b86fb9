"""How often the 95 % intervals hold the truth. Run with: pytest tests/bench/test_coverage.py -m bench -s"""

import numpy as np
import pytest
from many import many

pytestmark = pytest.mark.bench

TRUTH = {"gain": 1.2, "lag": 20.0, "dead_time": 5.0, "initial_slope": 0.06, "lag_plus_dead_time": 25.0}
#: Noise over the response [1].
NOISE = 0.03


def held(**log):
    found, chosen = many("first order", list(TRUTH), **log)
    truth = np.array(list(TRUTH.values()))
    inside = (found[:, :, 1] <= truth) & (truth <= found[:, :, 2])
    share = 100.0 * inside.mean(axis=0)
    print(
        f"\n{log}: chosen {100 * chosen:.1f} %, held {dict(zip(TRUTH, share.round(1).tolist(), strict=True))}"
    )
    return share


def test_white_noise_intervals_hold_the_truth_in_93_to_97_percent():
    share = held(noise=NOISE)
    assert np.all((share >= 93.0) & (share <= 97.0))


@pytest.mark.parametrize("lags", [0.1, 0.3, 1.0])
def test_slow_noise_intervals_hold_the_truth_in_88_to_98_percent(lags):
    share = held(noise=NOISE, correlation=20.0 * lags)
    assert np.all((share >= 88.0) & (share <= 98.0))
