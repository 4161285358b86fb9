"""The demo plant's simulation shares nothing with the fitters, so its truth is a check on them."""

from functools import cache

import numpy as np
import pytest
from test_demo_logs import BY_HAND, make_logs, names

from fitters.choose import choose
from fitters.fit import BumpData

TESTABLE = [demo for demo in BY_HAND if demo.name != "sump_level_refused"]
STRUCTURES = {
    "sump_level": "integrator",
    "boiler_drum_level": "integrator with inverse response",
    "spawn_conveyor_speed": "second order",
}

# An interval is made to hold the truth 19 times in 20. Some 30 of them are looked at here,
# and widened to 999 times in 1000 the whole list fails by chance once in 30 random streams.
WIDER = 3.29 / 1.96


def truth_of(demo):
    """Truth in the fitters' terms, from the transfer function's coefficients."""
    num, den = np.array(demo.truth.numerator), np.array(demo.truth.denominator)
    wanted = {"dead_time": demo.truth.dead_time}
    if den[-1] == 0.0:
        wanted["integrating_gain"] = num[-1] / den[-2]
        if den.size == 3:
            wanted |= {"lag": den[0] / den[1], "zero_time": num[0] / num[1]}
    elif den.size == 2:
        wanted |= {"gain": num[-1] / den[-1], "lag": den[0] / den[1]}
    else:
        omega = np.sqrt(den[2] / den[0])
        wanted |= {"gain": num[-1] / den[-1], "natural_period": 2 * np.pi / omega}
        wanted |= {"damping": den[1] / den[0] / (2 * omega)}
    return wanted


@cache
def best_fit(name):
    """What the fitters make of a log; two tests look at it."""
    return choose(as_logged(next(demo for demo in TESTABLE if demo.name == name))).best


def as_logged(demo):
    """What the fitters get to see: rounded by the transmitter, without the lost readings."""
    run = make_logs.in_manual(demo, np.random.RandomState(demo.seed))
    there = np.setdiff1d(np.arange(demo.t.size), demo.missing)
    pv = np.round(run.pv / demo.pv_step) * demo.pv_step
    times, values = zip(*demo.moves, strict=True)
    return BumpData(t=demo.t[there], pv=pv[there], co_times=times, co_values=values)


@pytest.mark.parametrize("demo", TESTABLE, **names)
def test_structure_and_numbers_are_the_truth(demo):
    best = best_fit(demo.name)
    assert best.structure == STRUCTURES.get(demo.name, "first order")
    outside = {}
    for name, true in truth_of(demo).items():
        found = best.parameter(name)
        half = WIDER * (found.high - found.low) / 2
        if abs(found.value - true) > half:
            outside[name] = (true, found.low, found.high)
    assert outside == {}


@pytest.mark.parametrize("demo", TESTABLE, **names)
def test_drift_is_taken_for_what_it_is(demo):
    best = best_fit(demo.name)
    whole = demo.noise.drift * demo.t[-1]
    # slow noise makes a drift of its own: its standard deviation over the whole log, twice
    assert best.drift * demo.t[-1] == pytest.approx(whole, abs=2 * demo.noise.slow)
