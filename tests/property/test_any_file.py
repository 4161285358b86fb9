"""Whatever the file holds: never a crash, never a hang, always a sentence."""

import math
import time
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from pipeline.commission import Request, inspect
from pipeline.errors import FirstgainError

DATA = Path(__file__).parents[1] / "data"
REAL = sorted(p for p in DATA.iterdir() if p.suffix in {".csv", ".txt", ".dat"})
#: Nobody waits longer for a sentence; processor time, which leaves out what others do [s].
PATIENCE = 5.0

common = settings(
    max_examples=60,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)


def said(path):
    """Read and judge; give the sentence that came of it, or None where the log was read."""
    begin = time.process_time()
    try:
        seen = inspect(path, request=Request())
        assert seen.quality.verdict in {"use", "use with care", "do not use"}
        sentence = None
    except FirstgainError as error:
        sentence = str(error)
        # where it stands, what is wrong, what to do: sentences
        assert path.name in sentence and sentence.endswith(".") and "Traceback" not in sentence
    assert time.process_time() - begin < PATIENCE
    return sentence


@common
@given(st.binary(max_size=4000))
def test_random_bytes(tmp_path, content):
    path = tmp_path / "bytes.csv"
    path.write_bytes(content)
    assert said(path) is not None


@common
@given(st.text(alphabet="0123456789.,;:\t\n -+eE/PVCOtime\"'%", max_size=3000))
def test_random_tables(tmp_path, text):
    path = tmp_path / "text.csv"
    path.write_text(text, encoding="utf-8")
    said(path)


@common
@given(
    st.sampled_from(REAL),
    st.lists(
        st.tuples(st.floats(0.0, 1.0), st.integers(0, 60), st.binary(max_size=30)), min_size=1, max_size=6
    ),
)
def test_real_files_with_pieces_cut_out_and_put_in(tmp_path, source, cuts):
    content = bytearray(source.read_bytes()[:60_000])
    for where, length, piece in cuts:
        at = int(where * len(content))
        content[at : at + length] = piece
    path = tmp_path / ("mutated" + source.suffix)
    path.write_bytes(bytes(content))
    said(path)


absurd = st.sampled_from(
    ["1e308", "-1e308", "inf", "-inf", "nan", "1e-320", "0", "", "-", "1e5000", "9" * 400]
)


@common
@given(st.lists(st.tuples(absurd, absurd), min_size=30, max_size=60))
def test_absurd_values(tmp_path, cells):
    rows = ["t_s,PV,CO", *(f"{k},{pv},{co}" for k, (pv, co) in enumerate(cells))]
    path = tmp_path / "absurd.csv"
    path.write_text("\n".join(rows) + "\n", encoding="utf-8")
    said(path)


@pytest.mark.parametrize("columns", [3000])
def test_thousands_of_columns(tmp_path, columns):
    rng = np.random.default_rng(0)
    head = "Time (s)," + ",".join(f"signal {k}" for k in range(columns))
    rows = [head]
    rows += [",".join([str(i), *(f"{v:.3f}" for v in rng.normal(size=columns))]) for i in range(60)]
    path = tmp_path / "wide.csv"
    path.write_text("\n".join(rows) + "\n", encoding="utf-8")
    assert said(path) is not None


@pytest.mark.parametrize("filler", ["x", "1,", "1.5;", '"'])
def test_a_line_of_ten_million_bytes(tmp_path, filler):
    path = tmp_path / "line.csv"
    line = filler * math.ceil(10_000_000 / len(filler))
    path.write_text(f"t_s,PV,CO\n{line}\n1,2,3\n", encoding="utf-8")
    assert said(path) is not None


@pytest.mark.parametrize("content", [b"", b"\n" * 5000, b"\x00" * 100_000, b"\xff\xfe" * 5000, b"t,PV,CO\n"])
def test_nothing_in_it(tmp_path, content):
    path = tmp_path / "nothing.csv"
    path.write_bytes(content)
    assert said(path) is not None
