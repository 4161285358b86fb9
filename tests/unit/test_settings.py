"""The loop sheet: what it takes, and what it says when it cannot."""

import subprocess
import sys
from pathlib import Path

import pytest
from pydantic import ValidationError

from pipeline.errors import UsageError
from pipeline.settings import LoopSheet
from pipeline.sheetfile import load_sheet


def sheet(tmp_path: Path, text: str) -> LoopSheet:
    path = tmp_path / "loop.toml"
    path.write_text(text, encoding="utf-8")
    return load_sheet(path)


def test_empty_sheet_says_nothing_was_given(tmp_path):
    empty = sheet(tmp_path, "")
    assert empty == LoopSheet()
    assert empty.loop.duty == "other"
    assert empty.criteria.phase_margin_deg is None and empty.columns.pv is None


def test_full_sheet(tmp_path):
    full = sheet(
        tmp_path,
        """
[loop]
tag = "TIC-101"
service = "tunnel air"
duty = "temperature"
[columns]
time = 1
pv = "Tunnel air (degC)"
co = 3
[time]
format = "%d/%m/%Y %H:%M:%S"
unit = "min"
zone = "Europe/Berlin"
sample_s = 2
[pv]
unit = "degC"
low = 0
high = 100
[co]
low = 0
high = 100
[controller]
kind = "PI"
equation = "series"
action = "reverse"
proportional = "band"
proportional_basis = "span"
integral = "repeats per minute"
derivative = "minutes"
derivative_filter_ratio = 8
scan_s = 0.5
[as_found]
proportional = 120
integral = 0.4
[criteria]
phase_margin_deg = 55
percentile = 5
percentile_phase_margin_deg = 40
[limits]
pv_low_alarm = 5
pv_high_alarm = 80
pv_high_trip = 90
[people]
tested_by = "A. Fenn"
[references]
permit = "P-17"
""",
    )
    assert full.columns.time == 1 and full.columns.pv == "Tunnel air (degC)"
    assert full.pv.span == 100.0
    assert full.controller.integral == "repeats per minute"
    assert full.criteria.phase_margin_deg == 55
    with pytest.raises(ValidationError):
        full.loop.tag = "other"


@pytest.mark.parametrize(
    ("text", "line", "words"),
    [
        ('[controller]\nequaton = "standard"\n', 2, ['unknown key "equaton"', "[controller]", '"equation"']),
        ("[controler]\nscan_s = 1\n", 1, ['unknown table "controler"', '"controller"']),
        ('tag = "X"\n', 1, ['unknown key "tag"', "loop"]),
        ("[pv]\nlow = 3\nhigh = 1\n", 1, ["low (3) must be below high (1)"]),
        ("[pv]\nlow = 3\n", 1, ["together"]),
        ("[co]\nlow = nan\nhigh = 1\n", 2, ["[co] low", "finite"]),
        ('[loop]\nduty = "temprature"\n', 2, ["[loop] duty", "temprature", '"temperature"']),
        ('[controller]\n\nscan_s = "fast"\n', 3, ["[controller] scan_s", "number"]),
        (
            "[limits]\npv_low_alarm = 9\npv_high_alarm = 8\n",
            1,
            ["pv_low_alarm (9) must be below pv_high_alarm"],
        ),
        ('[time]\nzone = "Middle/Earth"\n', 1, ["Middle/Earth", "Europe/Berlin"]),
        ('[columns]\npv = "A"\nco = "A"\n', 1, ["same column"]),
        ("[controller]\nderivative_filter_s=1\nderivative_filter_ratio=8\n", 1, ["not both"]),
        ("[loop]\ntag = TIC\n", 2, ["TOML"]),
        ("[criteria]\nphase_margin_deg = 50\npercentile_phase_margin_deg = 60\n", 1, ["60", "50"]),
        ("[columns]\npv = 0\n", 2, ["[columns] pv"]),
    ],
)
def test_faults_are_sentences_with_a_place(tmp_path, text, line, words):
    with pytest.raises(UsageError) as caught:
        sheet(tmp_path, text)
    assert caught.value.file == "loop.toml"
    assert caught.value.line == line
    assert caught.value.exit_code == 2
    for word in words:
        assert word in str(caught.value)


def test_missing_and_undecodable_sheets(tmp_path):
    with pytest.raises(UsageError, match="no such file"):
        load_sheet(tmp_path / "absent.toml")
    (tmp_path / "bad.toml").write_bytes(b'[loop]\ntag = "\xff\xfe"\n')
    with pytest.raises(UsageError, match="UTF-8") as caught:
        load_sheet(tmp_path / "bad.toml")
    assert caught.value.line == 2


def test_reading_a_sheet_needs_no_numeric_library():
    code = (
        "import sys, pipeline.settings\n"
        "heavy = {'numpy', 'pandas', 'scipy', 'matplotlib', 'lmfit', 'control'} & set(sys.modules)\n"
        "sys.exit(', '.join(sorted(heavy)) or None)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60)
    assert done.returncode == 0, done.stderr
