"""HTML, PDF and text say the same, show what they are given, and obey nothing of it."""

import io
import re
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
from pypdf import PdfReader

from pipeline.errors import UsageError
from pipeline.findings import ALWAYS
from pipeline.record import CautionInfo, read_record
from pipeline.report import figures, write_report
from pipeline.report.outline import build_outline
from pipeline.report.terminal import summary_line, summary_text

RECORDS = Path(__file__).parents[1] / "records"

HOSTILE = (
    "<script>alert(1)</script>",
    "=HYPERLINK(1)",
    "#import sys.inputs",
    "$x$ *y* _z_ \\ @ref <label>",
    "{{ 7*7 }} {% raw %}",
    "</style><img src=x onerror=1>",
)


class _Text(HTMLParser):
    """What a reader sees, and the tags that carry it."""

    def __init__(self):
        super().__init__()
        self.tags, self.parts, self.silent = [], [], 0

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        self.silent += tag in ("style", "title")

    def handle_endtag(self, tag):
        self.silent -= tag in ("style", "title")

    def handle_data(self, data):
        if not self.silent:
            self.parts.append(data)


def parsed(page):
    reader = _Text()
    reader.feed(page)
    return reader


def squeezed(text):
    """Without any white space: line ends fall elsewhere in each form."""
    return re.sub(r"\s+", "", text)


def pdf_text(path):
    return "".join(page.extract_text() for page in PdfReader(path).pages)


@pytest.fixture(scope="module", params=["ready", "withheld"])
def written(request, tmp_path_factory):
    record = read_record(RECORDS / f"v1_{request.param}.json")
    return record, *write_report(record, tmp_path_factory.mktemp("reports"), "loop")


def with_hostile_texts(record):
    cautions = tuple(CautionInfo(code=f"c{i}", level="care", text=t) for i, t in enumerate(HOSTILE))
    return record.model_copy(
        update={
            "loop": {"loop": {"tag": HOSTILE[0], "service": HOSTILE[2]}},
            "cautions": (*record.cautions, *cautions),
            "next_steps": (*record.next_steps, *HOSTILE),
            "log": record.log.model_copy(update={"file": HOSTILE[5]}),
        }
    )


def test_every_caution_appears_in_every_form(written):
    record, page, document = written
    forms = {
        "html": "".join(parsed(page.read_text(encoding="utf-8")).parts),
        "pdf": pdf_text(document),
        "text": summary_text(build_outline(record)),
    }
    for name, text in forms.items():
        for caution in record.cautions:
            short = caution.level == "note" or caution.code in ALWAYS
            wanted = caution.code if name == "text" and short else caution.text
            assert squeezed(wanted) in squeezed(text), (name, caution.code)


def test_every_setting_and_the_action_appear_in_every_form():
    record = read_record(RECORDS / "v1_ready.json")
    outline = build_outline(record)
    text = summary_text(outline)
    for expected in (
        "1.35 %/%",
        "3.07 min per repeat",
        "Reverse acting: when the PV rises, the output must fall.",
    ):
        assert expected in text
        assert any(expected in f.text for f in outline.summary)
    assert "1.35 %/%" in summary_line(outline)


def test_a_withheld_report_names_its_cause_and_what_to_do_and_no_setting(written):
    record, page, document = written
    if record.verdict != "withheld":
        pytest.skip("the record gives settings")
    for text in ("".join(parsed(page.read_text(encoding="utf-8")).parts), pdf_text(document)):
        said = squeezed(text)
        assert squeezed("Settings are withheld") in said
        assert all(squeezed(step) in said for step in record.next_steps)
        assert squeezed("Integral time") not in said
        assert said.index(squeezed(record.next_steps[0])) < said.index(squeezed("Verdict on the test"))


def test_cautions_stand_before_settings(written):
    _, page, _ = written
    ids = [a.get("id") for t, a in parsed(page.read_text(encoding="utf-8")).tags if t == "section"]
    assert ids[:2] == [None, "cautions"]


def test_nothing_given_is_obeyed_and_everything_is_shown(tmp_path):
    record = with_hostile_texts(read_record(RECORDS / "v1_ready.json"))
    page, document = write_report(record, tmp_path, "hostile")
    html = parsed(page.read_text(encoding="utf-8"))
    assert not [t for t, a in html.tags if t in ("script", "img", "label") or "onerror" in a]
    for text in HOSTILE:
        assert text in "".join(html.parts)
        assert squeezed(text) in squeezed(pdf_text(document)), text
        assert text in summary_text(build_outline(record)).replace("\n", " ")


def test_a_terminal_gets_no_control_characters():
    record = read_record(RECORDS / "v1_ready.json")
    bad = "TIC\x1b[2J\x07\r101"
    outline = build_outline(record.model_copy(update={"loop": {"loop": {"tag": bad, "service": bad}}}))
    assert all(c.isprintable() or c == "\n" for c in summary_text(outline) + summary_line(outline))


def test_the_page_asks_for_nothing_outside_itself(written):
    _, page, _ = written
    html = page.read_text(encoding="utf-8")
    for _, attributes in parsed(html).tags:
        for name in ("src", "href", "xlink:href", "action", "data"):
            assert (attributes.get(name) or "#").startswith("#")
    assert "@import" not in html and not re.search(r"url\((?!#)", html)


def test_every_id_on_the_page_is_unique_and_every_reference_met(written):
    _, page, _ = written
    html = page.read_text(encoding="utf-8")
    ids = re.findall(r'\bid="([^"]+)"', html)
    assert len(ids) == len(set(ids))
    used = re.findall(r'(?:url\(#|xlink:href="#|aria-labelledby=")([\w.-]+)', html)
    assert used and set(used) <= set(ids)


def test_every_figure_says_in_words_what_it_shows(written):
    record, page, _ = written
    shown = [a for t, a in parsed(page.read_text(encoding="utf-8")).tags if a.get("role") == "img"]
    assert len(shown) == (1 if record.verdict == "withheld" else 3)
    assert all(len(a["aria-label"]) > 30 for a in shown)


def test_every_printed_page_carries_tag_hash_and_number(written):
    record, _, document = written
    outline = build_outline(record)
    pages = PdfReader(document).pages
    for number, page in enumerate(pages, start=1):
        text = page.extract_text()
        assert outline.tag in text and outline.record_hash[:16] in text
        assert f"page {number} of {len(pages)}" in text


def test_the_same_record_gives_the_same_bytes(written, tmp_path):
    record, page, document = written
    again = write_report(record, tmp_path, "other-name")
    assert again[0].read_bytes() == page.read_bytes()
    assert again[1].read_bytes() == document.read_bytes()


def test_a_folder_that_cannot_be_written_is_said(tmp_path):
    (tmp_path / "file").write_text("x", encoding="utf-8")
    with pytest.raises(UsageError, match="--out"):
        write_report(read_record(RECORDS / "v1_withheld.json"), tmp_path / "file", "x")


@pytest.mark.parametrize("name", sorted(figures.FIGURES))
def test_a_figure_is_small_plain_svg(name):
    element = figures.svg(name, read_record(RECORDS / "v1_ready.json"))
    assert element.startswith("<svg ") and len(element) < 150_000
    assert not re.search(r"<(script|style|image|metadata)|<!|DejaVu|http://(?!www\.w3\.org)", element)


def test_the_loop_figure_draws_the_margins_the_record_states():
    # the record's margins were computed on a grid of their own by tests/records/make_records.py
    record = read_record(RECORDS / "v1_ready.json")
    plane = figures.draw("loop", record).axes[0]
    (point,) = [line for line in plane.lines if line.get_marker() == "o"]
    x, y = point.get_xdata()[0], point.get_ydata()[0]
    assert np.hypot(x, y) == pytest.approx(1.0, abs=0.01)
    # the record's scan costs half its length of dead time: 0.17 degrees here
    assert 180 + np.degrees(np.arctan2(y, x)) == pytest.approx(record.margins.phase_margin_deg, abs=0.3)


def test_ink_stays_apart_in_grey():
    def lightness(color):
        linear = [
            v / 12.92 if v <= 0.04045 else ((v + 0.055) / 1.055) ** 2.4
            for v in (int(color[i : i + 2], 16) / 255 for i in (1, 3, 5))
        ]
        luminance = float(np.dot(linear, (0.2126, 0.7152, 0.0722)))  # IEC 61966-2-1, CIE 1976 L*
        return 116 * luminance ** (1 / 3) - 16

    steps = np.diff([lightness(c) for c in (figures.INK, figures.OUTPUT, figures.MEASURED, figures.BAND)])
    assert np.all(steps > 14)


def test_a_margin_just_missed_never_reads_as_met():
    record = read_record(RECORDS / "v1_ready.json")
    record = record.model_copy(
        update={
            "margins": record.margins.model_copy(update={"max_sensitivity": 1.84}),
            "bands": record.bands.model_copy(update={"max_sensitivity": (1.3, 1.84, 4.0)}),
        }
    )
    (section,) = [s for s in build_outline(record).sections if s.key == "margins"]
    assert "1.84" in str(section.blocks[0])


def test_a_record_that_never_overshoots_and_never_crosses_still_makes_a_report(tmp_path):
    record = read_record(RECORDS / "v1_ready.json")
    inf = float("inf")
    margins = record.margins.model_copy(
        update={
            "phase_margin_deg": inf,
            "gain_margin": inf,
            "delay_margin_s": inf,
            "gain_crossover": inf,
            "phase_crossover": inf,
            "crossings": (),
        }
    )
    bands = record.bands.model_copy(
        update={
            "phase_margin_deg": (40.0, inf, inf),
            "overshoot_pct": (0.0, 0.0, inf),
            "unstable_share": 0.02,
        }
    )
    page, _ = write_report(record.model_copy(update={"margins": margins, "bands": bands}), tmp_path, "x")
    text = "".join(parsed(page.read_text(encoding="utf-8")).parts)
    assert "no limit" in text and "inf" not in re.findall(r"\binf\b|\bnan\b", text)


def test_the_pdf_reads_as_a_document(written):
    _, _, document = written
    info = PdfReader(io.BytesIO(document.read_bytes())).metadata
    assert "Controller settings" in info.title and info.creation_date_raw.startswith("D:20260314")
