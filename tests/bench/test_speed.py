"""How long the main job takes. Run with: pytest tests/bench -m bench --benchmark-enable"""

import shutil
import subprocess
import sys
import time
from pathlib import Path

import pytest
from logs import bump_log, write_csv

from fitters.process import ProcessModel
from pipeline.commission import Request, commission
from pipeline.record import to_json

pytestmark = pytest.mark.bench

MODEL = ProcessModel(numerator=(1.2,), denominator=(20.0, 1.0), dead_time=5.0)


@pytest.fixture
def log(tmp_path):
    path = tmp_path / "log.csv"
    write_csv(path, *bump_log(MODEL, span=300.0, rows=300, noise=0.01, seed=1))
    return path


def command():
    found = shutil.which("firstgain", path=str(Path(sys.executable).parent))
    assert found, "install the project first"
    return found


def test_one_log_of_300_rows_takes_half_a_second_warm(benchmark, log):
    record = benchmark(lambda: to_json(commission(log, request=Request())))
    assert record
    if benchmark.enabled:
        assert benchmark.stats["median"] <= 0.5


def test_the_whole_command_takes_five_seconds_cold(log, tmp_path):
    start = time.perf_counter()
    subprocess.run(
        [command(), "tune", str(log), "--out", str(tmp_path / "out")], check=True, capture_output=True
    )
    assert time.perf_counter() - start <= 5.0
    assert {p.suffix for p in (tmp_path / "out").iterdir()} == {".json", ".html", ".pdf"}


def test_134_logs_take_forty_seconds_on_two_cores(tmp_path):
    folder = tmp_path / "logs"
    folder.mkdir()
    for i in range(134):
        lag = 5.0 * 1.04**i
        model = ProcessModel(numerator=(1.2,), denominator=(lag, 1.0), dead_time=0.25 * lag)
        write_csv(folder / f"log{i:03}.csv", *bump_log(model, span=15 * lag, rows=300, noise=0.01, seed=i))
    start = time.perf_counter()
    done = subprocess.run(
        [command(), "tune", str(folder), "--out", str(tmp_path / "out"), "--jobs", "2", "--no-report"],
        capture_output=True,
        text=True,
        check=False,
    )
    took = time.perf_counter() - start
    assert done.returncode == 0, done.stderr
    assert len(list((tmp_path / "out").glob("*.json"))) == 134
    assert took <= 40.0
