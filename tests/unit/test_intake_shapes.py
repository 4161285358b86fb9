"""Logs in other shapes than one row a sample in one text file: long, several runs, packed, in workbooks."""

import gzip
import io
import zipfile

import numpy as np
import pytest

from pipeline.errors import LogUnreadable, QuestionForUser, UsageError
from pipeline.intake import read_log
from pipeline.settings import LoopSheet


def sheet(**tables):
    return LoopSheet.model_validate(tables)


def codes(log):
    return {note.code for note in log.notes}


N = 80
T = np.arange(N, dtype=float)
CO = np.where(T < 20, 40.0, 45.0)
PV = np.round(50.0 + 10.0 * (1.0 - np.exp(-np.maximum(T - 22.0, 0.0) / 6.0)), 4)
WIDE = (
    "Time (s),CO,PV\n" + "\n".join(f"{t:g},{u:g},{y:.4f}" for t, u, y in zip(T, CO, PV, strict=True)) + "\n"
)


def same_run(log):
    np.testing.assert_array_equal(log.t, T)
    np.testing.assert_array_equal(log.co, CO)
    np.testing.assert_array_equal(log.pv, PV)


def stamp(seconds):
    return f"2026-03-25 10:{int(seconds) // 60:02d}:{seconds % 60:06.3f}"


def long_rows():
    """PV scanned each second, CO stored 0.4 s later and on change only, mode in words."""
    rows = [("TIC7.MODE", 0.0, "MAN", "Good")]
    rows += [("TIC7.PV", t, f"{y:.4f}", "Bad" if t == 50 else "Good") for t, y in zip(T, PV, strict=True)]
    rows += [("TIC7.OP", 0.4, "40", "Good"), ("TIC7.OP", 19.4, "45", "Good")]
    return rows


@pytest.mark.parametrize("order", ["by tag", "by time"])
def test_a_long_log_keeps_each_signal_at_its_own_times(tmp_path, order):
    rows = long_rows() if order == "by tag" else sorted(long_rows(), key=lambda r: r[1])
    text = "Tag,Timestamp,Value,Quality\n" + "\n".join(f"{a},{stamp(b)},{c},{d}" for a, b, c, d in rows)
    (tmp_path / "long.csv").write_text(text)
    log = read_log(tmp_path / "long.csv")
    assert (log.pv_column.name, log.co_column.name, log.mode_column.name) == (
        "TIC7.PV",
        "TIC7.OP",
        "TIC7.MODE",
    )
    assert "long-layout" in codes(log)
    # no CO is known before 0.4 s; from there both clocks are kept, and the PV has no value at the CO's times
    np.testing.assert_allclose(log.t + 0.4, np.sort(np.concatenate([T[1:], [0.4, 19.4]])), atol=1e-9)
    own = np.isin(np.round(log.t + 0.4, 6), T)
    assert np.all(np.isnan(log.pv[~own]))
    bad = np.round(log.t + 0.4, 6) == 50.0
    assert np.isnan(log.pv[bad]) and "bad-quality" in codes(log)
    np.testing.assert_array_equal(log.pv[own & ~bad], PV[1:][T[1:] != 50])
    np.testing.assert_array_equal(log.co, np.where(log.t + 0.4 < 19.4 - 1e-6, 40.0, 45.0))
    assert log.automatic is not None and not log.automatic.any()


def test_two_values_of_a_tag_for_one_time_are_reported(tmp_path):
    rows = [*long_rows(), ("TIC7.PV", 30.0, "99.9", "Good")]
    text = "Tag;Timestamp;Value\n" + "\n".join(f"{a};{stamp(b)};{c}" for a, b, c, _ in rows)
    (tmp_path / "long.csv").write_text(text)
    log = read_log(tmp_path / "long.csv")
    assert next(n.value for n in log.notes if n.code == "duplicates-conflict") == 1
    assert 99.9 not in log.pv


@pytest.mark.parametrize(("good", "bad"), [("Good", "Bad"), ("192", "0"), ("ok", "stale"), ("192", "28")])
def test_readings_that_their_quality_column_calls_bad_are_left_out(tmp_path, good, bad):
    rows = [
        f"{t:g},{u:g},{good},{y:.4f},{bad if t == 50 else good}" for t, u, y in zip(T, CO, PV, strict=True)
    ]
    (tmp_path / "log.csv").write_text("Time (s),CO,CO quality,PV,PV quality\n" + "\n".join(rows))
    log = read_log(tmp_path / "log.csv")
    assert np.flatnonzero(np.isnan(log.pv)).tolist() == [50]
    np.testing.assert_array_equal(log.co, CO)
    assert next(n.value for n in log.notes if n.code == "bad-quality") == 1


def test_several_runs_are_a_question_and_the_sheet_answers_it(tmp_path):
    body = WIDE.split("\n", 1)[1]
    other = body.replace(",45,", ",48,")
    (tmp_path / "log.csv").write_text("Time (s),CO,PV\n" + body + "Time (s),CO,PV\n" + other + other)
    with pytest.raises(QuestionForUser, match=r"line 83, 163.*3 runs.*\[file\] run"):
        read_log(tmp_path / "log.csv")
    same_run(read_log(tmp_path / "log.csv", sheet=sheet(file={"run": 1})))
    second = read_log(tmp_path / "log.csv", sheet=sheet(file={"run": 2}))
    assert second.co[-1] == 48.0 and second.t.size == N and "runs-left-out" in codes(second)
    with pytest.raises(UsageError, match="holds 3 runs"):
        read_log(tmp_path / "log.csv", sheet=sheet(file={"run": 4}))


def test_a_false_start_is_left_out_and_said(tmp_path):
    start = "\n".join(WIDE.split("\n")[1:13])
    (tmp_path / "log.csv").write_text("Time (s),CO,PV\n" + start + "\n" + WIDE.split("\n", 1)[1])
    log = read_log(tmp_path / "log.csv")
    same_run(log)
    assert "runs-left-out" in codes(log)


def column_mode(tmp_path, name, code, co=CO):
    rows = [f"{t:g},{u:g},{y:.4f},{c}" for t, u, y, c in zip(T, co, PV, code, strict=True)]
    (tmp_path / "log.csv").write_text(f"Time (s),CO,PV,{name}\n" + "\n".join(rows))
    return read_log(tmp_path / "log.csv")


@pytest.mark.parametrize(
    ("name", "first", "then"), [("AUTO", 1, 0), ("MAN", 0, 1), ("Manual", 0, 1), ("Mode", "AUTO", "MAN")]
)
def test_zeros_and_ones_under_a_named_mode_are_that_mode(tmp_path, name, first, then):
    log = column_mode(tmp_path, name, [first if t < 12 else then for t in T])
    assert log.automatic is not None
    np.testing.assert_array_equal(log.automatic, T < 12)


def test_codes_are_told_apart_by_how_the_output_moves(tmp_path):
    working = CO + np.where(T < 12, np.sin(T), 0.0)
    log = column_mode(tmp_path, "Mode", [3 if t < 12 else 1 for t in T], co=np.round(working, 3))
    assert log.automatic is not None
    np.testing.assert_array_equal(log.automatic, T < 12)
    assert next(n for n in log.notes if n.code == "mode-by-behaviour").level == "care"


def test_codes_nobody_explains_are_not_guessed(tmp_path):
    log = column_mode(tmp_path, "Mode", [2 if t < 12 else 5 for t in T])
    assert log.automatic is None
    assert next(n for n in log.notes if n.code == "mode-codes").level == "care"


def archive(**files):
    data = io.BytesIO()
    with zipfile.ZipFile(data, "w", zipfile.ZIP_DEFLATED) as packed:
        for name, text in files.items():
            packed.writestr(name.replace("_", "."), text)
    return data.getvalue()


def test_packed_logs_are_unpacked(tmp_path):
    path = tmp_path / "log"
    for content in (
        gzip.compress(WIDE.encode()),
        gzip.compress(WIDE[:400].encode()) + gzip.compress(WIDE[400:].encode()),
        archive(trend_csv=WIDE),
        archive(trend_csv=gzip.compress(WIDE.encode())),
    ):
        path.write_bytes(content)
        same_run(read_log(path))


def test_an_archive_of_several_logs_is_a_question(tmp_path):
    path = tmp_path / "logs.zip"
    path.write_bytes(archive(a_csv="x", b_csv=WIDE))
    with pytest.raises(QuestionForUser, match=r"2 files: a.csv, b.csv.*\[file\] part"):
        read_log(path)
    same_run(read_log(path, sheet=sheet(file={"part": "b.csv"})))
    with pytest.raises(UsageError, match=r"It holds: a.csv, b.csv"):
        read_log(path, sheet=sheet(file={"part": "c.csv"}))


def test_damaged_packings_are_a_sentence(tmp_path):
    path = tmp_path / "log"
    whole = [gzip.compress(WIDE.encode()), archive(trend_csv=WIDE), workbook({"Trend": [["Time (s)", 1.0]]})]
    for content in [b for w in whole for b in (w[: len(w) // 2], w[:30] + b"\xff" * 40 + w[70:])]:
        path.write_bytes(content)
        with pytest.raises(LogUnreadable):
            read_log(path)


def workbook(sheets):
    """A workbook by the letter of ECMA-376, office open XML: inline strings and plain numbers."""

    def cell(value):
        if isinstance(value, str):
            return f'<c t="inlineStr"><is><t>{value}</t></is></c>'
        return f"<c><v>{value!r}</v></c>"

    main = "http://schemas.openxmlformats.org/spreadsheetml/2006/main"
    rel = "http://schemas.openxmlformats.org/officeDocument/2006/relationships"
    package = "http://schemas.openxmlformats.org/package/2006"
    kind = "application/vnd.openxmlformats-officedocument.spreadsheetml"
    files = {
        "[Content_Types].xml": f'<Types xmlns="{package}/content-types"><Default Extension="rels" ContentType='
        '"application/vnd.openxmlformats-package.relationships+xml"/><Override PartName="/xl/workbook.xml" '
        f'ContentType="{kind}.sheet.main+xml"/></Types>',
        "_rels/.rels": f'<Relationships xmlns="{package}/relationships"><Relationship Id="rId1" '
        f'Type="{rel}/officeDocument" Target="xl/workbook.xml"/></Relationships>',
        "xl/workbook.xml": f'<workbook xmlns="{main}" xmlns:r="{rel}"><sheets>'
        + "".join(f'<sheet name="{n}" sheetId="{k}" r:id="rId{k}"/>' for k, n in enumerate(sheets, 1))
        + "</sheets></workbook>",
        "xl/_rels/workbook.xml.rels": f'<Relationships xmlns="{package}/relationships">'
        + "".join(
            f'<Relationship Id="rId{k}" Type="{rel}/worksheet" Target="worksheets/sheet{k}.xml"/>'
            for k in range(1, len(sheets) + 1)
        )
        + "</Relationships>",
    }
    for k, rows in enumerate(sheets.values(), 1):
        body = "".join(f"<row>{''.join(cell(v) for v in row)}</row>" for row in rows)
        files[f"xl/worksheets/sheet{k}.xml"] = (
            f'<worksheet xmlns="{main}"><sheetData>{body}</sheetData></worksheet>'
        )
    data = io.BytesIO()
    with zipfile.ZipFile(data, "w") as packed:
        for name, text in files.items():
            packed.writestr(name, text)
    return data.getvalue()


TABLE = [
    ["Time (s)", "CO", "PV"],
    *([float(a), float(b), float(c)] for a, b, c in zip(T, CO, PV, strict=True)),
]


def test_a_workbook_is_read_and_the_sheet_it_came_from_is_said(tmp_path):
    path = tmp_path / "log.xlsx"
    path.write_bytes(workbook({"Trend": TABLE}))
    same_run(read_log(path))
    other = [[r[0], r[1], r[2] if isinstance(r[2], str) else r[2] + 1.0] for r in TABLE]
    path.write_bytes(workbook({"Notes": [["Line 3"], ["moved by hand"]], "Trend": TABLE, "Old": other[:60]}))
    log = read_log(path)
    same_run(log)
    note = next(n for n in log.notes if n.code == "sheet-guessed")
    # a second sheet of the same kind makes the guess worth a warning
    assert note.level == "care" and '"Trend"' in note.text and "[file] part" in note.text
    old = read_log(path, sheet=sheet(file={"part": "Old"}))
    np.testing.assert_array_equal(old.pv, PV[:59] + 1.0)
    with pytest.raises(UsageError, match="Notes, Trend, Old"):
        read_log(path, sheet=sheet(file={"part": "Trends"}))


def test_a_column_store_is_read_or_says_what_is_missing(tmp_path):
    pandas = pytest.importorskip("pandas")
    pytest.importorskip("pyarrow", reason="comes with the extra named parquet")
    path = tmp_path / "log.parquet"
    clock = pandas.Timestamp("2026-03-25 10:00:00") + pandas.to_timedelta(T, unit="s")
    pandas.DataFrame({"Time": clock, "CO": CO, "PV": PV}).to_parquet(path)
    same_run(read_log(path))
    pandas.DataFrame({"CO": CO, "PV": PV}, index=pandas.Index(clock, name="Time")).to_parquet(path)
    same_run(read_log(path))


def test_a_column_store_without_its_package_is_a_sentence(tmp_path, monkeypatch):
    def absent(*_, **__):
        raise ImportError

    monkeypatch.setattr("pandas.read_parquet", absent)
    (tmp_path / "log.parquet").write_bytes(b"PAR1 and so on")
    with pytest.raises(LogUnreadable, match="extra named parquet"):
        read_log(tmp_path / "log.parquet")


def test_a_comma_that_can_be_read_in_two_ways_is_a_question(tmp_path):
    # 1,234 beside whole numbers: a thousands mark in one country, a decimal mark in the next
    rows = [f"{t:g};{u:g};{1200 + 3 * t:,.0f}" for t, u in zip(T, CO, strict=True)]
    (tmp_path / "log.csv").write_text("Time (s);CO;PV\n" + "\n".join(rows))
    with pytest.raises(QuestionForUser, match=r"may be 1.\d+ or 1\d+.*\[file\] decimal"):
        read_log(tmp_path / "log.csv")
    thousands = read_log(tmp_path / "log.csv", sheet=sheet(file={"decimal": "."}))
    np.testing.assert_array_equal(thousands.pv, 1200 + 3 * T)
    decimals = read_log(tmp_path / "log.csv", sheet=sheet(file={"decimal": ","}))
    np.testing.assert_allclose(decimals.pv, (1200 + 3 * T) / 1000, atol=1e-12)


@pytest.mark.parametrize(
    ("written", "meant"), [("1.234,5", 1234.5), ("1,234.5", 1234.5), ("1'234.5", 1234.5), ("1 234,5", 1234.5)]
)
def test_thousands_marks_of_four_countries(tmp_path, written, meant):
    rows = [f"{t:.0f};{u:.0f};{written}" if t else f"{t:.0f};{u:.0f};950" for t, u in zip(T, CO, strict=True)]
    rows[40] = f"40;45;{written.replace('5', '6')}"
    (tmp_path / "log.csv").write_text("Time (s);CO;PV\n" + "\n".join(rows))
    log = read_log(tmp_path / "log.csv")
    assert log.pv[0] == 950.0 and log.pv[1] == meant


def test_filler_numbers_are_no_readings(tmp_path):
    rows = WIDE.split("\n")
    for k in (31, 32, 60):
        rows[k] = ",".join([*rows[k].split(",")[:2], "-9999"])
    (tmp_path / "log.csv").write_text("\n".join(rows))
    log = read_log(tmp_path / "log.csv")
    assert np.flatnonzero(np.isnan(log.pv)).tolist() == [30, 31, 59]
    assert any(n.code == "cell-form" and "-9999" in n.text for n in log.notes)


@pytest.mark.parametrize(
    ("stamps", "said"),
    [
        # 2024-10-27 03:00 went back to 02:00 in central Europe
        (["2024-10-27 02:59:{:02d}", "2024-10-27 02:00:{:02d}"], "clock-change"),
        (["2026-03-25 12:59:{:02d}", "2026-03-25 01:00:{:02d}"], "twelve-hour-clock"),
        (["25-Mar-26 11:59:{:02d} PM", "26-Mar-26 12:00:{:02d} AM"], None),
        (["12:59:{:02d}", "1:00:{:02d}"], None),
        (["23:59:{:02d}", "00:00:{:02d}"], None),
        (["25. März 2026 10:00:{:02d}", "25. März 2026 10:01:{:02d}"], None),
        (["Mar 25, 2026 10:00:{:02d}", "Mar 25, 2026 10:01:{:02d}"], None),
        (["20260325100000", "20260325100100"], None),
        (["20260325T1000{:02d}", "20260325T1001{:02d}"], None),
    ],
)
def test_clocks_that_turn_and_names_of_months(tmp_path, stamps, said):
    def written(t):
        form = stamps[int(t) // 60]
        return form.format(int(t) % 60) if "{" in form else str(int(form) + int(t) % 60)

    rows = [f"{written(t)}\t{u:g}\t{y:.4f}" for t, u, y in zip(T, CO, PV, strict=True)]
    (tmp_path / "log.txt").write_text("Time\tCO\tPV\n" + "\n".join(rows))
    log = read_log(tmp_path / "log.txt")
    np.testing.assert_allclose(log.t, T, atol=1e-6)
    assert (said is None) or said in codes(log)


def test_dates_that_cross_midnight_give_their_order_away(tmp_path):
    days = ["03/04/2026 23:59:{:02d}", "04/04/2026 00:00:{:02d}"]
    rows = [
        f"{days[int(t) // 60].format(int(t) % 60)},{u:g},{y:.4f}" for t, u, y in zip(T, CO, PV, strict=True)
    ]
    (tmp_path / "log.csv").write_text("Time,CO,PV\n" + "\n".join(rows))
    log = read_log(tmp_path / "log.csv")
    np.testing.assert_allclose(log.t, T)
    assert log.start == "2026-04-03T23:59:00"


@pytest.mark.parametrize(
    ("scale", "word"), [(1e3, "milliseconds"), (1e6, "microseconds"), (1e9, "nanoseconds")]
)
def test_seconds_since_1970_in_finer_counts(tmp_path, scale, word):
    rows = [f"{int((1772618000 + t) * scale)},{u:g},{y:.4f}" for t, u, y in zip(T, CO, PV, strict=True)]
    (tmp_path / "log.csv").write_text("ts,CO,PV\n" + "\n".join(rows))
    log = read_log(tmp_path / "log.csv")
    np.testing.assert_allclose(log.t, T, atol=1e-6)
    assert word in next(n.text for n in log.notes if n.code == "epoch")
