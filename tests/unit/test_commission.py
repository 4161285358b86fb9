"""The main job: what goes in decides what comes out, the same each time."""

import json
from dataclasses import replace
from pathlib import Path

import pytest

from fitters.choose import choose
from pipeline.bumps import bump_data
from pipeline.cautions import RULES, Facts, cautions
from pipeline.commission import Request, commission, inspect
from pipeline.findings import Caution
from pipeline.record import to_json
from pipeline.settings import LoopSheet
from pipeline.sheetfile import load_sheet
from pipeline.tuning.recommend import recommend, wanted

DEMO = Path(__file__).parents[2] / "demo_logs"
TUNNEL = DEMO / "tunnel_air_temperature.csv"


def tuned(name="tunnel_air_temperature", **asked):
    sheet = load_sheet(DEMO / f"{name}.toml")
    return commission(DEMO / f"{name}.csv", request=Request(sheet=sheet, **asked))


@pytest.fixture(scope="module")
def tunnel():
    return tuned()


def test_one_log_gives_one_record(tunnel):
    again = tuned()
    first, second = json.loads(to_json(tunnel)), json.loads(to_json(again))
    del first["made"], second["made"]
    assert first == second


@pytest.mark.parametrize("target", [50.0, 65.0, 75.0])
def test_the_phase_margin_asked_is_the_one_reached_where_it_binds(target):
    record = tuned(phase_margin=target, overshoot=60.0, max_sensitivity=5.0, gain_margin=1.2)
    assert record.binding == "phase_margin"
    if record.backoff.factor == 1.0:
        # entered to four digits, rounded to the safe side
        assert target - 0.01 <= record.margins.phase_margin_deg <= target + 0.05


@pytest.mark.parametrize("kind", ["P", "I", "PI", "PD", "PID"])
def test_every_controller_keeps_what_is_asked(kind):
    record = tuned(controller=kind)
    assert record.controller.kind == kind
    assert record.margins.phase_margin_deg >= 59.99
    assert record.margins.gain_margin >= 2.499
    assert record.margins.max_sensitivity <= 1.8005
    assert record.prediction.overshoot_pct <= 10.1


def test_the_command_line_goes_before_the_sheet():
    sheet = LoopSheet.model_validate({"criteria": {"phase_margin_deg": 70.0, "gain_margin": 4.0}})
    record = commission(TUNNEL, request=Request(sheet=sheet, phase_margin=65.0))
    assert record.criteria.phase_margin_deg == 65.0
    assert record.criteria.gain_margin == 4.0
    assert record.criteria.max_sensitivity == 1.8


def test_settings_are_in_percent_of_span_where_ranges_are_known_and_in_the_logs_units_otherwise(tunnel):
    assert tunnel.controller.gain_unit == "%/%"
    bare = commission(TUNNEL, request=Request())
    assert bare.controller.gain_unit == "CO/PV"  # this log names no units
    assert bare.controller.gain == bare.controller.gain_engineering


def test_a_wrong_action_in_the_sheet_withholds_the_settings():
    sheet = load_sheet(TUNNEL.with_suffix(".toml"))
    wrong = sheet.model_copy(update={"controller": sheet.controller.model_copy(update={"action": "direct"})})
    record = commission(TUNNEL, request=Request(sheet=wrong))
    assert record.verdict == "withheld"
    assert any(c.code == "action-differs" and "run away" in c.text for c in record.cautions)


def test_a_negative_gain_takes_direct_action_and_says_so():
    record = tuned("hall_co2_ventilation")
    assert record.model.gain < 0 < record.controller.gain
    assert record.controller.action == "direct"
    assert record.action_words == "PV rises: the output must rise."


def test_inverse_response_is_named_with_its_speed_limit():
    record = tuned("boiler_drum_level")
    caution = next(c for c in record.cautions if c.code == "inverse-response")
    assert record.model.structure == "integrator with inverse response"
    assert record.margins.gain_crossover < caution.value


def test_general_cautions_stand_in_every_record(tunnel):
    withheld = tuned("sump_level_refused")
    for record in (tunnel, withheld):
        codes = {c.code for c in record.cautions}
        assert {"permit-and-change", "safety-not-assessed", "not-assessed"} <= codes
        levels = [c.level for c in record.cautions]
        assert levels == sorted(levels, key=["stop", "care", "note"].index)
    assert {"check-action", "starting-setting", "equation-and-units"} <= {c.code for c in tunnel.cautions}


def test_motion_is_warned_of_on_moving_machines_only(tunnel):
    assert "motion" in {c.code for c in tuned("spawn_conveyor_speed").cautions}
    assert "motion" not in {c.code for c in tunnel.cautions}


def test_as_found_settings_are_judged_on_the_new_model(tunnel):
    assert tunnel.as_found.margins.phase_margin_deg > tunnel.margins.phase_margin_deg
    assert "minutes per repeat" in {e.unit for e in tunnel.as_found.as_entered.values()}


def test_the_bands_hold_the_nominal_loop_and_the_truth(tunnel):
    low, middle, high = tunnel.bands.phase_margin_deg
    assert low < middle < high
    assert low - 1.0 < tunnel.margins.phase_margin_deg < high + 1.0


def test_a_refused_test_says_what_to_do(tunnel):
    record = tuned("sump_level_refused")
    assert record.verdict == "withheld" and record.model is None
    assert any(c.code == "small-move" for c in record.cautions)
    assert any("repeat the test" in step for step in record.next_steps)


def test_every_rule_is_a_function_with_a_sentence_of_its_own():
    assert len({rule.__name__ for rule in RULES}) == len(RULES) >= 25
    assert all(rule.__doc__ for rule in RULES)


def test_a_gain_that_would_kick_the_output_to_its_limits_is_said(tunnel):
    """The sump needs a gain of 25: a step as large as the test's own asks for more than the valve has."""
    assert "output-kick" in {c.code for c in tuned("sump_level").cautions}
    assert "output-kick" not in {c.code for c in tunnel.cautions}


def test_rival_structures_are_told_in_the_controllers_own_unit():
    record = tuned("hall_temperature_long_duct")
    assert record.controller.gain != pytest.approx(record.controller.gain_engineering)
    best = record.candidates[0]
    assert best.gain_recommended * record.backoff.factor == pytest.approx(record.controller.gain, rel=2e-3)


def test_what_the_back_off_has_to_say_reaches_the_reader():
    seen = inspect(TUNNEL, request=Request())
    said = Caution(code="back-off-not-enough", level="care", text="A better test would narrow the models.")
    asked = wanted(
        LoopSheet(), kind="PI", phase_margin=None, gain_margin=None, max_sensitivity=None, overshoot_pct=None
    )
    choice = choose(bump_data(seen.log, seen.bumps))
    made = recommend(choice, asked, log_interval=seen.log.interval)
    facts = Facts(
        log=seen.log,
        sheet=LoopSheet(),
        quality=seen.quality,
        choice=choice,
        criteria=asked.criteria,
        tuning=made.tuning,
        backed_off=replace(made.backed_off, remarks=(said,)),
        dead_time_floor=made.dead_time_floor,
        structure_gains={},
    )
    assert said in cautions(facts)
