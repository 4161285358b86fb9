"""What must hold for settings of any process on any scale."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fitters.process import ProcessModel
from pipeline.loop.margins import margins
from pipeline.loop.simulate import overshoot
from pipeline.tuning.tuner import tune
from pipeline.tuning.types import Criteria
from pipeline.tuning.whatif import growth_borne

#: Lags, dead time, and gain of a settling process, and by how much time and gain are rescaled.
settling = st.tuples(
    st.floats(0.2, 5.0),
    st.floats(0.0, 1.0).map(lambda share: round(share, 2)),
    st.floats(0.1, 4.0),
    st.sampled_from([-1.0, 1.0]),
)


def process(lag, second, dead_time, gain, *, time=1.0, strength=1.0):
    den = np.polymul([lag * time, 1.0], [second * lag * time, 1.0])
    return ProcessModel(
        numerator=(gain * strength,), denominator=tuple(np.trim_zeros(den, "f")), dead_time=dead_time * time
    )


@settings(max_examples=15, deadline=None, derandomize=True)
@given(settling, st.floats(-3.0, 4.0), st.floats(-3.0, 3.0), st.sampled_from(["P", "I", "PI", "PD", "PID"]))
def test_settings_scale_with_time_and_gain(plant, log_time, log_gain, kind):
    """Common practice: gain goes with 1/K, times with the process's own; margins do not change."""
    time, strength = 10.0**log_time, 10.0**log_gain
    one = tune(process(*plant), kind=kind, criteria=Criteria())
    far = tune(process(*plant, time=time, strength=strength), kind=kind, criteria=Criteria())
    assert one.reached is far.reached
    assert far.margins.phase_margin == pytest.approx(one.margins.phase_margin, abs=0.2)
    a, b = one.controller, far.controller
    ki_one = a.gain if kind in ("P", "PD") else a.gain / a.integral_time
    ki_far = b.gain * strength
    if kind not in ("P", "PD"):
        ki_far *= time / b.integral_time
    assert ki_far == pytest.approx(ki_one, rel=0.02)


@settings(max_examples=25, deadline=None, derandomize=True)
@given(settling, st.floats(35.0, 75.0), st.floats(1.3, 5.0), st.floats(1.2, 2.5), st.floats(0.0, 40.0))
def test_every_criterion_is_kept_and_one_is_met(plant, phase_margin, gain_margin, peak, over):
    asked = Criteria(phase_margin=phase_margin, gain_margin=gain_margin, max_sensitivity=peak, overshoot=over)
    t = tune(process(*plant), kind="PI", criteria=asked)
    m = margins(t.model, t.controller)
    if not t.reached:
        return
    assert m.stable
    assert m.phase_margin >= phase_margin - 0.01 and m.gain_margin >= gain_margin * (1.0 - 1e-4)
    assert m.max_sensitivity <= peak * (1.0 + 1e-4)
    assert overshoot(t.model, t.controller) <= over + 0.02
    met = {
        "phase_margin": m.phase_margin - phase_margin < 0.05,
        "gain_margin": m.gain_margin / gain_margin < 1.0 + 1e-3,
        "max_sensitivity": m.max_sensitivity / peak > 1.0 - 1e-3,
        "overshoot": t.prediction.overshoot > over - 0.1,
    }
    assert met[t.binding]


@settings(max_examples=15, deadline=None, derandomize=True)
@given(settling)
def test_gain_and_dead_time_together_may_grow_less_than_either(plant):
    """A fact of the trade: a gain margin of three is no factor three when the dead time grows too."""
    t = tune(process(*plant), kind="PI", criteria=Criteria())
    together = growth_borne(t.model, t.controller)
    assert 1.0 < together <= t.margins.gain_margin * (1.0 + 1e-6)
    late = 1.0 + t.margins.delay_margin / t.model.dead_time
    assert together <= late * (1.0 + 1e-6)
    at = t.model.scaled(1.01 * together, 1.0, 1.01 * together)
    assert not margins(at, t.controller).stable
