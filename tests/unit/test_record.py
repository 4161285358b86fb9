"""The record: nothing lost, nothing added, the same bytes, whole files only."""

import json
import math
import os
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import ValidationError

from pipeline.errors import UsageError
from pipeline.record import (
    SERIES_ROWS,
    CandidateInfo,
    ParameterInfo,
    read_record,
    thinned_rows,
    to_json,
    write_record,
)

RECORDS = Path(__file__).parents[1] / "records"
KEPT = sorted(RECORDS.glob("v1_*.json"))


@pytest.fixture(params=KEPT, ids=lambda p: p.stem)
def kept(request):
    return request.param


def altered(tmp_path, change, source="v1_ready"):
    content = json.loads((RECORDS / f"{source}.json").read_text(encoding="utf-8"))
    change(content)
    path = tmp_path / "altered.json"
    path.write_text(json.dumps(content), encoding="utf-8")
    return path


def test_a_kept_record_of_this_version_loads_and_writes_the_same_bytes(kept):
    assert to_json(read_record(kept)) == kept.read_text(encoding="utf-8")


def test_only_made_differs_between_two_runs_on_the_same_content(kept):
    record = read_record(kept)
    later = record.model_copy(
        update={"made": record.made.model_copy(update={"created": "2027-01-01T00:00:00Z"})}
    )
    pairs = zip(to_json(record).splitlines(), to_json(later).splitlines(), strict=True)
    assert [a.split('"')[1] for a, b in pairs if a != b] == ["created"]


def test_the_text_is_strict_json_without_nan(kept):
    def refuse(token):
        raise AssertionError(token)

    json.loads(kept.read_text(encoding="utf-8"), parse_constant=refuse)


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_a_number_keeps_twelve_digits(value):
    text = to_json_number(value)
    assert json.loads(text) == pytest.approx(value, rel=1e-11, abs=0.0)


def to_json_number(value):
    record = read_record(RECORDS / "v1_ready.json")
    record = record.model_copy(
        update={"candidates": (CandidateInfo(structure="lag", score=value, weight=1),)}
    )
    return json.dumps(json.loads(to_json(record))["candidates"][0]["score"])


def test_infinity_is_the_string_inf_and_comes_back():
    candidate = CandidateInfo(structure="lag", score=np.inf, weight=1)
    record = read_record(RECORDS / "v1_ready.json").model_copy(update={"candidates": (candidate,)})
    assert json.loads(to_json(record))["candidates"][0]["score"] == "inf"
    assert math.isinf(CandidateInfo(structure="lag", score="inf", weight=1).score)


@pytest.mark.parametrize("bad", [math.nan, -math.inf, "many", True, None])
def test_what_is_no_number_is_refused(bad):
    with pytest.raises(ValidationError):
        CandidateInfo(structure="lag", score=bad, weight=1)


def test_an_interval_may_lack_its_lower_end():
    assert ParameterInfo(value=1, unit="s", stderr="inf", low=-math.inf, high="inf").low == -math.inf


def test_numpy_scalars_and_arrays_become_plain_numbers():
    candidate = CandidateInfo(structure="lag", score=np.float32(2.5), weight=np.int64(1))
    assert type(candidate.score) is float and type(candidate.weight) is float
    series = read_record(RECORDS / "v1_ready.json").series
    assert {type(v) for v in (*series.t_s, *series.pv)} == {float}


def test_another_version_is_refused_with_a_sentence(tmp_path):
    path = altered(tmp_path, lambda c: c.update(record_version=2))
    with pytest.raises(UsageError, match="has version 2, and this program reads version 1"):
        read_record(path)


def test_a_misspelt_key_is_named_with_the_nearest_known_one(tmp_path):
    path = altered(tmp_path, lambda c: c["margins"].update(gain_margn=3))
    with pytest.raises(UsageError, match=r"margins\.gain_margn is not part .*did you mean gain_margin\?"):
        read_record(path)


def test_a_missing_key_is_named(tmp_path):
    path = altered(tmp_path, lambda c: c["log"].pop("sha256"))
    with pytest.raises(UsageError, match=r"The key log\.sha256 is missing"):
        read_record(path)


@pytest.mark.parametrize("content", [b"", b"\xff\xfe", b"[1]", b"{}", b"{", b'"text"'])
def test_another_file_is_no_record(tmp_path, content):
    path = tmp_path / "x.json"
    path.write_bytes(content)
    with pytest.raises(UsageError, match="not a record"):
        read_record(path)


def test_withheld_settings_cannot_be_lifted_out_of_a_record(tmp_path):
    ready = json.loads((RECORDS / "v1_ready.json").read_text(encoding="utf-8"))
    path = altered(tmp_path, lambda c: c.update(controller=ready["controller"]), "v1_withheld")
    with pytest.raises(UsageError, match="must not carry a controller"):
        read_record(path)


def test_a_stop_and_settings_exclude_each_other(tmp_path):
    path = altered(tmp_path, lambda c: c["cautions"][0].update(level="stop"))
    with pytest.raises(UsageError, match="level stop must be withheld"):
        read_record(path)


def test_settings_need_their_margins(tmp_path):
    path = altered(tmp_path, lambda c: c.update(margins=None))
    with pytest.raises(UsageError, match="needs margins"):
        read_record(path)


def test_a_failed_write_leaves_the_old_file_and_no_half(tmp_path, monkeypatch):
    record = read_record(RECORDS / "v1_ready.json")
    path = tmp_path / "r.json"
    path.write_text("old", encoding="utf-8")

    def full_disk(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", full_disk)
    with pytest.raises(UsageError, match="No space left"):
        write_record(record, path)
    assert [p.name for p in tmp_path.iterdir()] == ["r.json"] and path.read_text() == "old"


def test_a_folder_that_is_a_file_is_said(tmp_path):
    (tmp_path / "reports").write_text("x", encoding="utf-8")
    with pytest.raises(UsageError, match="--out"):
        write_record(read_record(RECORDS / "v1_ready.json"), tmp_path / "reports" / "r.json")


@given(
    st.integers(1, 20_000),
    st.integers(16, SERIES_ROWS),
    st.integers(0, 2**32 - 1),
    st.sampled_from([1, 7, 5000]),
)
def test_thinning_keeps_the_ends_the_spikes_and_the_moves(n, limit, seed, hold):
    rng = np.random.default_rng(seed)
    pv = rng.normal(size=n)
    co = np.repeat(rng.normal(size=n // hold + 1), hold)[:n]
    rows = thinned_rows(co.tolist(), pv.tolist(), limit=limit)
    assert rows == sorted(set(rows)) and len(rows) <= limit
    assert rows[0] == 0 and rows[-1] == n - 1
    assert pv[rows].max() == pv.max() and pv[rows].min() == pv.min()
    if hold == 5000:
        assert set(np.flatnonzero(np.diff(co)) + 1) <= set(rows)


def test_thinning_survives_gaps():
    pv = [math.nan] * 4000 + [1.0] * 1000
    assert len(thinned_rows([0.0] * 5000, pv, limit=100)) <= 100
