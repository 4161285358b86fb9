"""The report: a record in, one outline, then HTML, PDF and a short text."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from pipeline.bumps import Bump
    from pipeline.intake.log import Log
    from pipeline.record import Record

__all__ = ["write_plot", "write_report"]
#: Dots per inch of a plot that stands alone: sharp on a screen, small as a file.
_DPI = 130


def write_report(record: Record, folder: Path, stem: str) -> tuple[Path, Path]:
    """Write the report on a record as a page and as a document.

    Parameters
    ----------
    record : Record
    folder : Path
        Made if it is not there.
    stem : str
        Name of the files without their endings.

    Returns
    -------
    tuple of Path
        The HTML and the PDF file, each whole or absent.

    Raises
    ------
    UsageError
        If the folder cannot be written to.
    """
    # here, so that the short text can be had without the drawing and typesetting libraries
    from pipeline.record import write_whole
    from pipeline.report.figures import svg
    from pipeline.report.html import render_html
    from pipeline.report.outline import build_outline
    from pipeline.report.pdf import render_pdf

    outline = build_outline(record)
    figures = {name: svg(name, record) for name in outline.pictures()}
    page, document = folder / f"{stem}.html", folder / f"{stem}.pdf"
    write_whole(render_html(outline, figures).encode(), page)
    write_whole(render_pdf(outline, figures), document)
    return page, document


def write_plot(log: Log, bumps: tuple[Bump, ...], folder: Path, stem: str) -> Path:
    """Draw what was understood of a log: PV, CO, its moves, and the parts that are not used.

    Parameters
    ----------
    log : Log
    bumps : tuple of Bump
    folder : Path
        Made if it is not there.
    stem : str
        Name of the file without its ending.

    Returns
    -------
    Path
        The picture, whole or absent.

    Raises
    ------
    UsageError
        If the folder cannot be written to.
    """
    import io

    from pipeline.record import curves, parts, write_whole
    from pipeline.report.figures import traces

    shown = curves.series(log, None, log.pv_column.unit, log.co_column.unit)
    picture = io.BytesIO()
    traces(shown, parts.bump_infos(bumps), log.span).savefig(
        picture, format="png", dpi=_DPI, metadata={"Software": None}
    )
    path = folder / f"{stem}_log.png"
    write_whole(picture.getvalue(), path)
    return path
