"""One measured run in many exports: all of them give the same values, and every guess is said.

`canonical.csv` is the run itself. A test either gets it back whole, or the part of it that the
export still holds.
"""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from pipeline.errors import QuestionForUser
from pipeline.intake import read_log
from pipeline.settings import LoopSheet

FOLDER = Path(__file__).parents[1] / "data" / "odd_formats"
TRUE = pd.read_csv(FOLDER / "canonical.csv")
#: Values are to come back as written [any unit].
EXACT = 1e-9
#: Resolution of float64 for seconds since 1970, and of day numbers with nine decimals [s].
EPOCH, SERIAL = 2.5e-7, 1e-4


def read(name, **tables):
    return read_log(FOLDER / name, sheet=LoopSheet.model_validate(tables))


def codes(log):
    return {note.code for note in log.notes}


# file, loop sheet, resolution of its times [s], what must be said
WHOLE = [
    ("01_semicolon_decimalcomma_cp1252.csv", {}, 1e-9, {"encoding", "decimal-comma", "date-order"}),
    ("05_duplicate_timestamps.csv", {}, 1e-9, {"duplicates-merged", "duplicates-conflict"}),
    ("07_dst_spring_forward_local.csv", {}, 1e-9, {"clock-change"}),
    ("07_dst_spring_forward_local.csv", {"time": {"zone": "Europe/Berlin"}}, 1e-9, set()),
    ("11_epoch_s_float_sci.csv", {}, EPOCH, {"epoch"}),
    ("17_excel_serial_dates.csv", {}, SERIAL, {"serial-days"}),
    ("19_bom_trailing_delims_repeated_header_footer.csv", {}, 1e-9, {"repeated-header", "stray-lines"}),
    ("21_units_in_cells.csv", {}, 1e-9, {"cell-form"}),
    ("23_mode_column_op_blank_in_auto.csv", {}, 1e-9, {"mode-unknown"}),
    ("27_elapsed_hms.csv", {}, 1e-9, set()),
    ("33_two_row_header_merged.csv", {}, 1e-9, {"header-rows", "several-loops"}),
]


@pytest.mark.parametrize(("name", "tables", "resolution", "said"), WHOLE)
def test_an_export_of_the_run_gives_the_run(name, tables, resolution, said):
    log = read(name, **tables)
    np.testing.assert_allclose(log.t, TRUE.t_s, rtol=0, atol=resolution)
    np.testing.assert_allclose(log.pv, TRUE.PV, rtol=0, atol=EXACT)
    np.testing.assert_allclose(log.co, TRUE.CO, rtol=0, atol=EXACT)
    np.testing.assert_allclose(log.sp, TRUE.SP, rtol=0, atol=EXACT)
    assert said <= codes(log)
    # every column that was guessed is named with its reason
    assert {"pv-column", "co-column"} <= codes(log)


def test_every_file_of_the_folder_is_held_to_something():
    here = Path(__file__).read_text()
    assert all(path.name in here for path in FOLDER.glob("*.csv"))


def test_times_of_whole_seconds_keep_what_the_seconds_still_tell():
    log = read("03_preamble_tags_units_ranges.csv")
    assert (log.pv_column.name, log.co_column.name, log.pv_column.unit) == ("TIC101.PV", "TIC101.OP", "degC")
    assert log.start == "2024-10-14T08:00:00" and {"header-rows", "preamble"} <= codes(log)
    # of two rows within one second the earlier is kept, and it is said
    whole, first = np.unique(np.floor(TRUE.t_s), return_index=True)
    np.testing.assert_array_equal(log.t, whole)
    np.testing.assert_allclose(log.pv, TRUE.PV[first], rtol=0, atol=EXACT)
    np.testing.assert_allclose(log.co, TRUE.CO[first], rtol=0, atol=EXACT)
    assert next(n.value for n in log.notes if n.code == "duplicates-conflict") == 599 - whole.size


def test_conflicting_rows_are_counted_and_the_first_one_is_kept():
    log = read("05_duplicate_timestamps.csv")
    counts = {n.code: n.value for n in log.notes if n.code.startswith("duplicates")}
    assert log.rows == 635 and sum(counts.values()) == 36
    assert counts["duplicates-conflict"] == 12


def test_an_hour_without_rows_stays_one_where_no_clock_is_set():
    log = read("07_dst_spring_forward_local.csv", time={"zone": "UTC"})
    assert np.max(np.diff(log.t)) == pytest.approx(3600.0, abs=2.0)
    assert "clock-change" not in codes(log)


def test_a_date_that_is_ambiguous_by_itself_is_a_question_with_both_answers_spelled_out():
    with pytest.raises(QuestionForUser) as caught:
        read("09_dayfirst_split_ampm.csv")
    for form in ('"%d/%m/%Y %I:%M:%S %p"', '"%m/%d/%Y %I:%M:%S %p"'):
        assert form in str(caught.value)
    log = read("09_dayfirst_split_ampm.csv", time={"format": "%d/%m/%Y %I:%M:%S %p"})
    assert log.start == "2024-05-04T11:55:00"
    whole, first = np.unique(np.floor(TRUE.t_s), return_index=True)
    # noon is crossed at 300 s: the twelve-hour clock does not turn back
    np.testing.assert_array_equal(log.t, whole)
    np.testing.assert_allclose(log.pv, TRUE.PV[first], rtol=0, atol=EXACT)


def test_stored_points_are_kept_at_their_times_and_nothing_is_joined():
    log = read("13_exception_compressed_sparse.csv")
    assert log.t.size == 115
    kept = np.searchsorted(TRUE.t_s, log.t - 1e-9)
    np.testing.assert_allclose(TRUE.t_s[kept], log.t, rtol=0, atol=1e-9)
    stored = np.isfinite(log.pv)
    np.testing.assert_allclose(log.pv[stored], TRUE.PV[kept][stored], rtol=0, atol=EXACT)
    # the CO is stored on change only and held in between
    np.testing.assert_allclose(log.co, TRUE.CO[kept], rtol=0, atol=EXACT)
    assert {"co-held", "pv-missing"} <= codes(log)


def test_blanks_part_thousands_and_commas_part_decimals():
    log = read("15_nbsp_thousands_decimalcomma.csv")
    np.testing.assert_allclose(log.pv, 1000.0 * TRUE.PV, rtol=0, atol=1e-6)
    np.testing.assert_allclose(log.sp, 1000.0 * TRUE.SP, rtol=0, atol=1e-6)
    np.testing.assert_allclose(log.co, TRUE.CO, rtol=0, atol=EXACT)
    assert any(n.code == "cell-form" and "20830" in n.text for n in log.notes)


def test_modes_are_read_and_an_unknown_code_is_said():
    log = read("23_mode_column_op_blank_in_auto.csv")
    assert log.automatic is not None and log.automatic[:8].all() and not log.automatic[8:100].any()
    note = next(n for n in log.notes if n.code == "mode-unknown")
    assert '"1"' in note.text and note.value == np.sum(TRUE.t_s >= 560)


def test_spikes_and_frozen_rows_are_read_as_written():
    log = read("25_frozen_pv_and_spikes.csv")
    np.testing.assert_array_equal(log.pv[[60, 61, 310, 500]], [-242.02, -242.02, -242.02, 132.2])
    assert np.ptp(log.pv[120:150]) == 0.0
    rest = np.ones(599, dtype=bool)
    rest[[60, 61, 310, 500, *range(120, 150)]] = False
    np.testing.assert_allclose(log.pv[rest], TRUE.PV[rest], rtol=0, atol=EXACT)


def test_rows_without_a_time_need_the_interval_and_get_it():
    with pytest.raises(QuestionForUser, match="sample_s"):
        read("29_no_header_no_time.csv")
    log = read("29_no_header_no_time.csv", time={"sample_s": 1.0})
    np.testing.assert_array_equal(log.t, np.arange(599.0))
    np.testing.assert_allclose(log.pv, TRUE.PV, rtol=0, atol=EXACT)
    np.testing.assert_allclose(log.co, TRUE.CO, rtol=0, atol=EXACT)


def test_irregular_times_are_kept_and_the_hole_stays():
    log = read("31_irregular_with_gap.csv")
    assert log.t.size == 419
    assert np.max(np.diff(log.t)) == pytest.approx(42.0, abs=2.5)
    # each row is a row of the run, at most 0.3 s from its time (2.111 s is the first one's)
    near = TRUE.iloc[np.argmin(np.abs(TRUE.t_s.to_numpy()[:, None] - (log.t + 2.111)[None, :]), axis=0)]
    assert np.mean(np.isclose(near.PV, log.pv, atol=EXACT)) > 0.95


def test_the_tag_in_the_sheet_chooses_the_loop():
    log = read("33_two_row_header_merged.csv", loop={"tag": "TIC-102"})
    assert (log.pv_column.name, log.co_column.name) == ("TIC102 PV", "TIC102 OP")
    np.testing.assert_allclose(log.pv, TRUE.PV2, rtol=0, atol=EXACT)
    np.testing.assert_allclose(log.co, TRUE.CO2, rtol=0, atol=EXACT)
    assert "several-loops" not in codes(log)
