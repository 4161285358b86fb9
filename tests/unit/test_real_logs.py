"""Measured logs end as settings on a model near what was published of them, or withheld for the true reason.

The windows around the values are the ones tests/data/README.md's origins give, or, where they
give none, a factor that separates a right answer from a wrong one (half to twice).
"""

from pathlib import Path

import pytest

from pipeline.commission import Request, commission
from pipeline.settings import LoopSheet

DATA = Path(__file__).parents[1] / "data"

# file: classes allowed, gain window, window of the sum of lags and dead time [s]
SETTLING = ("first order", "second order", "second order with zero", "3 equal lags", "4 equal lags")
EXPECTED = {
    # two published analyses of the rig: lag 159 s and dead time 125 s; 251 s and 70 s; gain 0.14 to 0.18.
    # The moves are not answered alike, and the largest gain is the one reported.
    "heated_box_step_test.csv": (SETTLING, (0.13, 0.24), (280.0, 580.0)),
    # gain 0.364 K per count, lag 140 s, dead time 13 s
    "heater_kelvin_three_bumps.csv": (SETTLING, (0.32, 0.40), (135.0, 165.0)),
    "heater_degF_three_bumps.csv": (SETTLING, (0.15, 0.25), (120.0, 190.0)),
    "two_heaters_two_bumps.txt": (SETTLING, (0.4, 0.8), (130.0, 250.0)),
    # lag 0.1 to 0.2 s, sampled every 0.02 s in steps of 0.73 rad/s
    "dc_motor_speed_step.csv": (SETTLING, (0.035, 0.05), (0.04, 0.3)),
    # under-damped, negative gain, at 10 us
    "converter_underdamped_negative_gain.csv": (
        ("second order", "second order with zero"),
        (-10.0, -6.0),
        None,
    ),
    "two_lag_circuit_square_wave.csv": (SETTLING, (0.9, 1.1), (0.003, 0.012)),
    # gain changes with level, about 19.6 degC/V, lag 70 s
    "heating_system_daisy.dat": (SETTLING, (14.0, 26.0), (45.0, 110.0)),
    "sim_heater_open_loop.csv": (SETTLING, (0.5, 0.7), (120.0, 190.0)),
}


@pytest.mark.parametrize("name", EXPECTED)
def test_a_measured_test_gives_settings_near_what_is_known(name):
    structures, (low, high), lag_window = EXPECTED[name]
    # the times of one count 0, 1, 2 and its origin says seconds
    sheet = LoopSheet.model_validate({"time": {"unit": "s"}}) if "degF" in name else None
    record = commission(DATA / name, request=Request(sheet=sheet))
    assert record.verdict != "withheld", [c.text for c in record.cautions if c.level == "stop"]
    assert record.model.structure in structures
    assert low <= record.model.gain <= high
    if lag_window is not None:
        total = next(v for k, v in record.model.parameters.items() if k.endswith("plus_dead_time")).value
        assert lag_window[0] <= total <= lag_window[1]
    assert record.controller.action == ("reverse" if record.model.gain > 0 else "direct")
    assert record.margins.gain_margin >= 2.0 and record.margins.max_sensitivity <= 2.0


def test_a_ringing_converter_is_called_ringing():
    record = commission(DATA / "converter_underdamped_negative_gain.csv", request=Request())
    assert 0.2 < record.model.parameters["damping"].value < 0.6
    assert "process-rings" in {c.code for c in record.cautions}


def test_a_gain_that_changes_with_level_is_never_simply_ready():
    record = commission(DATA / "heating_system_daisy.dat", request=Request())
    assert record.verdict == "ready with cautions"
    codes = {c.code for c in record.cautions}
    assert codes & {"gain-uncertain", "gain-differs-between-moves", "gain-scatters-between-moves"}
    assert "last-move-missed" in codes


@pytest.mark.parametrize(
    ("name", "code", "words"),
    [
        ("plant_flow_routine_no_bump.csv", "no-move", "routine control"),
        ("sim_heater_closed_loop_pi.csv", "closed-loop", "in automatic"),
    ],
)
def test_a_log_without_an_open_loop_test_is_withheld_for_the_true_reason(name, code, words):
    record = commission(DATA / name, request=Request())
    assert record.verdict == "withheld" and record.controller is None
    stop = next(c for c in record.cautions if c.level == "stop" and c.code == code)
    assert words in stop.text
    assert record.next_steps
