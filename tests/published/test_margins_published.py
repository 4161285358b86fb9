"""Margins against published values; the tables carry their sources."""

import json
from pathlib import Path

import numpy as np
import pytest

from fitters.process import ProcessModel
from pipeline.loop.forms import from_series
from pipeline.loop.margins import margins
from pipeline.loop.simulate import predict, stable_in_time
from pipeline.loop.types import Controller
from pipeline.tuning.tuner import tune
from pipeline.tuning.types import Criteria

TABLES = json.loads((Path(__file__).parent / "margins_tables.json").read_text(encoding="utf-8"))


def plant(p):
    num, den = np.array([float(p.get("k", 1.0))]), np.array([1.0])
    for z in p.get("zeros", ()):
        num = np.polymul(num, [z, 1.0])
    for lag in p.get("lags", ()):
        den = np.polymul(den, [lag, 1.0])
    den = np.concatenate([den, np.zeros(p.get("ints", 0))])
    return ProcessModel(numerator=tuple(num), denominator=tuple(den), dead_time=p.get("delay", 0.0))


def series(c):
    if "ki" in c:
        return Controller(kind="I", gain=c["ki"], action="reverse", integral_time=1.0)
    k, ti, td = from_series(c["Kc"], c["tauI"], c["tauD"])
    return Controller(
        kind="PID" if td else "PI", gain=k, action="reverse", integral_time=ti, derivative_time=td
    )


@pytest.mark.parametrize("row", TABLES["simc"]["rows"], ids=lambda r: r["id"])
def test_maximum_sensitivity_of_the_simc_examples(row):
    # Printed to three digits: half a unit of the last, and a thousandth for rounded settings.
    m = margins(plant(row["plant"]), series(row["controller"]))
    assert m.stable and m.max_sensitivity == pytest.approx(row["Ms_published"], abs=0.006)


@pytest.mark.parametrize("row", TABLES["dead_time_integrator"]["rows"], ids=lambda r: f"K={r['K']:.3g}")
@pytest.mark.parametrize("ratio", [0.2, 10.0])
def test_pole_cancelling_pi_has_closed_form_margins(row, ratio):
    k = row["K"]
    model = ProcessModel(numerator=(2.0,), denominator=(ratio, 1.0), dead_time=1.0)
    c = Controller(kind="PI", gain=k * ratio / 2.0, action="reverse", integral_time=ratio)
    m = margins(model, c)
    assert m.phase_margin == pytest.approx(90.0 - np.degrees(k), abs=1e-6)
    assert m.gain_margin == pytest.approx(np.pi / 2.0 / k, abs=1e-6)
    assert m.delay_margin == pytest.approx((np.pi / 2.0 - k) / k, abs=1e-6)
    assert m.max_sensitivity == pytest.approx(row["Ms"], abs=1e-5)
    p = predict(model, c)
    assert p.overshoot == pytest.approx(row["OS"], abs=0.1)
    error = np.trapezoid(np.abs(1.0 - p.setpoint.pv), p.setpoint.t)
    assert error == pytest.approx(row["IAE"], rel=2e-3)


@pytest.mark.parametrize("row", TABLES["unstable_lag"]["rows"], ids=lambda r: f"L/T={r['L_over_T']}")
def test_best_phase_margin_of_a_runaway_lag_is_found_and_said(row):
    model = ProcessModel(numerator=(1.0,), denominator=(1.0, -1.0), dead_time=row["L_over_T"])
    for k, good in (
        (row["KKc_max"] * 0.999, True),
        (row["KKc_max"] * 1.001, False),
        (0.999, False),
        (1.001, True),
    ):
        c = Controller(kind="P", gain=k, action="reverse")
        assert margins(model, c).stable is good and stable_in_time(model, c) is good
    t = tune(model, kind="P", criteria=Criteria(gain_margin=None, max_sensitivity=None, overshoot=None))
    assert not t.reached and "target-not-reached" in {r.code for r in t.remarks}
    assert t.margins.phase_margin == pytest.approx(row["PM_max_deg"], abs=0.02)
    assert t.controller.gain == pytest.approx(row["KKc_bestPM"], rel=0.02)


def test_unstable_plant_with_pi_has_margins_both_ways():
    # Skogestad and Postlethwaite (2005), Ex. 2.5: 18.7, 0.21, 59.5, 1.19, 1.38 (to the digits printed).
    den = np.polymul([1.0, -1.0], np.polymul([0.02, 1.0], [0.02, 1.0]))
    m = margins(
        ProcessModel(numerator=(4.0,), denominator=tuple(den)),
        Controller(kind="PI", gain=1.25, action="reverse", integral_time=1.5),
    )
    assert m.gain_margin == pytest.approx(18.7, abs=0.05)
    assert m.gain_reduction_margin == pytest.approx(0.21, abs=0.005)
    assert m.phase_margin == pytest.approx(59.5, abs=0.05)
    assert (m.max_sensitivity, m.max_complementary) == pytest.approx((1.19, 1.38), abs=0.005)
