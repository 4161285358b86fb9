"""How long very long logs take to be read and judged.

Run with: pytest tests/bench/test_intake_speed.py -m bench -s
"""

import subprocess
import sys

import numpy as np
import pytest
from scipy.signal import lfilter

pytestmark = pytest.mark.bench

MILLION = 1_000_000
#: Read in a process of its own, whose memory is measured.
PROBE = """
import resource, sys, time
from pathlib import Path
from pipeline.commission import Request, inspect
begin = time.process_time()
seen = inspect(Path(sys.argv[1]), request=Request())
print(time.process_time() - begin, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6, seen.quality.verdict)
"""


def write(path, rows):
    t = 0.1 * np.arange(rows)
    end = t[-1]
    co = 40.0 + 5.0 * (t > 0.3 * end) - 8.0 * (t > 0.55 * end) + 4.0 * (t > 0.8 * end)
    keep = np.exp(-0.1 / (0.004 * end))
    noise = np.random.default_rng(0).normal(0.0, 0.05, rows)
    pv = 50.0 + 1.5 * lfilter([1.0 - keep], [1.0, -keep], co - 40.0) + noise
    with path.open("w", encoding="utf-8") as out:
        out.write("Time (s),PV,CO,SP\n")
        for at in range(0, rows, 100_000):
            part = slice(at, at + 100_000)
            out.writelines(
                f"{a:.1f},{b:.3f},{c:g},60\n" for a, b, c in zip(t[part], pv[part], co[part], strict=True)
            )


@pytest.mark.parametrize(("rows", "seconds", "gigabytes"), [(MILLION, 6.0, 1.0), (10 * MILLION, 60.0, None)])
def test_long_logs_are_read_and_judged(tmp_path, rows, seconds, gigabytes):
    path = tmp_path / "long.csv"
    write(path, rows)
    out = subprocess.run(
        [sys.executable, "-c", PROBE, str(path)], capture_output=True, text=True, check=True
    ).stdout.split()
    print(f"\n{rows} rows: {float(out[0]):.1f} s, {float(out[1]):.2f} GB, {' '.join(out[2:])}")
    assert float(out[0]) <= seconds
    assert gigabytes is None or float(out[1]) <= gigabytes
