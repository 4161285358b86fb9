"""Random loops of every structure and controller: both computations agree, and nothing given is unstable.

Run with: pytest tests/bench/test_random_loops.py -m bench -s
"""

from dataclasses import replace

import numpy as np
import pytest

from fitters.process import ProcessModel
from pipeline.loop.agreement import check_agreement
from pipeline.loop.controller import loop_response
from pipeline.loop.forms import action_for_model
from pipeline.loop.margins import margins
from pipeline.loop.simulate import overshoot, predict, stable_in_time
from pipeline.loop.types import Controller
from pipeline.tuning.tuner import tune
from pipeline.tuning.types import Criteria

pytestmark = pytest.mark.bench

LOOPS = 2000
TUNED = 2000
KINDS = ("P", "I", "PI", "PD", "PID")


def random_process(rng, *, runaway):
    """Draw one of a dozen structures: lags, ringing, inverse, integrating, dead time, and running away."""
    scale = 10.0 ** rng.uniform(-2, 3)
    gain = float(rng.choice([-1.0, 1.0]) * 10.0 ** rng.uniform(-2, 2))
    t = scale * 10.0 ** rng.uniform(-1, 1, size=3)
    z = rng.uniform(0.05, 1.2)
    shapes = {
        "lag": ([1.0], [t[0], 1.0]),
        "two lags": ([1.0], np.polymul([t[0], 1.0], [t[1], 1.0])),
        "equal lags": ([1.0], np.poly1d([t[0], 1.0]) ** int(rng.integers(3, 7))),
        "ringing": ([1.0], [t[0] ** 2, 2.0 * z * t[0], 1.0]),
        "inverse": ([-t[2], 1.0], np.polymul([t[0], 1.0], [t[1], 1.0])),
        "level": ([1.0], [scale, 0.0]),
        "level with lag": ([1.0], [scale * t[0], scale, 0.0]),
        "level with inverse": ([-t[2], 1.0], [scale * t[0], scale, 0.0]),
        "double": ([1.0], [scale**2, 0.0, 0.0]),
        "dead time": ([1.0], [1.0]),
    }
    if runaway:
        shapes["runaway"] = ([1.0], [t[0], -1.0])
        shapes["runaway with lag"] = ([1.0], np.polymul([t[0], -1.0], [0.1 * t[0], 1.0]))
    name = str(rng.choice(list(shapes)))
    num, den = shapes[name]
    late = 0.0 if rng.random() < 0.05 and name != "dead time" else scale * 10.0 ** rng.uniform(-2, 0.5)
    return name, ProcessModel(
        numerator=tuple(gain * np.asarray(num)), denominator=tuple(np.asarray(den)), dead_time=late
    )


def random_controller(rng, model, kind):
    """Draw times on the loop's own scale and a gain within a factor of thirty of where |L| is one."""
    roots = np.abs(np.concatenate([model.poles, model.zeros]))
    own = np.concatenate([1.0 / roots[roots > 0.0], [model.dead_time] if model.dead_time else []])
    base = float(rng.choice(own)) if own.size else 1.0
    integral = base * 10.0 ** rng.uniform(-1, 1.5) if kind in ("I", "PI", "PID") else np.inf
    derivative = base * 10.0 ** rng.uniform(-2, 0.5) if kind in ("PD", "PID") else 0.0
    c = Controller(
        kind=kind,
        gain=1.0,
        action=action_for_model(model),
        integral_time=integral,
        derivative_time=derivative,
        derivative_filter=derivative / 10.0,
        setpoint_weight=float(rng.choice([0.0, 0.5, 1.0])),
        pv_filter=float(rng.choice([0.0, 0.1 * base])),
        scan=float(rng.choice([0.0, 0.05 * base])),
    )
    size = abs(complex(loop_response(model, c, np.array([1.0 / base]))[0]))
    return replace(c, gain=10.0 ** rng.uniform(-1.5, 1.5) / size)


def test_count_and_simulation_agree_on_stability():
    rng = np.random.default_rng(77)
    stable, differ, alarms = 0, [], []
    for k in range(LOOPS):
        kind = KINDS[k % len(KINDS)]
        name, model = random_process(rng, runaway=True)
        c = random_controller(rng, model, kind)
        m = margins(model, c)
        stable += m.stable
        near = m.stable and (m.gain_margin < 1.005 or m.gain_reduction_margin > 1.0 / 1.005)
        if m.stable != stable_in_time(model, c) and not near:
            differ.append((name, kind, m.stable, model, c))
        elif m.stable and k % 4 == 0:
            try:
                check_agreement(model, c, m, predict(model, c))
            except Exception as error:
                alarms.append((name, kind, str(error), model, c))
    print(
        f"\n{LOOPS} loops, {stable} stable; differ: {len(differ)}; false alarms of the check: {len(alarms)}"
    )
    print(*differ[:5], *alarms[:5], sep="\n")
    assert not differ and not alarms
    assert 0.2 * LOOPS < stable < 0.8 * LOOPS


def test_no_settings_given_are_unstable_nor_of_the_slow_branch():
    rng = np.random.default_rng(78)
    given, unstable, slow = 0, [], []
    criteria = Criteria()
    for k in range(TUNED):
        kind = KINDS[k % len(KINDS)]
        name, model = random_process(rng, runaway=True)
        t = tune(model, kind=kind, criteria=criteria)
        if {r.code for r in t.remarks} & {"no-stabilising-gain", "no-gain-limit"}:
            continue
        given += 1
        c = t.controller
        if not (margins(t.model, c).stable and stable_in_time(t.model, c)):
            unstable.append((name, kind, model, c))
        if t.reached:
            # The fast branch ends above: a little more gain must break a criterion.
            more = replace(c, gain=1.002 * c.gain)
            m = margins(t.model, more)
            broken = not m.stable or (
                m.phase_margin < 60.0
                or m.gain_margin < 2.5
                or m.max_sensitivity > 1.8
                or overshoot(t.model, more) > 10.0
            )
            if not broken:
                slow.append((name, kind, t.binding, model, c))
    print(f"\n{given} settings given of {TUNED}; unstable: {len(unstable)}; slow branch: {len(slow)}")
    print(*unstable[:5], *slow[:8], sep="\n")
    assert not unstable and not slow
