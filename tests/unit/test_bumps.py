"""The moves of the output, their grouping, and the record cut out for the fit."""

import numpy as np
import pytest

from pipeline.bumps import bump_data, find_bumps, find_moves
from pipeline.intake import Column, Log

T = np.arange(200.0)


def make(co, *, pv=None, automatic=None, t=T) -> Log:
    said = Column(name="x", index=1, unit=None, reason="test")
    return Log(
        file="log.csv", sha256="0" * 64, rows=t.size, start=None, t=t, pv=np.sin(t) if pv is None else pv, co=co,
        sp=None, automatic=automatic, time_column=said, pv_column=said, co_column=said, sp_column=None,
        mode_column=None, notes=(),
    )  # fmt: skip


def steps(*levels_at: tuple[float, float]) -> np.ndarray:
    co = np.empty(T.size)
    for at, level in levels_at:
        co[int(at) :] = level
    return co


def test_steps_are_moves():
    moves = find_moves(make(steps((0, 40), (50, 45), (120, 38))))
    assert [(m.at_s, m.before, m.after) for m in moves] == [(50, 40, 45), (120, 45, 38)]


def test_nothing_moved():
    assert find_moves(make(np.full(T.size, 40.0))) == ()
    assert find_moves(make(40 + np.random.default_rng(0).normal(0, 0.1, T.size))) == ()


def test_a_move_on_the_last_row_is_none():
    assert [m.at_s for m in find_moves(make(steps((0, 40), (50, 45), (199, 40))))] == [50]


@pytest.mark.parametrize("seed", range(20))
def test_moves_stand_out_of_chatter(seed):
    co = steps((0, 40), (50, 45), (120, 38)) + np.random.default_rng(seed).normal(0, 0.1, T.size)
    moves = find_moves(make(co))
    assert [m.at_s for m in moves] == [50, 120]
    # the median of 9 rows of deviation 0.1 has a deviation of 0.04
    assert [round(m.after - m.before, 1) for m in moves] == pytest.approx([5, -7], abs=0.25)


@pytest.mark.parametrize("seed", range(20))
def test_a_controller_at_work_makes_no_moves(seed):
    # routine control: the CO wanders as a random walk and holds no level
    assert find_moves(make(40 + np.cumsum(np.random.default_rng(seed).normal(0, 0.3, T.size)))) == ()


def test_staged_keystrokes_are_one_bump():
    bumps = find_bumps(make(steps((0, 40), (50, 41), (52, 43), (54, 45), (120, 40))))
    assert [[m.at_s for m in b.moves] for b in bumps] == [[50, 52, 54], [120]]
    assert (bumps[0].start_s, bumps[0].end_s) == (0, 120)
    assert (bumps[1].start_s, bumps[1].end_s) == (54, 199)


def test_bumps_in_automatic_are_not_used():
    bumps = find_bumps(make(steps((0, 40), (50, 45), (120, 40)), automatic=T < 100))
    assert not bumps[0].used
    assert "automatic" in bumps[0].reason


def test_the_record_is_what_was_logged():
    pv = np.cos(T)
    pv[[10, 60]] = np.nan
    log = make(steps((0, 40), (50, 45), (120, 38)), pv=pv)
    data = bump_data(log, find_bumps(log))
    assert data.t.size == 198 and not np.isin([10.0, 60.0], data.t).any()
    np.testing.assert_array_equal(data.pv, pv[np.isfinite(pv)])
    assert data.co_times.tolist() == [0, 50, 120]
    assert data.co_values.tolist() == [40, 45, 38]


def test_an_output_asked_beyond_its_limits_stays_at_them():
    log = make(steps((0, 90), (50, 108), (120, 92)))
    data = bump_data(log, find_bumps(log), co_low=0.0, co_high=100.0)
    assert data.co_values.tolist() == [90, 100, 92]
