"""Outline to HTML: one self-contained page, opened from a file with no network."""

from __future__ import annotations

from collections.abc import Mapping

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from pipeline.report.content import Outline


def render_html(outline: Outline, figures: Mapping[str, str]) -> str:
    """Write the page.

    Parameters
    ----------
    outline : Outline
    figures : mapping of str to str
        SVG elements by the names the outline's pictures use.

    Returns
    -------
    str
        HTML whose every text from the record is escaped; only our own SVG and CSS are markup.
    """
    environment = Environment(
        loader=PackageLoader("pipeline.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
    )
    style = environment.loader.get_source(environment, "report.css")[0] if environment.loader else ""
    return environment.get_template("report.html.j2").render(
        outline=outline,
        style=Markup(style.strip()),
        figures={name: Markup(element) for name, element in figures.items()},
    )
