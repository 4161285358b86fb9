"""Settings are rounded to what can be entered, and judged as rounded."""

import itertools

import numpy as np
import pytest

from fitters.process import ProcessModel
from pipeline.loop.forms import Entry, action_for_model, action_in_words, understand
from pipeline.loop.margins import margins
from pipeline.loop.rounding import rounded
from pipeline.loop.types import Controller
from pipeline.tuning.tuner import tune
from pipeline.tuning.types import Criteria
from pipeline.tuning.uncertainty import back_off

LAG = ProcessModel(numerator=(1.7,), denominator=(21.3, 1.0), dead_time=3.9)


@pytest.mark.parametrize("kind", ["P", "I", "PI", "PD", "PID"])
@pytest.mark.parametrize("equation", ["standard", "series", "parallel"])
def test_margins_shown_are_those_of_the_rounded_numbers(kind, equation):
    entry = Entry(
        equation=equation,
        integral="minutes per repeat",
        derivative="minutes",
        proportional_step=0.05,
        integral_step=0.01,
        derivative_step=0.01,
    )
    tuning = tune(LAG, kind=kind, criteria=Criteria())
    made = back_off(tuning, {"noise in the log": [LAG] * 8}, Criteria(), entry)[0]
    gain, integral, derivative = understand(made.entered, entry)
    c = made.controller
    assert (c.gain, c.integral_time, c.derivative_time) == pytest.approx(
        (gain, integral, derivative), rel=1e-12
    )
    for value, step in (
        (made.entered.proportional, 0.05),
        (made.entered.integral, 0.01),
        (made.entered.derivative, 0.01),
    ):
        if value is not None:
            assert value / step == pytest.approx(round(value / step), abs=1e-9)
    assert made.margins == margins(LAG, c)
    assert made.margins.phase_margin != tuning.margins.phase_margin


def test_rounding_never_makes_the_loop_faster():
    rng = np.random.default_rng(4)
    for _ in range(300):
        gain, integral = 10.0 ** rng.uniform(-3, 3), 10.0 ** rng.uniform(-1, 4)
        c = Controller(kind="PI", gain=gain, action="reverse", integral_time=integral)
        entry = Entry(
            equation=str(rng.choice(["standard", "series"])),
            proportional=str(rng.choice(["gain", "band"])),
            integral=str(rng.choice(["seconds per repeat", "minutes per repeat", "repeats per minute"])),
        )
        there, _ = rounded(c, entry)
        assert gain * 0.999 <= there.gain <= gain * (1.0 + 1e-12)
        assert integral * (1.0 - 1e-12) <= there.integral_time <= integral * 1.0011


def test_a_number_on_its_step_stays():
    c = Controller(kind="PI", gain=0.35, action="reverse", integral_time=0.6 * 60.0)
    entry = Entry(integral="minutes per repeat", proportional_step=0.05, integral_step=0.1)
    assert rounded(c, entry)[1].proportional == 0.35 and rounded(c, entry)[1].integral == 0.6


def test_a_step_too_coarse_is_one_step_not_nothing():
    c = Controller(kind="PI", gain=0.03, action="reverse", integral_time=90.0)
    assert rounded(c, Entry(proportional_step=0.1))[1].proportional == 0.1


def test_gain_per_scan_is_gain_times_scan_over_integral_time():
    # Common practice: the per-scan integral gain is Kc h / Ti.
    c = Controller(kind="PI", gain=2.0, action="reverse", integral_time=50.0)
    entry = Entry(integral="gain per scan", scan=0.5)
    there, typed = rounded(c, entry)
    assert typed.integral == pytest.approx(2.0 * 0.5 / 50.0)
    assert there.integral_time == pytest.approx(50.0)


SIGNS = list(itertools.product([2.0, -2.0], [False, True], [False, True]))


@pytest.mark.parametrize(("gain", "runaway", "integrates"), SIGNS)
def test_eight_sign_combinations_are_told_in_words(gain, runaway, integrates):
    # A fact of the trade: feedback must push against the way the PV first moves. A process that runs
    # away has a static gain of the other sign.
    den = [10.0, -1.0 if runaway else 1.0, *([0.0] if integrates else [])]
    model = ProcessModel(numerator=(gain,), denominator=tuple(den), dead_time=0.1)
    way = "fall" if gain > 0.0 else "rise"
    assert action_in_words(action_for_model(model)) == f"PV rises: the output must {way}."


@pytest.mark.parametrize("gain", [2.0, -2.0])
def test_the_other_action_runs_away(gain):
    model = ProcessModel(numerator=(gain,), denominator=(10.0, 1.0), dead_time=1.0)
    right = action_for_model(model)
    wrong = "direct" if right == "reverse" else "reverse"
    good = Controller(kind="PI", gain=1.0, action=right, integral_time=10.0)
    bad = Controller(kind="PI", gain=1.0, action=wrong, integral_time=10.0)
    assert margins(model, good).stable and not margins(model, bad).stable
