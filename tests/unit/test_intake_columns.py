"""Columns found by name, or by what they do: the right proposal or a question, never a wrong silent pick."""

import numpy as np
import pytest

from pipeline.bumps import find_bumps
from pipeline.errors import QuestionForUser
from pipeline.intake import read_log
from pipeline.settings import LoopSheet
from pipeline.testquality import judge

#: Names as loggers in several languages write them, and names that say nothing.
NAMES = [
    {"time": "Time (s)", "pv": "PV", "co": "CO", "sp": "SP"},
    {"time": "Zeit [s]", "pv": "Istwert", "co": "Stellgröße", "sp": "Sollwert"},
    {"time": "temps (s)", "pv": "mesure", "co": "sortie", "sp": "consigne"},
    {"time": "t_s", "pv": "TT-7 measured value", "co": "controller output", "sp": "set point"},
    {"time": "sec", "pv": "A", "co": "B", "sp": "C"},
    {"time": "elapsed_s", "pv": "AI3", "co": "AO1", "sp": "REG40001"},
    {"time": "Time (s)", "pv": "x1", "co": "x2", "sp": "x3"},
    {"time": "seconds", "pv": "signal 2", "co": "signal 9", "sp": "signal 4"},
]


def test_log(rng, negative):
    """A manual bump test: the CO steps, the PV lags, the SP stands still; two further signals wander."""
    t = np.arange(0.0, 600.0, 1.0)
    co = 40.0 + 5.0 * (t >= 100) - 8.0 * (t >= 250) + 4.0 * (t >= 420)
    lag, dead = rng.uniform(8.0, 30.0), rng.uniform(1.0, 8.0)
    pv = np.full(t.size, 0.0)
    for at, size in ((100.0, 5.0), (250.0, -8.0), (420.0, 4.0)):
        pv += size * (1.0 - np.exp(-np.maximum(t - at - dead, 0.0) / lag))
    pv = 60.0 + (-1.5 if negative else 1.5) * pv + rng.normal(0.0, 0.05, t.size)
    room = 21.0 + 0.3 * np.sin(t / 170.0) + rng.normal(0.0, 0.02, t.size)
    return {"time": t, "co": co, "pv": pv, "sp": np.full(t.size, 60.0)}, {"hall": room}


test_log.__test__ = False


def written(path, columns):
    names = list(columns)
    rows = [",".join(names)]
    rows += [",".join(f"{columns[n][i]:.10g}" for n in names) for i in range(len(columns[names[0]]))]
    path.write_text("\n".join(rows) + "\n", encoding="utf-8")


def outcome(path, names):
    try:
        log = read_log(path, sheet=LoopSheet())
    except QuestionForUser as question:
        return "asked" if "[columns]" in str(question) else f"wrong question: {question}"
    right = (log.pv_column.name, log.co_column.name) == (names["pv"], names["co"])
    return "right" if right else f"wrong: PV {log.pv_column.name}, CO {log.co_column.name}"


def test_forty_shuffled_and_renamed_logs(tmp_path):
    found = []
    for k in range(40):
        rng = np.random.default_rng(k)
        columns, others = test_log(rng, negative=k % 3 == 0)
        names = NAMES[k % len(NAMES)]
        known = {names[role]: values for role, values in columns.items()}
        if k % 4 == 0:
            known |= others
        order = rng.permutation(list(known))
        path = tmp_path / f"log{k}.csv"
        written(path, {name: known[name] for name in order})
        found.append(outcome(path, names))
    counts = {word: sum(f.startswith(word) for f in found) for word in ("right", "asked", "wrong")}
    print(counts, [f for f in found if f.startswith("wrong")])
    assert counts["wrong"] == 0 and counts["right"] >= 30


@pytest.mark.parametrize("negative", [False, True])
def test_a_swapped_pair_is_always_noticed(tmp_path, negative):
    """What is called CO lags and what is called PV steps: the names are on the wrong columns."""
    for k in range(20):
        columns, _ = test_log(np.random.default_rng(100 + k), negative)
        path = tmp_path / f"swapped{k}.csv"
        written(path, {"Time (s)": columns["time"], "PV": columns["co"], "CO": columns["pv"]})
        log = read_log(path, sheet=LoopSheet())
        quality = judge(log, find_bumps(log))
        assert quality.verdict == "do not use"
        assert "swapped" in next(f.text for f in quality.findings if f.code == "columns-swapped")


def test_the_right_way_round_is_not_called_swapped(tmp_path):
    for k in range(20):
        columns, _ = test_log(np.random.default_rng(200 + k), k % 2 == 0)
        path = tmp_path / f"right{k}.csv"
        written(path, {"Time (s)": columns["time"], "PV": columns["pv"], "CO": columns["co"]})
        log = read_log(path, sheet=LoopSheet())
        assert "columns-swapped" not in {f.code for f in judge(log, find_bumps(log)).findings}


def test_two_measured_values_are_asked_about(tmp_path):
    columns, _ = test_log(np.random.default_rng(5), negative=False)
    second = np.concatenate([columns["pv"][:5], columns["pv"][:-5]])
    path = tmp_path / "two.csv"
    written(
        path,
        {
            "Time (s)": columns["time"],
            "CO": columns["co"],
            "PV inlet": columns["pv"],
            "PV outlet": second,
        },
    )
    with pytest.raises(QuestionForUser, match="pv"):
        read_log(path, sheet=LoopSheet())
