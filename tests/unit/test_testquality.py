"""The verdict on a test: measured logs, and one fault at a time on an invented one."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from pipeline.bumps import find_bumps, find_moves
from pipeline.findings import Caution
from pipeline.intake import Column, Log, read_log
from pipeline.settings import LoopSheet
from pipeline.sheetfile import load_sheet
from pipeline.testquality import RULES, Quality, judge

DATA = Path(__file__).parent.parent / "data"
NOTHING = LoopSheet()


def column(name: str) -> Column:
    return Column(name=name, index=1, unit=None, reason="test")


def make(*, t=None, pv=None, co=None, sp=None, automatic=None) -> Log:
    """Two moves of 5 % on a first-order process, gain 2, lag 20 s, dead time 4 s, noise 0.05."""
    t = np.arange(300.0) if t is None else t
    co = np.where(t < 60, 40.0, np.where(t < 180, 45.0, 40.0)) if co is None else co
    if pv is None:
        up = 1.0 - np.exp(-np.maximum(t - 64.0, 0.0) / 20.0)
        down = 1.0 - np.exp(-np.maximum(t - 184.0, 0.0) / 20.0)
        pv = 50.0 + 10.0 * (up - down) + np.random.default_rng(7).normal(0.0, 0.05, t.size)
    return Log(
        file="log.csv", sha256="0" * 64, rows=t.size, start=None, t=t, pv=pv, co=co, sp=sp, automatic=automatic,
        time_column=column("t"), pv_column=column("PV"), co_column=column("CO"),
        sp_column=None if sp is None else column("SP"), mode_column=None, notes=(),
    )  # fmt: skip


def verdict(log: Log, sheet: LoopSheet = NOTHING) -> Quality:
    return judge(log, find_bumps(log), sheet=sheet)


def stops(quality: Quality) -> set[str]:
    return {f.code for f in quality.findings if f.level == "stop"}


def cares(quality: Quality) -> set[str]:
    return {f.code for f in quality.findings if f.level == "care"}


# file, times of the first moves [s], verdict, findings of level stop
REAL = [
    ("converter_underdamped_negative_gain.csv", [0.0029, 0.0056, 0.0069, 0.0095], "use with care", set()),
    ("heated_box_step_test.csv", [59.6, 797.6], "use with care", set()),
    ("heater_degF_three_bumps.csv", [63, 168, 505], "use with care", set()),
    ("heater_kelvin_three_bumps.csv", [11.04, 201.78, 402.51], "use with care", set()),
    ("heating_system_daisy.dat", [400, 800, 1000, 1200, 1400], "use with care", set()),
    ("plant_flow_routine_no_bump.csv", [], "do not use", {"no-move"}),
    ("sim_heater_open_loop.csv", [60, 900, 1650], "use with care", set()),
    ("sim_heater_closed_loop_pi.csv", [], "do not use", {"closed-loop", "no-move"}),
    ("two_heaters_two_bumps.txt", [10.0, 200.2], "use with care", set()),
]


@pytest.mark.parametrize(("name", "moves", "expected", "stopped"), REAL)
def test_measured_logs_get_their_moves_and_verdict(name, moves, expected, stopped):
    # the times of one count 0, 1, 2 and its origin says seconds
    seconds = LoopSheet.model_validate({"time": {"unit": "s"}})
    log = read_log(DATA / name, sheet=seconds if "degF" in name else NOTHING)
    found = [m.at_s for m in find_moves(log)]
    assert len(found) == len(moves)
    # within the 30 us a ramped move of the converter takes, one row elsewhere
    np.testing.assert_allclose(found, moves, atol=1.1 * log.interval if log.interval > 1e-4 else 5e-5)
    quality = verdict(log)
    assert quality.verdict == expected
    assert stops(quality) == stopped


def test_motor_with_two_false_rows_can_be_used():
    quality = verdict(read_log(DATA / "dc_motor_speed_step.csv", sheet=NOTHING))
    assert not stops(quality)
    assert "quantised-pv" in cares(quality)  # steps of 0.73 rad/s in 11.6


def test_square_waves_are_a_good_test():
    log = read_log(DATA / "two_lag_circuit_square_wave.csv", sheet=NOTHING)
    # a change every 50 ms in 1.2 s
    assert len(find_moves(log)) == 23
    assert verdict(log).verdict == "use"


def test_routine_control_is_named_as_such():
    quality = verdict(read_log(DATA / "plant_flow_routine_no_bump.csv", sheet=NOTHING))
    assert "routine control" in quality.findings[0].text


def test_clean_test_is_clean():
    quality = verdict(make())
    assert quality.verdict == "use"
    assert not stops(quality) and not cares(quality)


T = np.arange(300.0)
CLEAN = np.asarray(make().pv)


def _frozen() -> np.ndarray:
    pv = CLEAN.copy()
    pv[68:90] = pv[68]
    return pv


def _holed() -> np.ndarray:
    pv = CLEAN.copy()
    pv[62:75] = np.nan
    return pv


@pytest.mark.parametrize(
    ("log", "code", "level"),
    [
        (make(co=np.full(300, 40.0)), "no-move", "stop"),
        (make(pv=np.full(300, 50.0)), "constant-pv", "stop"),
        (make(pv=50.0 + np.random.default_rng(1).normal(0, 1.0, 300)), "small-move", "stop"),
        (make(pv=CLEAN + np.random.default_rng(1).normal(0, 1.3, 300)), "small-move", "care"),
        (make(pv=CLEAN + 0.02 * np.minimum(T, 150)), "drifting-baseline", "care"),
        (make(pv=_holed()), "gap-on-rise", "care"),
        (make(pv=_frozen()), "frozen-pv", "stop"),
        (make(pv=np.round(CLEAN / 0.5) * 0.5), "quantised-pv", "care"),
        # two fifths of the answer; at a fifth a fit still holds, so that is care
        (make(pv=np.round(CLEAN / 2.0) * 2.0), "quantised-pv", "care"),
        (make(pv=np.round(CLEAN / 4.0) * 4.0), "quantised-pv", "stop"),
        (make(automatic=np.ones(300, dtype=bool)), "closed-loop", "stop"),
        (
            make(co=np.where(T < 5, 40.0, 45.0), pv=np.interp(T, [0, 9, 60], [50, 50, 60])),
            "short-baseline",
            "care",
        ),
    ],
)
def test_one_fault_one_finding(log, code, level):
    quality = verdict(log)
    found = next(f for f in quality.findings if f.code == code)
    assert found.level == level
    assert quality.verdict == ("do not use" if stops(quality) else "use with care")
    # a finding ends with an instruction
    assert found.text.rstrip().endswith(".") and len(found.text.split(". ")) + found.text.count(": ") >= 2


def _frozen_across() -> np.ndarray:
    pv = CLEAN.copy()
    pv[55:120] = pv[55]
    return pv


NOISE = np.random.default_rng(3).normal(0.0, 0.05, 300)
STEPS = np.where(T < 100, 50.0, 55.0)


@pytest.mark.parametrize(
    ("log", "code"),
    [
        # a drift that never heeds the moves travels far and answers nothing
        (make(pv=50.0 + 0.05 * T + NOISE), "small-move"),
        (make(pv=50.0 + 0.5 * T + NOISE), "small-move"),
        (make(pv=_frozen_across()), "frozen-pv"),
        (make(pv=STEPS, sp=STEPS), "wrong-column"),
        (make(pv=3.0 + 1.8 * np.where((T < 60) | (T >= 180), 40.0, 45.0)), "wrong-column"),
        (
            replace(
                make(),
                notes=(Caution(code="duplicates-conflict", level="care", text="60 rows.", value=60.0),),
            ),
            "conflicting-rows",
        ),
    ],
)
def test_a_record_that_cannot_be_trusted_is_refused_for_its_true_reason(log, code):
    quality = verdict(log)
    assert quality.verdict == "do not use"
    assert quality.findings[0].code == code or code in stops(quality)


@pytest.mark.parametrize("pv", [50.0 + 0.1 * np.maximum(T - 64.0, 0.0) + NOISE, CLEAN + 0.003 * T])
def test_ramps_and_answers_on_a_slight_drift_are_answers(pv):
    co = np.where(T < 60, 40.0, 45.0) if pv[-1] > 60 else None
    assert not stops(verdict(make(pv=pv, co=co)))


def test_an_integrating_process_brought_back_to_level_is_a_good_test():
    # every second move makes a ramp stop: the level no longer changes, its slope does
    co = np.where(
        T < 60, 40.0, np.where(T < 120, 45.0, np.where(T < 180, 40.0, np.where(T < 240, 35.0, 40.0)))
    )
    late = np.concatenate([np.full(4, co[0]), co[:-4]])
    quality = verdict(make(co=co, pv=50.0 + np.cumsum(0.02 * (late - 40.0)) + NOISE))
    assert quality.verdict == "use" and not cares(quality)


def test_a_set_point_that_tracks_the_pv_in_manual_is_no_fault():
    assert verdict(make(sp=CLEAN)).verdict == "use"


def test_moves_in_automatic_are_left_out_and_named():
    automatic = np.zeros(300, dtype=bool)
    automatic[:30] = True
    note = next(f for f in verdict(make(automatic=automatic)).findings if f.code == "moves-left-out")
    assert note.level == "note" and "automatic" in note.text


# demo log: what the README beside it says of it
DEMO = sorted((Path(__file__).parents[2] / "demo_logs").glob("*.csv"))
REFUSED = {"heap_temperature_in_automatic": "closed-loop", "sump_level_refused": "small-move"}


@pytest.mark.parametrize("path", DEMO, ids=lambda p: p.stem)
def test_demo_logs_get_the_verdict_their_readme_tells(path):
    sheet = load_sheet(path.with_suffix(".toml"))
    quality = verdict(read_log(path, sheet=sheet), sheet)
    assert stops(quality) == ({REFUSED[path.stem]} if path.stem in REFUSED else set())
    assert (quality.verdict == "do not use") == (path.stem in REFUSED)


def test_few_rows_on_the_rise():
    slow = make()
    thin = make(t=slow.t[::9], pv=slow.pv[::9], co=slow.co[::9])
    assert "few-samples" in cares(verdict(thin)) | stops(verdict(thin))


def test_a_set_point_that_steps_by_itself_is_no_closed_loop():
    log = make(sp=np.where(T < 100, 50.0, 55.0))
    assert verdict(log).verdict == "use"


def test_declared_ranges_are_held_against_the_test():
    sheet = LoopSheet.model_validate({"pv": {"low": 0, "high": 60}, "co": {"low": 0, "high": 45}})
    quality = verdict(make(), sheet)
    assert "pv-at-range-end" in stops(quality)
    assert "co-at-range-end" in cares(quality)


def test_worst_comes_first_and_rules_are_named_once():
    quality = verdict(make(pv=_frozen() + np.random.default_rng(1).normal(0, 1e-9, 300)))
    levels = [f.level for f in quality.findings]
    assert levels == sorted(levels, key=["stop", "care", "note"].index)
    assert len({r.code for r in RULES}) == len(RULES)
    assert all(r.source for r in RULES)
