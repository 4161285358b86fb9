"""Outline to PDF: text goes in as data, so nothing in a log or a sheet can act as markup."""

from __future__ import annotations

import json
import re
import tempfile
from collections.abc import Mapping
from dataclasses import asdict
from datetime import UTC, datetime
from importlib.resources import files
from pathlib import Path

import typst

from pipeline.report.content import Outline

#: The page's typeface, one that the compiler carries with it: the same page on every machine.
_FONT = "Libertinus Serif"


def render_pdf(outline: Outline, figures: Mapping[str, str]) -> bytes:
    """Set the pages.

    Parameters
    ----------
    outline : Outline
    figures : mapping of str to str
        SVG elements by the names the outline's pictures use.

    Returns
    -------
    bytes
        The same for the same outline: the date inside is the record's, fonts are built in.
    """
    template = (files("pipeline.report") / "templates" / "report.typ").read_bytes()
    with tempfile.TemporaryDirectory(prefix="firstgain-") as name:
        folder = Path(name)
        content = {**asdict(outline), "program": "firstgain"}
        (folder / "outline.json").write_text(json.dumps(content, ensure_ascii=False), encoding="utf-8")
        for figure, element in figures.items():
            (folder / f"{figure}.svg").write_text(_in_page_font(element), encoding="utf-8")
        main = folder / "report.typ"
        main.write_bytes(template)
        pages = typst.compile(
            main,
            root=folder,
            format="pdf",
            ignore_system_fonts=True,
            timestamp=_moment(outline.created),
        )
    assert isinstance(pages, bytes)
    return pages


def _in_page_font(element: str) -> str:
    return re.sub(r"<svg ", f'<svg font-family="{_FONT}" ', element, count=1)


def _moment(created: str) -> datetime:
    """Read the record's own time; a record without a zone is taken as UTC."""
    moment = datetime.fromisoformat(created)
    return moment if moment.tzinfo else moment.replace(tzinfo=UTC)
