"""Sources of doubt: each is drawn by itself, the widest rules and is named."""

import numpy as np
import pytest
from scipy.stats import t as student

from fitters.choose import choose
from fitters.fit import BumpData
from fitters.process import ProcessModel
from fitters.spread import Floor, gain_scatter, plausible
from pipeline.settings import LoopSheet
from pipeline.tuning.recommend import recommend, wanted

PLANT = ProcessModel(numerator=(2.0,), denominator=(20.0, 1.0), dead_time=5.0)
T = np.linspace(0.0, 560.0, 561)
AT = np.array([0.0, 40.0, 160.0, 290.0, 420.0])
CO = np.array([40.0, 45.0, 40.0, 46.0, 41.0])


def choice_of(*, noise, achieved=(1.0, 1.0, 1.0, 1.0), seed=0):
    rng = np.random.default_rng(seed)
    sizes = np.diff(CO) * achieved
    pv = 30.0 + sum(d * PLANT.step_response(T - a) for d, a in zip(sizes, AT[1:], strict=True))
    return choose(BumpData(t=T, pv=pv + noise * rng.normal(size=T.size), co_times=AT, co_values=CO))


def asked(sheet=None):
    return wanted(
        sheet or LoopSheet(),
        kind="PI",
        phase_margin=None,
        gain_margin=None,
        max_sensitivity=None,
        overshoot_pct=None,
    )


def test_scatter_of_the_moves_is_the_guides_type_a_for_few_readings():
    """JCGM 100:2008, 4.2 and G.3: sample standard deviation, widened by Student's factor."""
    gains = (1.0, 0.9, 1.1, 0.95)
    expected = np.std(gains, ddof=1) / np.mean(gains) * student.ppf(0.975, 3) / 1.96
    assert gain_scatter(gains) == pytest.approx(expected, rel=1e-6)
    assert gain_scatter((1.0, 0.9)) is None


def test_noise_rules_where_the_moves_agree():
    made = recommend(choice_of(noise=0.1), asked(), log_interval=1.0)
    assert made.source == "noise in the log"


def test_moves_that_disagree_rule_over_a_narrow_fit():
    choice = choice_of(noise=0.02, achieved=(1.0, 0.94, 1.0, 0.95))
    assert choice.gain_scatter > 0.03
    made = recommend(choice, asked(), log_interval=1.0)
    assert made.source == "scatter between moves"
    drawn = plausible(choice, Floor(), 2000, 1)["scatter between moves"]
    assert np.std(np.log([m.gain for m in drawn])) == pytest.approx(choice.gain_scatter, rel=0.1)


def test_a_floor_the_user_states_rules_where_it_is_wider():
    sheet = LoopSheet.model_validate({"uncertainty": {"gain_pct": 15, "lags_pct": 15, "dead_time_pct": 20}})
    choice = choice_of(noise=0.05)
    made = recommend(choice, asked(sheet), log_interval=1.0)
    assert made.source == "stated floor"
    without = recommend(choice, asked(), log_interval=1.0)
    assert made.backed_off.controller.gain < without.backed_off.controller.gain
    low, _, high = made.backed_off.bands.phase_margin
    assert high - low > 2.0 * np.diff(without.backed_off.bands.phase_margin[::2])[0]


def test_a_scatter_of_ten_to_twenty_percent_gives_the_band_the_trade_knows():
    """Own experiment of the trade's kind: gain 10, lag 15, dead time 20 % scatter: 60 degrees becomes 45 to 71."""
    sheet = LoopSheet.model_validate({"uncertainty": {"gain_pct": 10, "lags_pct": 15, "dead_time_pct": 20}})
    made = recommend(choice_of(noise=0.02), asked(sheet), log_interval=0.1)
    if made.backed_off.factor == 1.0:
        low, _, high = made.backed_off.bands.phase_margin
        assert 43.0 < low < 50.0 and 68.0 < high < 75.0
    else:
        assert made.backed_off.factor > 0.9


def test_the_scaled_process_keeps_its_shape():
    model = ProcessModel(numerator=(-4.0, 2.0), denominator=(30.0, 13.0, 1.0, 0.0), dead_time=5.0)
    scaled = model.scaled(1.5, 2.0, 0.5)
    assert scaled.integrators == 1 and scaled.gain == pytest.approx(3.0)
    assert np.sort(scaled.poles.real) == pytest.approx(np.sort(model.poles.real / 2.0))
    assert scaled.zeros == pytest.approx(model.zeros / 2.0)
    assert scaled.dead_time == 2.5


def test_equal_draws_for_equal_seeds():
    choice = choice_of(noise=0.1)
    assert plausible(choice, Floor(gain=0.1), 20, 3) == plausible(choice, Floor(gain=0.1), 20, 3)
