"""Closed forms and published examples the margins and the simulated step must meet.

How each value is known stands beside it: "closed form" follows from the loop itself,
"recomputed" was worked out independently with exact dead time, "published" was read in the
named source or in a transcription that cites it.
"""

import numpy as np
import pytest

from fitters.process import ProcessModel
from pipeline.loop.margins import margins
from pipeline.loop.simulate import predict
from pipeline.loop.types import Controller
from pipeline.tuning.tuner import tune
from pipeline.tuning.types import Criteria


def pi(gain, integral_time, **more):
    return Controller(kind="PI", gain=gain, action="reverse", integral_time=integral_time, **more)


def p(gain):
    return Controller(kind="P", gain=gain, action="reverse")


def lag(time, dead_time, gain=1.0):
    return ProcessModel(numerator=(gain,), denominator=(time, 1.0), dead_time=dead_time)


def integrator(dead_time):
    return ProcessModel(numerator=(1.0,), denominator=(1.0, 0.0), dead_time=dead_time)


def only(phase_margin):
    return Criteria(phase_margin=phase_margin, gain_margin=None, max_sensitivity=None, overshoot=None)


@pytest.mark.parametrize(
    ("time", "dead_time", "gain"), [(4.0, 1.0, 1.0), (30.0, 7.0, -0.2), (0.02, 0.5, 12.0)]
)
def test_closed_loop_time_equal_to_the_dead_time_on_a_first_order(time, dead_time, gain):
    """Skogestad (2003), J. Process Control 13, margin table: GM 3.14, PM 61.4, delay margin 2.14; closed form."""
    action = "reverse" if gain > 0 else "direct"
    c = Controller(kind="PI", gain=0.5 * time / (abs(gain) * dead_time), action=action, integral_time=time)
    m = margins(lag(time, dead_time, gain), c)
    assert m.gain_margin == pytest.approx(np.pi, abs=1e-6)
    assert m.phase_margin == pytest.approx(90.0 - np.degrees(0.5), abs=1e-6)
    assert m.delay_margin / dead_time == pytest.approx(np.pi - 1.0, abs=1e-6)
    assert m.phase_crossover * dead_time == pytest.approx(np.pi / 2, abs=1e-6)
    assert m.gain_crossover * dead_time == pytest.approx(0.5, abs=1e-6)
    assert m.max_sensitivity == pytest.approx(1.5905, abs=1e-4)  # recomputed; published 1.59
    assert m.max_complementary == pytest.approx(1.0, abs=1e-4)


def test_the_same_on_an_integrator():
    """Skogestad (2003), same table: GM 2.96, PM 46.9, Ms 1.70, Mt 1.30; digits recomputed."""
    m = margins(integrator(1.0), pi(0.5, 8.0))
    assert m.gain_margin == pytest.approx(2.9634, abs=1e-4)
    assert m.phase_margin == pytest.approx(46.864, abs=1e-3)
    assert m.delay_margin == pytest.approx(1.5896, abs=1e-4)
    assert m.max_sensitivity == pytest.approx(1.7035, abs=1e-4)
    assert m.max_complementary == pytest.approx(1.2994, abs=1e-4)


# Rivera, Morari, Skogestad (1986): PI margins by closed-loop time over dead time; GM = pi/(2c) and
# PM = 90 - 57.296 c with c = dead time / closed-loop time (closed form); Ms recomputed.
IMC = [(0.8, 5.677), (1.0, 3.129), (1.7, 1.750), (2.0, 1.590), (3.0, 1.349)]


@pytest.mark.parametrize(("ratio", "peak"), IMC)
def test_internal_model_pi_margins_do_not_depend_on_the_lag(ratio, peak):
    for time in (0.5, 3.0, 40.0):
        c = 1.0 / ratio
        m = margins(lag(time, 1.0), pi(time * c, time))
        assert m.gain_margin == pytest.approx(np.pi / (2 * c), abs=1e-6)
        assert m.phase_margin == pytest.approx(90.0 - np.degrees(c), abs=1e-6)
        assert m.max_sensitivity == pytest.approx(peak, abs=1e-3)


# Loop x e^(-s)/s: Ms by x, recomputed with exact dead time.
BY_X = [
    (0.35, 1.37),
    (0.44, 1.49),
    (0.52, 1.63),
    (0.61, 1.80),
    (0.70, 1.99),
    (0.79, 2.23),
    (1.05, 3.42),
    (1.22, 5.21),
]


@pytest.mark.parametrize(("x", "peak"), BY_X)
def test_one_number_says_all_of_a_pole_cancelling_pi(x, peak):
    m = margins(lag(5.0, 1.0), pi(5.0 * x, 5.0))
    assert m.phase_margin == pytest.approx(90.0 - np.degrees(x), abs=1e-6)
    assert m.gain_margin == pytest.approx(np.pi / (2 * x), abs=1e-6)
    assert m.delay_margin == pytest.approx((np.pi / 2 - x) / x, abs=1e-6)
    # the list gives x to two digits, which moves Ms by a few hundredths at the steep end
    assert m.max_sensitivity == pytest.approx(peak, rel=0.015)


def test_delay_margin_is_phase_margin_over_crossover():
    """Skogestad and Postlethwaite (2005), Ex. 2.4: published 1.44, recomputed 1.434; Bequette (2003): 8.154."""
    inverse = ProcessModel(numerator=(-6.0, 3.0), denominator=(50.0, 15.0, 1.0))
    m = margins(inverse, pi(2.5 / 2.2, 15.24 / 1.2))
    assert m.delay_margin == pytest.approx(1.434, abs=0.003)  # settings from rounded ultimate values
    assert m.gain_margin == pytest.approx(1.63, rel=0.01) and m.phase_margin == pytest.approx(19.4, rel=0.01)
    assert m.max_sensitivity == pytest.approx(3.92, rel=0.01) and m.max_complementary == pytest.approx(
        3.35, rel=0.01
    )
    assert margins(lag(10.0, 5.0), p(1.9)).delay_margin == pytest.approx(8.154, rel=1e-3)


def test_first_order_module_margins():
    """Bequette (2003), Module 6: read in the book, whose coarse grid costs up to 1 %."""
    plant = lag(10.0, 5.0)
    m = margins(plant, p(1.9))
    assert m.gain_margin == pytest.approx(2.0005, rel=0.01) and m.phase_margin == pytest.approx(
        75.491, rel=0.01
    )
    m = margins(plant, pi(1.25, 12.5))
    assert m.gain_margin == pytest.approx(2.6326, rel=0.01) and m.phase_margin == pytest.approx(
        63.194, rel=0.01
    )


def test_reactor_with_a_right_half_plane_zero():
    """Bequette (2003), Example 7.3 and sec. 7.7: GM 1.668, PM 59.09; Ms 2.785 recomputed."""
    reactor = ProcessModel(numerator=(-0.5848 * 0.3549, 0.5848), denominator=(0.1858, 0.8627, 1.0))
    m = margins(reactor, p(2.5))
    assert m.gain_margin == pytest.approx(1.668, rel=0.006)
    assert m.phase_margin == pytest.approx(59.09, rel=0.006)
    assert m.max_sensitivity == pytest.approx(2.785, abs=1e-3)


def test_unstable_plant_has_two_gain_limits():
    """Skogestad and Postlethwaite (2005), Ex. 2.5: GM 18.7, lower 0.21, PM 59.5, Ms 1.19, Mt 1.38."""
    den = np.polymul([1.0, -1.0], np.polymul([0.02, 1.0], [0.02, 1.0]))
    m = margins(ProcessModel(numerator=(4.0,), denominator=tuple(den)), pi(1.25, 1.5))
    assert m.stable
    assert m.gain_margin == pytest.approx(18.7, rel=0.01)
    assert m.gain_reduction_margin == pytest.approx(0.21, abs=0.006)
    assert m.phase_margin == pytest.approx(59.5, rel=0.01)
    assert m.max_sensitivity == pytest.approx(1.19, rel=0.01) and m.max_complementary == pytest.approx(
        1.38, rel=0.01
    )


def test_predicted_steps_of_the_same_rule():
    """Recomputed: first order 4.05 % overshoot; integrator 27.74 %, load peak 1.961, load error Ti/Kc = 16."""
    assert predict(lag(4.0, 1.0), pi(2.0, 4.0)).overshoot == pytest.approx(4.05, abs=0.1)
    step = predict(integrator(1.0), pi(0.5, 8.0))
    assert step.overshoot == pytest.approx(27.74, abs=0.1)
    assert step.load_peak == pytest.approx(1.961, abs=0.004)
    assert step.load_integrated_error == pytest.approx(16.0, rel=1e-4)


# Closed form for wn^2 / (s (s + 2 zeta wn)) (Ogata, Modern Control Engineering, ch. 5 and 7): damping,
# phase margin [degrees], overshoot [%]. So 0.6 goes with about 59 degrees and 10 %, 0.7 with 65 and 5 %.
SECOND_ORDER = [
    (0.3, 33.272, 37.233),
    (0.5, 51.827, 16.303),
    (0.6, 59.187, 9.478),
    (0.7, 65.156, 4.599),
    (0.8, 69.860, 1.516),
]


@pytest.mark.parametrize(("damping", "phase_margin", "over"), SECOND_ORDER)
def test_damping_margin_and_overshoot_of_the_standard_second_order(damping, phase_margin, over):
    plant = ProcessModel(numerator=(1.0,), denominator=(1.0, 2.0 * damping, 0.0))
    m = margins(plant, p(1.0))
    assert m.phase_margin == pytest.approx(phase_margin, abs=1e-3)
    assert predict(plant, p(1.0)).overshoot == pytest.approx(over, abs=0.05)


INTEGRATING = {
    "integrating lag": (1.0, 1.0, 0.0),
    "third order": (0.2, 1.2, 1.0, 0.0),
    "fourth order": (0.02, 0.32, 1.3, 1.0, 0.0),
}


@pytest.mark.parametrize("name", INTEGRATING)
def test_with_integral_action_sixty_degrees_is_ten_percent(name):
    """Common practice: 60 to 70 degrees near 10 % and less, 50 near 20 %, on simple integrating loops."""
    plant = ProcessModel(numerator=(1.0,), denominator=INTEGRATING[name])
    over = {pm: tune(plant, kind="P", criteria=only(pm)).prediction.overshoot for pm in (50.0, 60.0, 70.0)}
    assert over[70.0] < 5.0
    assert 5.0 < over[60.0] < 12.0
    assert 15.0 < over[50.0] < 22.0


def test_without_integral_action_the_same_margin_hides_a_ringing_loop():
    """Recomputed: P alone at 60 degrees on dead time five times the lag: 105 %, GM 1.07, Ms 15.7."""
    t = tune(lag(1.0, 5.0), kind="P", criteria=only(60.0))
    assert t.margins.phase_margin == pytest.approx(60.0, abs=0.01)
    assert t.prediction.overshoot == pytest.approx(105.0, abs=2.0)
    assert t.margins.gain_margin == pytest.approx(1.07, abs=0.01)
    assert t.margins.max_sensitivity == pytest.approx(15.7, abs=0.2)


def test_with_a_right_half_plane_zero_the_same_margin_means_a_large_overshoot():
    """Recomputed: zero of 2 s on the wrong side, two lags of 4 s, dead time 0.5 s, P at 60: 51 %, GM 1.89."""
    plant = ProcessModel(numerator=(-2.0, 1.0), denominator=(16.0, 8.0, 1.0), dead_time=0.5)
    t = tune(plant, kind="P", criteria=only(60.0))
    assert t.margins.phase_margin == pytest.approx(60.0, abs=0.01)
    assert t.prediction.overshoot == pytest.approx(51.0, abs=0.5)
    assert t.margins.gain_margin == pytest.approx(1.89, abs=0.01)
    assert t.margins.max_sensitivity == pytest.approx(2.36, abs=0.01)


def test_an_unstable_pole_puts_sixty_degrees_out_of_reach_and_overshoots_far():
    """De Paor and O'Malley (1989), closed form: 40.5 degrees at most at a dead time of a fifth of the lag."""
    runaway = ProcessModel(numerator=(1.0,), denominator=(1.0, -1.0), dead_time=0.2)
    best = margins(runaway, Controller(kind="P", gain=np.sqrt(5.0), action="reverse"))
    assert best.phase_margin == pytest.approx(40.517, abs=1e-3)
    asked = tune(runaway, kind="P", criteria=only(60.0))
    assert not asked.reached and asked.margins.phase_margin == pytest.approx(40.5, abs=0.1)
    assert predict(runaway, pi(np.sqrt(5.0), 2.5)).overshoot > 60.0
