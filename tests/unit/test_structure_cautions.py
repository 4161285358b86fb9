"""What is said when structures tie, when the runner-up would change the gain, and when moves scatter."""

from dataclasses import replace

import numpy as np
import pytest
from test_fit_behaviour import log, short_test

from fitters.choose import choose
from pipeline.cautions import Facts, cautions
from pipeline.cautions import structure as rules
from pipeline.commission import Request, inspect
from pipeline.settings import LoopSheet
from pipeline.tuning.types import Criteria


def facts_of(data, path):
    co = data.co_values[np.searchsorted(data.co_times, data.t, side="right") - 1]
    rows = [f"{t:.6g},{c:.6g},{p:.6g}" for t, c, p in zip(data.t, co, data.pv, strict=True)]
    path.write_text("\n".join(["Time (s),CO (%),PV (degC)", *rows]) + "\n", encoding="utf-8")
    seen = inspect(path, request=Request())
    return Facts(
        log=seen.log,
        sheet=LoopSheet(),
        quality=seen.quality,
        choice=choose(data),
        criteria=Criteria(),
        tuning=None,
        backed_off=None,
        dead_time_floor=0.0,
        structure_gains={},
    )


@pytest.fixture(scope="module")
def facts(tmp_path_factory):
    return facts_of(log(), tmp_path_factory.mktemp("log") / "log.csv")


def codes(facts):
    return {c.code for c in cautions(facts)}


def test_a_clear_choice_needs_no_word(facts):
    quiet = {
        "lag-or-integrator",
        "structure-matters",
        "gain-scatters-between-moves",
        "not-settled",
        "load-step",
    }
    assert not codes(facts) & quiet


def test_lag_and_integrator_that_explain_alike_are_both_named_with_their_gains(facts):
    tied = next(
        c
        for c in (choose(short_test(seed, noise=0.1, lags=0.2)) for seed in range(8))
        if c.best.structure == "integrator" and c.candidates[1].fit.structure == "first order"
    )
    gains = {"integrator": 2.0, "first order": 2.1}
    said = rules.lag_or_integrator(replace(facts, choice=tied, structure_gains=gains))
    assert "Cannot tell lag from integrator" in said.text and "5 % apart" in said.text


def test_a_runner_up_that_would_lower_the_gain_restricts_and_one_that_would_raise_it_informs(facts):
    name = facts.choice.best.structure
    lower = rules.rival_changes_gain(replace(facts, structure_gains={name: 2.0, "second order": 1.6}))
    assert lower.level == "care" and "-20 %" in lower.text
    higher = rules.rival_changes_gain(replace(facts, structure_gains={name: 2.0, "second order": 2.5}))
    assert higher.level == "note" and "+25 %" in higher.text
    assert rules.rival_changes_gain(replace(facts, structure_gains={name: 2.0, "second order": 2.1})) is None


def test_moves_that_scatter_are_said(facts):
    scattered = replace(facts.choice, gain_scatter=0.12)
    assert "12 %" in rules.moves_scatter(replace(facts, choice=scattered)).text


def test_a_test_of_half_a_lag_is_said_not_to_know_the_final_gain(tmp_path):
    short = facts_of(short_test(1, noise=0.03, lags=0.5), tmp_path / "short.csv")
    assert short.choice.best.structure == "first order"
    assert "final gain is not" in rules.not_settled(short).text


def test_a_last_move_the_model_does_not_foretell_is_said(facts):
    assert facts.choice.missed_share < 0.02
    missed = replace(facts.choice, missed_share=0.59)
    assert "59 %" in rules.last_move_missed(replace(facts, choice=missed)).text
    assert rules.last_move_missed(facts) is None
