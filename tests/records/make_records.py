"""Write the two records of schema version 1 that the tests read: run it only for a new version.

The loops are Emberfold's: TIC-101, the air of pasteurising tunnel 1, and LIC-204, the sump of
the humidifier, whose test was too noisy to use. Everything is computed here from a first-order
model with dead time, on its own: nothing comes from the program under test but the types.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np

from fitters.process import ProcessModel
from pipeline import record as r

FOLDER = Path(__file__).parent
GAIN, LAG, DEAD = 1.62, 184.0, 36.0
KC, TI = 1.35, 184.0


def closed_loop(gain: float, lag: float, dead: float, *, load: bool, t_end: float = 900.0, dt: float = 0.25):
    n = int(t_end / dt) + 1
    pv, co = np.zeros(n), np.zeros(n)
    held, integral, d = 0.0, 0.0, round(dead / dt)
    sp = 0.0 if load else 1.0
    for k in range(n):
        pv[k] = held
        error = sp - held
        integral += error * dt / TI
        co[k] = KC * (error + integral)
        u = (co[k - d] if k >= d else 0.0) + (1.0 if load and k >= d else 0.0)
        held += dt * (gain * u - held) / lag
    return np.arange(n) * dt, pv, co


def margins() -> r.MarginsInfo:
    w = np.geomspace(1e-4, 1.0, 200_001)
    loop = ProcessModel(numerator=(GAIN,), denominator=(LAG, 1.0), dead_time=DEAD).frequency_response(w)
    loop = loop * KC * (1 + 1 / (1j * w * TI))
    phase = np.degrees(np.unwrap(np.angle(loop)))
    i = int(np.argmax(np.abs(loop) < 1))
    j = int(np.argmax(phase < -180))
    pm, gm = 180 + phase[i], 1 / abs(loop[j])
    return r.MarginsInfo(
        phase_margin_deg=pm,
        gain_margin=gm,
        gain_reduction_margin=0.0,
        max_sensitivity=np.max(1 / np.abs(1 + loop)),
        max_complementary=np.max(np.abs(loop / (1 + loop))),
        delay_margin_s=np.radians(pm) / w[i],
        gain_crossover=w[i],
        phase_crossover=w[j],
        crossings=(
            r.CrossingInfo(kind="gain", omega=w[i], phase_margin_deg=pm),
            r.CrossingInfo(kind="phase", omega=w[j], magnitude=1 / gm),
        ),
    )


def log_of(noise: float, seed: int):
    rng = np.random.default_rng(seed)
    t = np.arange(0.0, 2700.0, 2.0)
    co = np.where(t < 300, 42.0, np.where(t < 1200, 47.0, np.where(t < 1950, 39.0, 42.0)))
    model = ProcessModel(numerator=(GAIN,), denominator=(LAG, 1.0), dead_time=DEAD)
    clean = 61.0 + 0.0001 * t
    for at, size in ((300.0, 5.0), (1200.0, -8.0), (1950.0, 3.0)):
        clean = clean + size * model.step_response(t - at)
    wander = np.zeros(t.size)
    for k in range(1, t.size):
        wander[k] = 0.7 * wander[k - 1] + rng.normal(0.0, noise)
    return t, clean + wander, co, clean


def caution(code: str, level: str, text: str, value: float | None = None, limit: float | None = None):
    return r.CautionInfo(code=code, level=level, text=text, value=value, limit=limit)


GENERAL = (
    caution(
        "safety-functions",
        "care",
        "Safety functions are outside this report. They were not changed, bypassed or credited.",
    ),
    caution(
        "permit",
        "care",
        "Change settings only under the site's permit and change rules, with the area operator informed, "
        "and keep the as-found settings at hand.",
    ),
    caution(
        "starting-setting",
        "note",
        "This is a starting setting computed from one small test around one operating point. "
        "It is not proof of stability at other loads, products or with worn equipment.",
    ),
)

CRITERIA = r.CriteriaInfo(
    phase_margin_deg=60,
    gain_margin=2.5,
    max_sensitivity=1.8,
    overshoot_pct=10,
    percentile=5,
    percentile_phase_margin_deg=45,
)
MADE = r.Made(program="firstgain", version="0.1.0", created="2026-03-14T09:26:00+01:00")


def log_info(file: str, sha: str, pv: str, co: str) -> r.LogInfo:
    return r.LogInfo(
        file=file,
        sha256=sha,
        rows=1350,
        span_s=2698,
        sample_s=2,
        columns=r.Columns(time="Time", pv=pv, co=co, mode="Mode"),
        mode="open-loop",
    )


def bumps(*used: bool) -> tuple[r.BumpInfo, ...]:
    spans = ((0, 1200, 300, 42, 47), (1200, 1950, 1200, 47, 39), (1950, 2698, 1950, 39, 42))
    return tuple(
        r.BumpInfo(start_s=a, end_s=b, moves=(r.Move(at_s=at, from_=old, to=new),), used=u)
        for (a, b, at, old, new), u in zip(spans, used, strict=True)
    )


def series(t, pv, co, fitted=None) -> r.Series:
    rows = r.thinned_rows(list(co), list(pv))
    return r.Series(
        t_s=t[rows],
        pv=pv[rows],
        co=co[rows],
        fitted=None if fitted is None else fitted[rows],
        residual=None if fitted is None else (pv - fitted)[rows],
        pv_unit="°C",
        co_unit="%",
    )


def ready() -> r.Record:
    t, pv, co, fitted = log_of(0.09, 101)
    ts, step, move = closed_loop(GAIN, LAG, DEAD, load=False)
    tl, dip, back = closed_loop(GAIN, LAG, DEAD, load=True)
    every = slice(None, None, 10)
    rng = np.random.default_rng(1)
    plausible = [
        closed_loop(GAIN * k, LAG * q, DEAD * d, load=False)[1]
        for k, q, d in np.exp(rng.normal(0.0, (0.03, 0.06, 0.10), (40, 3)))
    ]
    low, high = np.percentile(plausible, (5, 95), axis=0)
    overs = [100 * max(p.max() - 1, 0) for p in plausible]
    inside = (ts > 0) & (np.abs(step - 1) < 0.05)
    settle = ts[len(ts) - int(np.argmin(inside[::-1]))]
    rise = ts[int(np.argmax(step > 0.9))] - ts[int(np.argmax(step > 0.1))]
    return r.Record(
        made=MADE,
        verdict="ready with cautions",
        loop={
            "loop": {
                "tag": "TIC-101",
                "service": "Pasteurising tunnel 1, air temperature",
                "duty": "temperature",
            },
            "people": {"tested_by": "I. Halvorsen", "checked_by": None, "approved_by": None},
            "references": {"permit": "EF-2026-031"},
        },
        log=log_info("tunnel_1_air.csv", "9f2c" * 16, "TT-101 °C", "TIC-101.OUT %"),
        bumps=bumps(True, True, True),
        quality=r.QualityInfo(
            verdict="use with care",
            findings=(
                caution(
                    "drift",
                    "care",
                    "The PV drifted by 5.4 % of its move during the test; a straight line was taken out.",
                    5.4,
                    5.0,
                ),
                caution("signal-to-noise", "note", "The PV moved 62 times its noise.", 62.0, 10.0),
            ),
        ),
        model=r.ModelInfo(
            structure="lag",
            gain=GAIN,
            gain_unit="°C/%",
            integrators=0,
            dead_time_s=DEAD,
            numerator=(GAIN,),
            denominator=(LAG, 1.0),
            parameters={
                "gain": r.ParameterInfo(value=GAIN, unit="°C/%", stderr=0.025, low=1.571, high=1.669),
                "lag": r.ParameterInfo(value=LAG, unit="s", stderr=5.6, low=173.0, high=195.0),
                "dead_time": r.ParameterInfo(value=DEAD, unit="s", stderr=1.8, low=32.5, high=39.5),
            },
            correlation=((1.0, 0.62, -0.2), (0.62, 1.0, -0.48), (-0.2, -0.48, 1.0)),
        ),
        fit=r.FitInfo(
            fit_pct=96.2,
            rmse=0.126,
            noise_sd=0.126,
            noise_correlation_s=5.6,
            effective_samples=240,
            drift_per_s=0.0001,
            converged=True,
            starts_agreeing=7,
        ),
        candidates=(
            r.CandidateInfo(structure="lag", score=0, weight=0.78, gain_recommended=1.35),
            r.CandidateInfo(structure="two_lags", score=2.6, weight=0.21, gain_recommended=1.29),
            r.CandidateInfo(structure="integrator", score=412, weight=0, gain_recommended=2.1),
        ),
        choice_reason="A second lag does not explain more than it costs, and would change the gain by 4 %.",
        controller=r.ControllerInfo(
            kind="PI",
            equation="standard",
            action="reverse",
            gain=1.35,
            gain_unit="%/%",
            gain_engineering=KC,
            integral_s=TI,
            derivative_s=0,
            filter_s=0,
            setpoint_weight=1,
            derivative_setpoint_weight=0,
            pv_filter_s=0,
            scan_s=0.5,
            as_entered={
                "Gain": r.Entered(value=1.35, unit="%/%"),
                "Integral time": r.Entered(value=3.07, unit="min per repeat"),
                "Derivative time": r.Entered(value="off", unit=""),
            },
        ),
        action_words="Reverse acting: when the PV rises, the output must fall.",
        criteria=CRITERIA,
        binding="phase_margin",
        backoff=r.Backoff(factor=0.88, source="spread between bumps"),
        margins=margins(),
        prediction=r.PredictionInfo(
            overshoot_pct=100 * (step.max() - 1),
            rise_s=rise,
            settling_s=settle,
            load_peak=dip.max(),
            load_integrated_error=TI / KC,
            co_peak=np.abs(move).max(),
            noise_gain=KC,
            setpoint=r.SetpointResponse(
                t_s=ts[every], pv=step[every], co=move[every], low=low[every], high=high[every]
            ),
            load=r.LoadResponse(t_s=tl[every], pv=dip[every], co=back[every]),
        ),
        bands=r.BandsInfo(
            phase_margin_deg=(55.8, 61.7, 66.9),
            gain_margin=(2.92, 3.3, 3.74),
            max_sensitivity=(1.43, 1.51, 1.62),
            overshoot_pct=tuple(np.percentile(overs, (5, 50, 95))),
            unstable_share=0,
        ),
        as_found=r.AsFound(
            as_entered={
                "Gain": r.Entered(value=0.8, unit="%/%"),
                "Integral time": r.Entered(value=6.0, unit="min per repeat"),
            }
        ),
        cautions=(
            caution(
                "drift",
                "care",
                "The PV drifted by 5.4 % of its move during the test; a straight line was taken out.",
                5.4,
                5.0,
            ),
            caution(
                "clock",
                "care",
                "Dead time relies on the clock of the export and on knowing every filter. If PV and CO came "
                "from different clocks, the dead time may be wrong by that difference.",
            ),
            *GENERAL,
        ),
        next_steps=(
            "Write down the as-found settings, then enter the settings above in manual and read them back.",
            "Step the set point by 2 to 5 % both ways and compare the first peak with the prediction.",
            "If the PV grows in two successive half-cycles, return to the as-found settings.",
        ),
        series=series(t, pv, co, fitted),
    )


def withheld() -> r.Record:
    t, pv, co, _ = log_of(4.0, 204)
    return r.Record(
        made=MADE,
        verdict="withheld",
        loop={"loop": {"tag": "LIC-204", "service": "Humidifier sump level", "duty": "level"}},
        log=log_info("sump_level.csv", "41b7" * 16, "LT-204", "LIC-204.OUT"),
        bumps=bumps(True, True, False),
        quality=r.QualityInfo(
            verdict="do not use",
            findings=(
                caution(
                    "signal-to-noise", "stop", "The PV moved only 1.4 times its noise; 5 is needed.", 1.4, 5.0
                ),
                caution(
                    "third-bump",
                    "note",
                    "The third bump was set aside: the second had not settled.",
                ),
            ),
        ),
        criteria=CRITERIA,
        cautions=(
            caution(
                "signal-to-noise",
                "stop",
                "The PV moved only 1.4 times its noise; 5 is needed. No settings are given.",
                1.4,
                5.0,
            ),
            *GENERAL,
        ),
        next_steps=(
            "Repeat the test with a move of 12 to 20 % of the CO, if the sump has room for it.",
            "Look for the cause of the noise first: a float guide or an unbaffled inlet.",
        ),
        series=series(t, pv, co),
    )


if __name__ == "__main__":
    r.write_record(ready(), FOLDER / "v1_ready.json")
    r.write_record(withheld(), FOLDER / "v1_withheld.json")
