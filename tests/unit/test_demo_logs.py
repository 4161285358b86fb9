"""The demo logs are what their script makes, and their script simulates what it says."""

import dataclasses
import importlib.util
import json
import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from scipy import signal

from pipeline.sheetfile import load_sheet

DEMO_LOGS = Path(__file__).parents[2] / "demo_logs"
SCRIPT = DEMO_LOGS / "make_logs.py"


def load_script():
    spec = importlib.util.spec_from_file_location("make_logs", SCRIPT)
    module = importlib.util.module_from_spec(spec)
    sys.modules["make_logs"] = module
    spec.loader.exec_module(module)
    return module


make_logs = load_script()
BY_HAND = [demo for demo in make_logs.DEMOS if demo.automatic is None]
SETTLING = [demo for demo in BY_HAND if demo.truth.denominator[-1] != 0.0]
names = {"ids": lambda demo: demo.name}


def test_the_script_rewrites_the_same_bytes(tmp_path):
    subprocess.run([sys.executable, str(SCRIPT), str(tmp_path)], check=True, timeout=60)
    written = {path.name: path.read_bytes() for path in tmp_path.iterdir()}
    kept = {path.name: path.read_bytes() for path in [*DEMO_LOGS.glob("*.csv"), DEMO_LOGS / "truth.json"]}
    assert written.keys() == kept.keys()
    assert [name for name in kept if written[name] != kept[name]] == []


def test_the_script_leans_on_nothing_it_is_used_to_test():
    roots = set(re.findall(r"^(?:from|import) (\w+)", SCRIPT.read_text(encoding="utf-8"), re.M))
    assert roots - sys.stdlib_module_names == {"numpy", "scipy"}


@pytest.mark.parametrize("demo", BY_HAND, **names)
def test_simulation_agrees_with_scipy_on_a_shifted_input(demo):
    quiet = make_logs.Noise(white=0.0)
    run = make_logs.in_manual(dataclasses.replace(demo, noise=quiet), np.random.RandomState(0))

    # scipy's lsim on a grid that holds every arrival: dead times are multiples of 5 ms here
    step = 0.005 if demo.t[-1] < 300 else 1.0
    grid = np.arange(0.0, demo.t[-1] + 2 * step, step)
    shifted = np.zeros(grid.size)
    for at, co in demo.moves[1:]:
        shifted[grid >= at + demo.truth.dead_time - 1e-9] = co - demo.moves[0][1]
    system = (demo.truth.numerator, demo.truth.denominator)
    _, response, _ = signal.lsim(system, shifted, grid, interp=False)
    at_rows = np.interp(demo.t, grid, response)  # kinks fall on the grid, so only curvature is lost

    move = np.ptp(response)
    assert run.pv - demo.pv == pytest.approx(at_rows, abs=2e-4 * move)


@pytest.mark.parametrize("demo", SETTLING, **names)
def test_gain_read_off_the_log_by_eye_is_the_truth(demo):
    """Levels before and after each hold, as one reads them off a trend (common practice)."""
    run = make_logs.in_manual(demo, np.random.RandomState(demo.seed))
    times = [at for at, _ in demo.moves[1:]]
    first, second = times[0], times[1]
    before = run.pv[(demo.t > first - 0.15 * (second - first)) & (demo.t <= first)].mean()
    after = run.pv[(demo.t > second - 0.15 * (second - first)) & (demo.t <= second)].mean()
    gain = (after - before) / (demo.moves[1][1] - demo.moves[0][1])
    expected = demo.truth.numerator[-1] / demo.truth.denominator[-1]
    assert gain == pytest.approx(expected, rel=0.03)  # drift over one hold is below 2 % of the move


def test_the_heap_follows_its_set_point_in_automatic():
    demo = next(demo for demo in make_logs.DEMOS if demo.automatic)
    run = make_logs.under_control(demo, np.random.RandomState(demo.seed))
    settled = (demo.t > 18000) & (demo.t < 22000)
    assert run.pv[settled].mean() == pytest.approx(60.0, abs=0.1)
    # left alone this heap runs away: its pole is in the right half-plane
    assert max(np.roots(demo.truth.denominator).real) > 0


def test_the_test_to_be_refused_moves_less_than_its_noise():
    demo = next(demo for demo in make_logs.DEMOS if demo.name == "sump_level_refused")
    quiet = dataclasses.replace(demo, noise=make_logs.Noise(white=0.0))
    moved = np.ptp(make_logs.in_manual(quiet, np.random.RandomState(0)).pv)
    noisy = make_logs.in_manual(demo, np.random.RandomState(demo.seed)).pv
    assert moved < np.std(noisy[demo.t < demo.moves[1][0]])


def test_sizes_are_a_loggers():
    truth = json.loads((DEMO_LOGS / "truth.json").read_text(encoding="utf-8"))
    assert all(300 <= entry["rows"] <= 2500 for entry in truth.values())
    assert {path.stem for path in DEMO_LOGS.glob("*.csv")} == truth.keys()


def test_every_log_has_a_loop_sheet_with_its_tag():
    truth = json.loads((DEMO_LOGS / "truth.json").read_text(encoding="utf-8"))
    for name, entry in truth.items():
        assert load_sheet(DEMO_LOGS / f"{name}.toml").loop.tag == entry["tag"]


def test_sheets_enter_settings_in_many_ways():
    sheets = [load_sheet(path).controller for path in DEMO_LOGS.glob("*.toml")]
    assert {s.equation for s in sheets} == {"standard", "series", "parallel"}
    assert {(s.proportional, s.proportional_basis) for s in sheets} >= {
        ("gain", "span"),
        ("gain", "engineering"),
        ("band", "span"),
    }
    assert len({s.integral for s in sheets}) >= 4


@pytest.mark.parametrize("demo", make_logs.DEMOS, **names)
def test_action_in_the_sheet_suits_the_sign_of_the_process(demo):
    rising = demo.truth.numerator[-1] > 0  # once the inverse response is over
    action = load_sheet(DEMO_LOGS / f"{demo.name}.toml").controller.action
    assert action == ("reverse" if rising else "direct")
