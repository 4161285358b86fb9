"""Bounds that the process sets: sensitivity peaks, crossover, what can be stabilised at all."""

import numpy as np
import pytest

from fitters.process import ProcessModel
from pipeline.loop.limits import crossover_range, process_limits
from pipeline.loop.types import Controller
from pipeline.tuning.tuner import tune
from pipeline.tuning.types import Criteria

P = Controller(kind="P", gain=1.0, action="reverse")
NONE = np.zeros(0, dtype=complex)
ONE = np.ones(1, dtype=complex)


def test_zero_and_pole_pair_set_the_least_peak():
    # Skogestad and Postlethwaite (2005), Ex. 5.2: 10 (s - 2) / (s^2 - 2 s + 5), peak at least 2.6.
    limits = process_limits(ProcessModel(numerator=(10.0, -20.0), denominator=(1.0, -2.0, 5.0)), P)
    assert limits.sensitivity_least == pytest.approx(2.6, abs=1e-6)
    assert not limits.feasible and limits.crossover_for_margin is None


@pytest.mark.parametrize(("ratio", "least"), [(2, 3.0), (3, 2.0), (4, 5 / 3), (6, 1.4), (11, 1.2)])
def test_zero_over_pole_sets_the_least_peak(ratio, least):
    # Skogestad and Postlethwaite (2005), theorem 5.2: |z + p| / |z - p|.
    limits = process_limits(ProcessModel(numerator=(1.0, -float(ratio)), denominator=(1.0, -1.0)), P)
    assert limits.sensitivity_least == pytest.approx(least, abs=1e-6)
    assert limits.complementary_least == pytest.approx(least, abs=1e-6)


@pytest.mark.parametrize(("delay", "least"), [(0.1, 1.105), (0.25, 1.284), (0.5, 1.649), (1.0, 2.718)])
def test_pole_and_dead_time_set_the_least_complementary_peak(delay, least):
    # Skogestad and Postlethwaite (2005), theorem 5.3: exp(p dead time).
    limits = process_limits(ProcessModel(numerator=(1.0,), denominator=(1.0, -1.0), dead_time=delay), P)
    assert limits.complementary_least == pytest.approx(least, abs=5e-4)


def test_rules_for_the_crossover():
    # Skogestad and Postlethwaite (2005), rules 5 to 8: below 1 / dead time and z / 2, above 2 p.
    late = process_limits(ProcessModel(numerator=(1.0,), denominator=(5.0, 1.0), dead_time=4.0), P)
    assert (late.crossover_most, late.crossover_most_by) == (pytest.approx(0.25), "dead time")
    inverse = process_limits(
        ProcessModel(numerator=(-2.0, 1.0), denominator=(5.0, 6.0, 1.0), dead_time=1.0), P
    )
    assert (inverse.crossover_most, inverse.crossover_most_by) == (
        pytest.approx(0.25),
        "right-half-plane zero",
    )
    runaway = process_limits(ProcessModel(numerator=(1.0,), denominator=(5.0, -1.0), dead_time=0.5), P)
    assert runaway.crossover_least == pytest.approx(0.4) and runaway.feasible
    slow = process_limits(ProcessModel(numerator=(1.0,), denominator=(5.0, -1.0), dead_time=3.0), P)
    assert not slow.feasible


def test_a_scan_counts_as_dead_time():
    scanned = Controller(kind="P", gain=1.0, action="reverse", scan=2.0, compute_delay=0.5)
    limits = process_limits(ProcessModel(numerator=(1.0,), denominator=(5.0, 1.0), dead_time=1.0), scanned)
    assert limits.dead_time == pytest.approx(2.5) and limits.crossover_most == pytest.approx(0.4)


@pytest.mark.parametrize(
    ("margin", "slope", "zero", "pole", "delay"),
    [
        (45.0, -0.5, 1.0, 1.0, 1.5708),
        (45.0, -1.0, 0.4142, 2.4142, 0.7854),
        (60.0, -0.5, 0.7673, 1.3032, 1.309),
        (60.0, -1.0, 0.2679, 3.7321, 0.5236),
    ],
)
def test_gain_crossover_inequality(margin, slope, zero, pole, delay):
    # Astrom (2000), European Journal of Control 6, 2-19: the method from memory, its numbers recomputed.
    assert crossover_range(ONE, NONE, 0.0, margin, slope) == (0.0, pytest.approx(zero, abs=1e-4))
    low, high = crossover_range(NONE, ONE, 0.0, margin, slope)
    assert low == pytest.approx(pole, abs=1e-4) and high == np.inf
    assert crossover_range(NONE, NONE, 1.0, margin, slope) == (0.0, pytest.approx(delay, abs=1e-4))


@pytest.mark.parametrize(
    ("margin", "slope", "ratio", "late"),
    [
        (45.0, -0.5, 5.8284, 0.3264),
        (45.0, -1.0, 25.274, 0.0781),
        (60.0, -0.5, 8.6784, 0.2225),
        (60.0, -1.0, 57.695, 0.0345),
    ],
)
def test_pole_against_zero_and_dead_time(margin, slope, ratio, late):
    # The same inequality: z / p of 5.83 for 45 degrees is the "z > 6 p" of the textbooks.
    assert crossover_range(1.001 * ratio * ONE, ONE, 0.0, margin, slope) is not None
    assert crossover_range(0.999 * ratio * ONE, ONE, 0.0, margin, slope) is None
    assert crossover_range(NONE, ONE, 0.998 * late, margin, slope) is not None
    assert crossover_range(NONE, ONE, 1.003 * late, margin, slope) is None


@pytest.mark.parametrize(("kind", "possible", "impossible"), [("P", 0.9, 1.02), ("PI", 0.85, 1.02)])
def test_a_runaway_lag_is_refused_where_nothing_can_hold_it(kind, possible, impossible):
    # Silva, Datta, Bhattacharyya (2002), IEEE Trans. Automatic Control 47, 241-252: P and PI need a dead
    # time below the time constant; from memory, recomputed here.
    for late, good in ((possible, True), (impossible, False)):
        model = ProcessModel(numerator=(1.0,), denominator=(1.0, -1.0), dead_time=late)
        found = tune(model, kind=kind, criteria=Criteria(overshoot=None))
        refused = [r for r in found.remarks if r.code == "no-stabilising-gain"]
        assert bool(refused) is not good
        if refused:
            assert "dead time" in refused[0].text
