"""Criteria beside the margins: each is met where it binds, and a wish for slowness gives a firm loop."""

import numpy as np
import pytest

from fitters.process import ProcessModel
from pipeline.loop.metrics import noise_gain
from pipeline.loop.simulate import predict
from pipeline.tuning.allowed import allowed_gains
from pipeline.tuning.tuner import tune
from pipeline.tuning.types import Criteria

LAG = ProcessModel(numerator=(1.5,), denominator=(40.0, 1.0), dead_time=6.0)


def test_a_long_closed_loop_time_gives_the_published_settings():
    """Skogestad (2003), J. Process Control 13, 291-309: Kc = T / (K (closed-loop time + dead time)), Ti = T."""
    t = tune(LAG, kind="PI", criteria=Criteria(closed_loop_time=60.0))
    published = 40.0 / (1.5 * (60.0 + 6.0))
    assert t.binding == "closed_loop_time"
    assert t.margins.gain_crossover == pytest.approx(1.0 / 66.0, rel=1e-3)
    assert t.controller.gain / t.controller.integral_time == pytest.approx(published / 40.0, rel=0.12)
    assert 0.6 * published < t.controller.gain < 1.3 * published


def test_the_peak_of_t_is_kept():
    t = tune(
        LAG,
        kind="PI",
        criteria=Criteria(phase_margin=None, max_sensitivity=None, max_complementary=1.1, overshoot=None),
    )
    assert t.binding in ("max_complementary", "gain_margin")
    assert t.margins.max_complementary <= 1.1 * (1.0 + 1e-4)


@pytest.mark.parametrize("kind", ["PI", "PID"])
def test_noise_on_the_output_is_kept(kind):
    t = tune(LAG, kind=kind, criteria=Criteria(noise_gain=2.0))
    assert noise_gain(t.controller) <= 2.0 * (1.0 + 1e-6)
    assert t.margins.phase_margin >= 59.99


def test_the_outputs_move_is_kept():
    assert tune(LAG, kind="PI", criteria=Criteria()).prediction.co_peak > 1.5
    t = tune(LAG, kind="PI", criteria=Criteria(co_peak=1.5))
    assert t.reached
    assert predict(LAG, t.controller).co_peak <= 1.5 * (1.0 + 1e-3)


def test_an_impossible_move_is_said_to_be_so():
    """A unit of PV takes 1/K of output at rest: less cannot be asked."""
    t = tune(LAG, kind="PI", criteria=Criteria(co_peak=0.5))
    assert not t.reached and "co-peak-not-reached" in {r.code for r in t.remarks}


def test_each_criterion_by_itself_allows_at_least_what_all_together_do():
    asked = Criteria(max_complementary=1.2, closed_loop_time=3.0, noise_gain=50.0, co_peak=20.0)
    t = tune(LAG, kind="PI", criteria=asked)
    single = {a.criterion: a.gain for a in allowed_gains(t, asked)}
    assert len(single) == 8
    assert all(g is None or g >= t.controller.gain * (1.0 - 1e-3) for g in single.values())
    assert single[t.binding] == pytest.approx(t.controller.gain, rel=1e-3)
    assert np.isfinite(single["phase_margin"])
