"""Noise-free logs give back the process they came from."""

import numpy as np
import pytest

from fitters.choose import choose
from fitters.fit import BumpData
from fitters.process import ProcessModel


def log_of(model, *, t, co_times, co_values, level=20.0):
    pv = np.full(t.size, level)
    for at, change in zip(co_times[1:], np.diff(co_values), strict=True):
        pv = pv + change * model.step_response(t - at)
    return BumpData(t=t, pv=pv, co_times=co_times, co_values=co_values)


def random_case(seed):
    """A random plant on irregular times with several moves of either sign."""
    rng = np.random.default_rng(seed)
    lag = 10 ** rng.uniform(-1, 3)
    dead_time = lag * 10 ** rng.uniform(-1.3, 0.5)
    gain = rng.choice([-1, 1]) * 10 ** rng.uniform(-2, 2)
    second = lag * rng.uniform(0.15, 0.9) if seed % 2 else 0.0
    span = rng.uniform(2.5, 4.0) * (dead_time + 4 * (lag + second))
    count = int(rng.integers(150, 500))
    t = np.sort(rng.uniform(0, span, count)) if seed % 3 else np.linspace(0, span, count)
    t[0] = 0.0
    moves = int(rng.integers(1, 4))
    places = np.sort(rng.uniform(0.08, 0.2) + np.arange(moves) * 0.75 / moves)
    co_times = np.concatenate([[0.0], places * span])
    co_values = 40.0 + np.concatenate(
        [[0.0], np.cumsum(rng.choice([-1, 1], moves) * rng.uniform(2, 8, moves))]
    )
    denominator = np.polymul([lag, 1.0], [second, 1.0]) if second else [lag, 1.0]
    model = ProcessModel(numerator=(gain,), denominator=tuple(denominator), dead_time=dead_time)
    return model, lag, second, log_of(model, t=t, co_times=co_times, co_values=co_values)


@pytest.mark.parametrize("block", range(10))
def test_random_plants_come_back_exactly(block):
    """Two hundred of them: gain and lags to 1e-4, dead time to a thousandth of the log interval."""
    for seed in range(block * 20, block * 20 + 20):
        model, lag, second, data = random_case(seed)
        best = choose(data).best
        what = f"seed {seed}: {best.structure}, {best.parameters}"
        assert best.structure == ("second order" if second else "first order"), what
        assert best.parameter("gain").value == pytest.approx(model.gain, rel=1e-4), what
        if second:
            assert best.parameter("longer_lag").value == pytest.approx(lag, rel=1e-4), what
            assert best.parameter("shorter_lag").value == pytest.approx(second, rel=1e-4), what
        else:
            assert best.parameter("lag").value == pytest.approx(lag, rel=1e-4), what
        assert abs(best.parameter("dead_time").value - model.dead_time) < 1e-3 * data.interval, what
        assert best.converged


CLASSES = {
    "second order": ProcessModel(numerator=(2,), denominator=(100.0, 5.0, 1.0), dead_time=5.0),
    "integrator": ProcessModel(numerator=(0.1,), denominator=(1.0, 0.0), dead_time=5.0),
    "integrator with lag": ProcessModel(numerator=(0.1,), denominator=(10.0, 1.0, 0.0), dead_time=5.0),
    "integrator with inverse response": ProcessModel(
        numerator=(-1.0, 0.1), denominator=(3.0, 1.0, 0.0), dead_time=1.0
    ),
    "second order with zero": ProcessModel(
        numerator=(-20.0, 2.0), denominator=(200.0, 30.0, 1.0), dead_time=1.0
    ),
    "4 equal lags": ProcessModel(numerator=(2.0,), denominator=(1e4, 4e3, 600.0, 40.0, 1.0), dead_time=2.0),
    "double integrator": ProcessModel(numerator=(0.02,), denominator=(1.0, 0.0, 0.0), dead_time=3.0),
    "double integrator with lag": ProcessModel(
        numerator=(0.02,), denominator=(8.0, 1.0, 0.0, 0.0), dead_time=3.0
    ),
}


@pytest.mark.parametrize("structure", CLASSES)
@pytest.mark.parametrize("noise", [0.0, 0.02])
def test_each_class_is_recognised(structure, noise):
    model = CLASSES[structure]
    t = np.linspace(0.0, 400.0, 400)
    data = log_of(
        model, t=t, co_times=np.array([0.0, 40.0, 150.0, 290.0]), co_values=np.array([40.0, 45.0, 38.0, 42.0])
    )
    size = np.ptp(data.pv) * noise / 10
    pv = data.pv + size * np.random.default_rng(3).normal(size=t.size)
    noisy = BumpData(t=t, pv=pv, co_times=data.co_times, co_values=data.co_values)
    best = choose(noisy).best
    assert best.structure == structure
    if noise == 0.0:
        omega = np.geomspace(1e-3, 0.5, 40)
        assert np.allclose(best.model.frequency_response(omega), model.frequency_response(omega), rtol=1e-6)


def test_a_dead_time_alone_is_known_to_a_row():
    model = ProcessModel(numerator=(2.0,), denominator=(1.0,), dead_time=9.3)
    t = np.arange(0.0, 200.0, 0.5)
    data = log_of(model, t=t, co_times=np.array([0.0, 40.1, 120.1]), co_values=np.array([1.0, 3.0, 2.0]))
    best = choose(data).best
    dead_time = best.parameter("dead_time")
    assert best.structure == "dead time only"
    assert best.parameter("gain").value == pytest.approx(2.0, rel=1e-9)
    assert abs(dead_time.value - 9.3) <= 0.25 and dead_time.low <= 9.3 <= dead_time.high


def test_a_log_without_a_move_is_no_test():
    t = np.arange(30.0)
    with pytest.raises(ValueError, match="never moves"):
        choose(BumpData(t=t, pv=t, co_times=t[:1], co_values=np.ones(1)))
