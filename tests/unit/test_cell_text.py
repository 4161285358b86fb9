"""Text from a log is shown as text: it never becomes markup, a formula, or an order to the terminal."""

import json
import re

import numpy as np
import pytest

from pipeline.commission import Request, commission
from pipeline.record import to_json
from pipeline.report.html import render_html
from pipeline.report.outline import build_outline
from pipeline.report.pdf import render_pdf
from pipeline.report.terminal import summary_text
from pipeline.settings import LoopSheet

NASTY = [
    "<script>alert(1)</script>",
    "=cmd('calc')",
    '#eval(read("x"))',
    "{{ 7*7 }}",
    "[bold red]PV[/bold red]",
    "\x1b[31mPV",
    "</title><img src=x onerror=alert(1)>",
    "$1/0$ *PV* _PV_ @cite <label>",
]


@pytest.fixture(params=NASTY)
def record(request, tmp_path):
    t = np.arange(0.0, 400.0, 1.0)
    co = 40.0 + 5.0 * (t >= 60) - 5.0 * (t >= 220)
    pv = 50.0 + sum(
        d * (1.0 - np.exp(-np.maximum(t - at - 4.0, 0.0) / 15.0)) for at, d in ((60.0, 8.0), (220.0, -8.0))
    )
    pv += np.random.default_rng(1).normal(0.0, 0.05, t.size)
    name = request.param.replace('"', '""')
    rows = [f'Time (s),"{name}",CO'] + [f"{a:g},{b:.4f},{c:g}" for a, b, c in zip(t, pv, co, strict=True)]
    path = tmp_path / "log.csv"
    path.write_text("\n".join(rows) + "\n", encoding="utf-8")
    sheet = LoopSheet.model_validate(
        {
            "columns": {"pv": 2, "co": 3},
            "loop": {"tag": request.param, "service": request.param},
            "people": {"tested_by": request.param},
        }
    )
    return request.param, commission(path, request=Request(sheet=sheet))


def test_a_name_is_text_everywhere(record):
    nasty, made = record
    assert made.verdict != "withheld"
    outline = build_outline(made)
    page = render_html(outline, dict.fromkeys(outline.pictures(), "<svg></svg>"))
    assert "<script" not in page and "onerror=" not in re.sub(r"&lt;[^<]*", "", page)
    assert "49" not in re.findall(r"<h1>(.*?)</h1>", page)
    printed = summary_text(outline)
    assert "\x1b" not in printed
    assert (
        render_pdf(outline, dict.fromkeys(outline.pictures(), "<svg xmlns='http://www.w3.org/2000/svg'/>"))[
            :4
        ]
        == b"%PDF"
    )
    kept = json.loads(to_json(made))
    assert kept["loop"]["loop"]["tag"] == nasty
