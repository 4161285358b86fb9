"""Settings from noisy logs of the published processes, judged on the true ones.

Run with: pytest tests/bench/test_tuning_batch.py -m bench -s
"""

import numpy as np
import pytest
from logs import bump_log, log_data
from plants import ROWS, published

from fitters.choose import choose
from pipeline.loop.margins import margins
from pipeline.loop.simulate import overshoot
from pipeline.settings import LoopSheet
from pipeline.tuning.recommend import recommend, wanted
from pipeline.tuning.tuner import tune
from pipeline.tuning.types import Criteria

pytestmark = pytest.mark.bench

NOISE = 0.01
#: How far the true phase margin may lie off the one said [degrees]: below it in 5 % of the logs,
#: either way in 10 %.
BELOW = {"PI": 2.0, "PID": 4.0}
AWAY = {"PI": 2.0, "PID": 5.0}


@pytest.fixture(scope="module")
def fits():
    out = []
    for seed, (name, _, process, span) in enumerate(published()):
        t, co, pv = bump_log(process, span=span, rows=ROWS, noise=NOISE, seed=1000 + seed)
        out.append((name, process, float(t[1] - t[0]), choose(log_data(t, co, pv))))
    return out


def asked(kind):
    return wanted(
        LoopSheet(),
        kind=kind,
        phase_margin=None,
        gain_margin=None,
        max_sensitivity=None,
        overshoot_pct=None,
    )


@pytest.mark.parametrize("kind", ["PI", "PID"])
def test_settings_keep_their_word_on_the_true_process(fits, kind):
    errors, over, lost, speed, names = [], [], [], [], []
    for name, process, interval, choice in fits:
        made = recommend(choice, asked(kind), log_interval=interval)
        said = made.backed_off
        best = tune(process, kind=kind, criteria=Criteria())
        truth = margins(process, said.controller)
        if not truth.stable:
            lost.append(name)
            continue
        names.append(f"{name} ({choice.best.structure}, dead time {choice.best.model.dead_time:.3g})")
        errors.append(truth.phase_margin - said.margins.phase_margin)
        over.append(overshoot(process, said.controller) - said.prediction.overshoot)
        ours, ideal = made.tuning.controller, best.controller
        speed.append(ours.gain / ours.integral_time / (ideal.gain / ideal.integral_time))
    e, o, v = np.array(errors), np.array(over), np.array(speed)
    n = len(fits)
    print(
        f"\n{kind}: below by {BELOW[kind]:g}: {np.sum(e < -BELOW[kind])}, away by {AWAY[kind]:g}: "
        f"{np.sum(np.abs(e) > AWAY[kind])}, overshoot off by 2: {np.sum(np.abs(o) > 2.0)}, "
        f"unstable {lost}, of {n}; "
        f"90th percentile of |error| {np.percentile(np.abs(e), 90):.2f} degrees, of |overshoot| "
        f"{np.percentile(np.abs(o), 90):.2f} points; integral gain over the best: median {np.median(v):.3f}, "
        f"5th percentile {np.percentile(v, 5):.3f}, 95th {np.percentile(v, 95):.3f}"
    )
    for k in np.argsort(-np.abs(e))[:8]:
        print(f"  {names[k]}: {e[k]:+.2f} degrees, overshoot {o[k]:+.1f} points, speed {v[k]:.3f}")
    assert not lost
    assert np.sum(e < -BELOW[kind]) <= 0.05 * n and np.sum(np.abs(e) > AWAY[kind]) <= 0.10 * n
    if kind == "PI":
        assert np.sum(np.abs(o) > 2.0) <= 0.10 * n
        assert np.median(v) >= 0.95 and np.percentile(v, 5) >= 0.8


def test_bands_hold_the_truth_and_are_narrow(fits):
    """The 90 % bands of phase margin and overshoot: at least 85 % hold, median width at most 12 degrees."""
    phase, over, width, missed = 0, 0, [], []
    for name, process, interval, choice in fits:
        made = recommend(choice, asked("PI"), log_interval=interval)
        controller, bands = made.backed_off.controller, made.backed_off.bands
        truth = margins(process, controller)
        above = overshoot(process, controller) if truth.stable else np.inf
        low, _, high = bands.phase_margin
        phase += low <= truth.phase_margin <= high
        over += bands.overshoot[0] - 1e-6 <= above <= bands.overshoot[2] + 1e-6
        width.append(high - low)
        if not low <= truth.phase_margin <= high:
            missed.append(
                f"{name} ({choice.best.structure}): {truth.phase_margin:.1f} not in {low:.1f} to {high:.1f}"
            )
    n = len(fits)
    print(
        f"\nphase margin held {100 * phase / n:.1f} %, overshoot held {100 * over / n:.1f} %, "
        f"median width {np.median(width):.1f} degrees, of {n}"
    )
    print(*missed, sep="\n")
    assert phase >= 0.85 * n and over >= 0.85 * n and np.median(width) <= 12.0
