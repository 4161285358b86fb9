"""How often each detector finds its fault at a harmful size, and how often it cries out over a clean test.

Processes are drawn anew for each log. The sizes are those at which common practice finds settings go
wrong: a load step of a fifth of the answer, a drift of 0.3 % a minute on a 5 % move, an archive that
waits for a change of a tenth of the answer, a gain that is a fifth less after a reversal.
"""

import numpy as np
import pytest
from quality_corpus import (
    BOTH_WAYS,
    STAIRS,
    UP,
    Process,
    late_output,
    on_change,
    on_lines,
    simulate,
)

from pipeline.bumps import find_bumps
from pipeline.intake import read_log
from pipeline.testquality import judge

#: Logs a detector is tried on; the bounds hold for the count, not for a rate behind it.
LOGS = 20
FOUND, FALSE = 0.9, 0.05


def drawn(rng, **fixed):
    """A process a test of 5 % shows well: its answer stands 25 to 100 times above the noise."""
    lag = rng.uniform(12.0, 32.0)
    gain = rng.uniform(1.0, 4.0) * rng.choice([-1, 1])
    return Process(
        **{
            "lags": (lag, rng.choice([0.5, 0.3 * lag])),
            "dead": round(rng.uniform(0.1, 0.5) * lag, 1),
            "gain": gain,
            "noise": 5.0 * abs(gain) / rng.uniform(25.0, 100.0),
            **fixed,
        }
    )


def answer(process):
    return 5.0 * abs(process.gain)


def oscillation(rng):
    p = drawn(rng)
    test = simulate(rng, p)
    size, period = rng.uniform(0.12, 0.3) * answer(p), rng.uniform(0.8, 1.3) * sum(p.lags)
    test.pv = test.pv + size * np.sin(2 * np.pi * test.t / min(period, 30.0) + rng.uniform(0, 6))
    return test


def load(rng):
    p = drawn(rng)
    size, at = rng.uniform(0.2, 0.6) * answer(p) * rng.choice([-1, 1]), rng.uniform(110, 480)
    return simulate(rng, p, load=lambda t: np.where(t > at, size, 0.0))


def play(rng):
    return simulate(rng, drawn(rng, dead_band=rng.uniform(1.2, 2.0)), moves=BOTH_WAYS, end=1040.0)


def stiction(rng):
    return simulate(rng, drawn(rng, sticks=3.5), moves=UP, end=800.0)


def lines(rng):
    p = drawn(rng)
    return on_lines(simulate(rng, p), rng.uniform(0.1, 0.2) * answer(p))


def change(rng):
    p = drawn(rng)
    return on_change(simulate(rng, p), rng.uniform(0.1, 0.2) * answer(p), held=True)


def change_rows(rng):
    p = drawn(rng)
    return on_change(simulate(rng, p), rng.uniform(0.05, 0.1) * answer(p), held=False)


def drift(rng):
    p = drawn(rng)
    # 0.3 to 1.2 % a minute beside an answer of 5 %
    slope = rng.uniform(0.3, 1.2) / 60.0 / 5.0 * answer(p) * rng.choice([-1, 1])
    return simulate(rng, p, load=lambda t: slope * t)


def late(rng):
    # the PV has gone a tenth to a third of its way by the time the move is logged
    p = drawn(rng, lags=(rng.uniform(12.0, 32.0), 0.5))
    return late_output(rng, round(p.dead + rng.uniform(0.15, 0.35) * p.lags[0], 1), p)


def frozen(rng):
    test = simulate(rng, drawn(rng))
    start = int(rng.choice([at for at, _ in STAIRS]) + rng.uniform(2, 12))
    test.pv[start : start + int(rng.uniform(20, 40))] = test.pv[start]
    return test


def bad(rng):
    test = simulate(rng, drawn(rng))
    for at, _ in STAIRS:
        test.pv[int(at) + rng.permutation(30)[:9]] = np.nan
    return test


def codes(tmp_path, test):
    (tmp_path / "log.csv").write_text(test.text())
    log = read_log(tmp_path / "log.csv")
    return {f.code for f in judge(log, find_bumps(log)).findings if f.level != "note"}


FAULTS = [
    (oscillation, "oscillation"),
    (load, "load-disturbance"),
    (play, "dead-band"),
    (stiction, "sticking"),
    (lines, "joined-by-lines"),
    (change, "stored-on-change"),
    (change_rows, "stored-on-change"),
    (drift, "drifting-baseline"),
    (late, "answer-before-move"),
    (frozen, "frozen-pv"),
    (bad, "bad-on-rise"),
]


@pytest.mark.parametrize(("make", "code"), FAULTS, ids=[make.__name__ for make, _ in FAULTS])
def test_a_harmful_fault_is_found(tmp_path, make, code):
    found = [code in codes(tmp_path, make(np.random.default_rng(500 + k))) for k in range(LOGS)]
    assert sum(found) >= FOUND * LOGS, f"{sum(found)} of {LOGS} found"


@pytest.fixture(scope="module")
def clean(tmp_path_factory):
    folder = tmp_path_factory.mktemp("clean")
    said = []
    for k in range(LOGS):
        rng = np.random.default_rng(900 + k)
        said.append(codes(folder, simulate(rng, drawn(rng))))
        said.append(codes(folder, simulate(rng, drawn(rng), moves=BOTH_WAYS, end=1040.0)))
    return said


@pytest.mark.parametrize("code", sorted({code for _, code in FAULTS} | {"moves-differ", "smooth-pv"}))
def test_a_clean_test_is_rarely_accused(clean, code):
    assert sum(code in said for said in clean) <= FALSE * len(clean)
