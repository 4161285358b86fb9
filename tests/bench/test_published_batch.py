"""Logs of the published processes, fitted and tuned; the settings judged on the true process.

Run with: pytest tests/bench/test_published_batch.py -m bench -s
"""

import numpy as np
import pytest
from logs import bump_log
from plants import ROWS, class_of, further, published

from fitters.choose import choose
from fitters.fit import BumpData
from pipeline.loop.margins import margins
from pipeline.loop.simulate import overshoot
from pipeline.tuning.recommend import kind_for
from pipeline.tuning.tuner import tune
from pipeline.tuning.types import Criteria

pytestmark = pytest.mark.bench

NOISE = 0.01
#: A small inverse response drowns in the lags after it, and a person sees an S-shape.
EITHER = {"P8": {"inverse", "settling"}}


@pytest.fixture(scope="module")
def fits():
    out = []
    for seed, (name, kind, process, span) in enumerate([*published(), *further()]):
        t, co, pv = bump_log(process, span=span, rows=ROWS, noise=NOISE, seed=seed)
        new = np.concatenate([[True], np.diff(co) != 0.0])
        data = BumpData(t=t, pv=pv, co_times=t[new], co_values=co[new])
        out.append((name, kind, process, choose(data).best))
    return out


def crossover(process):
    """Gain crossover of the largest PI (motion: PID) with a phase margin of 60 degrees."""
    only = Criteria(phase_margin=60.0, gain_margin=None, max_sensitivity=None, overshoot=None)
    return tune(process, kind=kind_for(process), criteria=only).margins.gain_crossover


def test_fitted_models_answer_like_the_truth_where_it_counts(fits):
    """Within 3 % and 2 degrees from a tenth of the crossover up to it in 95 % of the logs."""
    missed = []
    for name, _, process, fit in fits:
        top = crossover(process)
        omega = np.geomspace(0.1 * top, top, 40)
        ratio = fit.model.frequency_response(omega) / process.frequency_response(omega)
        size, angle = np.max(np.abs(np.abs(ratio) - 1.0)), np.max(np.abs(np.degrees(np.angle(ratio))))
        if size > 0.03 or angle > 2.0:
            missed.append(f"{name}: {fit.structure}, {100 * size:.1f} %, {angle:.2f} degrees")
    print(f"\noutside: {len(missed)} of {len(fits)}", *missed, sep="\n  ")
    assert len(missed) <= 0.05 * len(fits)


def test_the_class_is_right(fits):
    """Settling, integrating, inverse, ringing: right in 97 % of the logs."""
    wrong = []
    for name, kind, _, fit in fits:
        if class_of(fit.model) not in EITHER.get(name[:2], {kind}):
            wrong.append(f"{name}: {kind}, taken for {class_of(fit.model)} ({fit.structure})")
    print(f"\nclass wrong: {len(wrong)} of {len(fits)}", *wrong, sep="\n  ")
    assert len(wrong) <= 0.03 * len(fits)


def test_pi_settings_keep_their_word_on_the_true_process(fits):
    """True phase margin at most 2 degrees below the one said in 95 %, within 2 in 90 %; none unstable."""
    below, away, beyond, lost, table = 0, 0, 0, 0, []
    judged = [(n, p, f) for n, kind, p, f in fits if not kind.startswith("double")]
    for name, process, fit in judged:
        said = tune(fit.model, kind="PI", criteria=Criteria())
        truth = margins(process, said.controller)
        if not truth.stable:
            lost += 1
            continue
        error = truth.phase_margin - said.margins.phase_margin
        error = 0.0 if np.isinf(said.margins.phase_margin) else error
        over = overshoot(process, said.controller) - said.prediction.overshoot
        below += error < -2.0
        away += abs(error) > 2.0
        beyond += abs(over) > 2.0
        table.append((abs(error), name, fit.structure, error, over))
    worst = sorted(table, reverse=True)[:6]
    print(
        f"\nbelow by 2: {below}, away by 2: {away}, overshoot off: {beyond}, unstable: {lost}, of {len(judged)}"
    )
    print(
        *[f"  {n}: {s}, phase margin {e:+.2f} degrees, overshoot {o:+.1f} points" for _, n, s, e, o in worst],
        sep="\n",
    )
    assert lost == 0
    assert below <= 0.05 * len(judged) and away <= 0.10 * len(judged) and beyond <= 0.10 * len(judged)
