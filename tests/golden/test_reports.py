"""Each kept record is what the program makes of its demo log today, value by value."""

import json
import math
from pathlib import Path

import pytest

from pipeline.commission import Request, commission
from pipeline.record import to_json
from pipeline.sheetfile import load_sheet

ROOT = Path(__file__).parents[2]
LOGS = sorted((ROOT / "demo_logs").glob("*.csv"))
REPORTS = ROOT / "reports"

# A search that stops at 1e-7 of its cost lands within this of itself on another machine or BLAS;
# in a list of numbers the share is of the largest, since small ones are differences of large ones.
RELATIVE = 1e-4


def is_number(value):
    return isinstance(value, int | float) and not isinstance(value, bool)


def differences(kept, now, place="record"):
    """Where two JSON values differ; numbers may differ by RELATIVE."""
    if isinstance(kept, dict) and isinstance(now, dict):
        found = [f"{place}.{key}: only in one of them" for key in sorted(kept.keys() ^ now.keys())]
        for key in kept.keys() & now.keys():
            found += differences(kept[key], now[key], f"{place}.{key}")
        return found
    if isinstance(kept, list) and isinstance(now, list):
        if len(kept) != len(now):
            return [f"{place}: {len(kept)} entries, now {len(now)}"]
        if kept and all(is_number(v) for v in (*kept, *now)):
            size = RELATIVE * max(abs(v) for v in kept)
            return [
                f"{place}[{i}]: {a!r}, now {b!r}"
                for i, (a, b) in enumerate(zip(kept, now, strict=True))
                if abs(a - b) > size
            ]
        return [
            d
            for i, pair in enumerate(zip(kept, now, strict=True))
            for d in differences(*pair, f"{place}[{i}]")
        ]
    if is_number(kept) and is_number(now) and math.isclose(kept, now, rel_tol=RELATIVE, abs_tol=1e-12):
        return []
    return [] if kept == now and type(kept) is type(now) else [f"{place}: {kept!r}, now {now!r}"]


@pytest.mark.parametrize("log", LOGS, ids=lambda p: p.stem)
def test_record_is_rebuilt_by_value(log):
    kept = json.loads((REPORTS / f"{log.stem}.json").read_text(encoding="utf-8"))
    record = commission(log, request=Request(sheet=load_sheet(log.with_suffix(".toml"))))
    now = json.loads(to_json(record))
    del kept["made"], now["made"]
    assert differences(kept, now) == []


def test_there_is_one_report_for_each_log_and_no_other():
    for kind in ("json", "html", "pdf"):
        assert {path.stem for path in REPORTS.glob(f"*.{kind}")} == {log.stem for log in LOGS}


def test_the_comparison_itself_notices():
    kept = {"a": [1.0, {"b": "x"}], "c": True, "d": None}
    assert differences(kept, json.loads(json.dumps(kept))) == []
    assert differences(kept, {**kept, "a": [1.0 + 1e-5, {"b": "x"}]}) == []
    changed = {"a": [1.0 + 1e-3, {"b": "y"}], "c": 1, "e": None}
    assert len(differences(kept, changed)) == 5
