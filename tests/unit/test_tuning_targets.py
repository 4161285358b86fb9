"""A reached target is met to the last digit; an unreachable one is said to be so."""

import pytest

from fitters.process import ProcessModel
from pipeline.tuning.tuner import tune
from pipeline.tuning.types import Criteria

MODELS = {
    "lag": ((1.0,), (10.0, 1.0), 1.0),
    "balanced": ((1.0,), (1.0, 1.0), 1.0),
    "late": ((2.0,), (1.0, 1.0), 5.0),
    "two lags": ((1.0,), (40.0, 14.0, 1.0), 1.0),
    "falling": ((-3.0,), (10.0, 1.0), 2.0),
    "integrator": ((-1.0,), (1.0, 0.0), 1.0),
    "integrator and lag": ((1.0,), (4.0, 1.0, 0.0), 1.0),
    "dead time": ((1.0,), (1.0,), 1.0),
    "inverse": ((-2.0, 1.0), (16.0, 8.0, 1.0), 1.0),
    "resonance": ((0.25,), (1.0, 0.25, 0.25), 1.0),
    "slow": ((0.01,), (5000.0, 1.0), 120.0),
}


@pytest.mark.parametrize("name", MODELS)
@pytest.mark.parametrize("kind", ["P", "I", "PI", "PID"])
def test_the_binding_criterion_is_met_exactly_and_the_others_kept(name, kind):
    num, den, dead = MODELS[name]
    model = ProcessModel(numerator=num, denominator=den, dead_time=dead)
    if kind == "I" and model.integrators:
        return
    t = tune(model, kind=kind, criteria=Criteria())
    m = t.margins
    assert m.stable and m.phase_margin >= 59.99 and m.gain_margin >= 2.4995 and m.max_sensitivity <= 1.8001
    codes = {r.code for r in t.remarks}
    assert t.reached or codes & {"overshoot-not-reached"}
    if t.reached:
        assert t.prediction.overshoot <= 10.01
    value, asked, tolerance = {
        "phase_margin": (m.phase_margin, 60.0, 0.01),
        "gain_margin": (m.gain_margin, 2.5, 1e-4),
        "max_sensitivity": (m.max_sensitivity, 1.8, 1e-4),
        "overshoot": (t.prediction.overshoot, 10.0, 0.1),
    }[t.binding]
    assert value == pytest.approx(asked, abs=tolerance)


def test_slow_branch_is_named_and_not_taken():
    t = tune(
        ProcessModel(numerator=(1.0,), denominator=(1.0, 0.0), dead_time=1.0),
        kind="PI",
        criteria=Criteria(gain_margin=None, max_sensitivity=None, overshoot=None),
    )
    slow = next(r for r in t.remarks if r.code == "two-gains")
    assert slow.value is not None and slow.value < t.controller.gain
    assert t.margins.phase_margin == pytest.approx(60.0, abs=0.01)


@pytest.mark.parametrize("kind", ["P", "I", "PI"])
def test_double_integrator_needs_derivative_action(kind):
    t = tune(
        ProcessModel(numerator=(1.0,), denominator=(1.0, 0.0, 0.0), dead_time=1.0),
        kind=kind,
        criteria=Criteria(),
    )
    assert not t.reached and "no-stabilising-gain" in {r.code for r in t.remarks}


def test_a_lag_without_dead_time_sets_no_limit():
    t = tune(ProcessModel(numerator=(1.0,), denominator=(10.0, 1.0)), kind="P", criteria=Criteria())
    assert {r.code: r.level for r in t.remarks}["no-gain-limit"] == "stop"
