"""A limited output: never beyond its limits, no wind-up, and the linear step where nothing is limited."""

import numpy as np
import pytest

from fitters.process import ProcessModel
from pipeline.loop.limited import limited_step
from pipeline.loop.simulate import predict
from pipeline.tuning.tuner import tune
from pipeline.tuning.types import Criteria

PROCESSES = {
    "lag": ProcessModel(numerator=(2.0,), denominator=(20.0, 1.0), dead_time=2.0),
    "falling": ProcessModel(numerator=(-0.5,), denominator=(30.0, 13.0, 1.0), dead_time=1.0),
    "level": ProcessModel(numerator=(0.04,), denominator=(1.0, 0.0), dead_time=3.0),
    "dead time": ProcessModel(numerator=(1.0,), denominator=(1.0,), dead_time=2.0),
}


@pytest.mark.parametrize("kind", ["PI", "PID"])
@pytest.mark.parametrize("name", PROCESSES)
def test_far_limits_change_nothing(name, kind):
    model = PROCESSES[name]
    c = tune(model, kind=kind, criteria=Criteria()).controller
    free, wide = predict(model, c), limited_step(model, c, size=1.0, low=-1e6, high=1e6)
    ours = np.interp(free.setpoint.t, wide.response.t, wide.response.pv)
    assert wide.limited_for == 0.0
    assert np.max(np.abs(ours - free.setpoint.pv)[free.setpoint.t <= wide.response.t[-1]]) < 0.03
    assert wide.overshoot == pytest.approx(free.overshoot, abs=2.0)


@pytest.mark.parametrize("name", ["lag", "falling", "level"])
def test_a_near_limit_is_kept_and_does_not_wind_up(name):
    model = PROCESSES[name]
    c = tune(model, kind="PI", criteria=Criteria()).controller
    free = predict(model, c)
    room = 0.4 * free.co_peak
    if not model.integrators:
        room = max(room, 1.05 / abs(model.gain))  # enough to get there at all
    held = limited_step(model, c, size=1.0, low=-room, high=room)
    assert held.limited_for > 0.0
    assert np.max(np.abs(held.response.co)) <= room * (1.0 + 1e-12)
    # Common practice: with the integral term stopped at the limit, a limit adds little overshoot.
    assert held.overshoot <= free.overshoot + 5.0
    assert held.response.pv[-1] == pytest.approx(1.0, abs=0.02)


def test_too_little_room_never_gets_there():
    model = PROCESSES["lag"]
    c = tune(model, kind="PI", criteria=Criteria()).controller
    held = limited_step(model, c, size=1.0, low=0.0, high=0.4)
    assert held.response.pv[-1] == pytest.approx(0.8, abs=0.02) and held.settling_time == np.inf
