"""How long the complete fit takes: all structures, intervals.

Run with: pytest tests/bench/test_fit_speed.py -m bench -s
Ratios against the plain script are taken on the same logs in the same run.
"""

import time

import numpy as np
import pytest
from logs import bump_log, log_data
from many import PROCESSES, ROWS
from plain_script import fit_by_hand

from fitters.choose import choose

pytestmark = pytest.mark.bench

#: One core, 300 rows [s].
SHORT_LOG = 0.060
#: One core, 20,000 rows [s].
LONG_LOG = 0.5
#: Times faster than the plain script, at least [1].
FASTER = 30.0


def seconds(job, repeats):
    taken = []
    for _ in range(repeats):
        start = time.perf_counter()
        job()
        taken.append(time.perf_counter() - start)
    return float(np.median(taken))


def first_order_log(rows, seed=1):
    process, span = PROCESSES["first order"]
    return log_data(*bump_log(process, span=span, rows=rows, noise=0.01, seed=seed))


def test_a_log_of_300_rows_takes_60_milliseconds():
    took = {}
    for name, (process, span) in PROCESSES.items():
        data = log_data(*bump_log(process, span=span, rows=ROWS, noise=0.01, seed=1))
        took[name] = seconds(lambda data=data: choose(data), 15)
    print("\nmilliseconds:", {n: round(1e3 * s, 1) for n, s in took.items()})
    assert max(took.values()) <= SHORT_LOG


def test_20_000_rows_take_half_a_second_and_time_grows_no_worse_than_the_rows():
    logs = {rows: first_order_log(rows) for rows in (300, 2_000, 20_000)}
    took = {rows: seconds(lambda data=data: choose(data), 5) for rows, data in logs.items()}
    print("\nmilliseconds by rows:", {n: round(1e3 * s) for n, s in took.items()})
    assert took[20_000] <= LONG_LOG
    assert took[20_000] / took[2_000] <= 10.0 and took[2_000] / took[300] <= 2_000 / 300


def test_it_is_thirty_times_faster_than_the_script_one_would_write():
    ours, theirs = {}, {}
    for name, (process, span) in PROCESSES.items():
        ours[name], theirs[name] = 0.0, 0.0
        for seed in range(2):
            t, co, pv = bump_log(process, span=span, rows=ROWS, noise=0.01, seed=seed)
            start = time.perf_counter()
            fit_by_hand(t, co, pv)
            theirs[name] += time.perf_counter() - start
            data = log_data(t, co, pv)
            ours[name] += seconds(lambda data=data: choose(data), 3)
    ratios = {name: round(theirs[name] / ours[name], 1) for name in ours}
    together = sum(theirs.values()) / sum(ours.values())
    print("\ntimes faster:", ratios, "together:", round(together, 1))
    assert together >= FASTER
