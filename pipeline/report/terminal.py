"""The report in short, as plain text, and what was understood of a log."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING, Any

import numpy as np

from pipeline.findings import ALWAYS, SEVERITY
from pipeline.report import numbers
from pipeline.report.content import Fact, Notices, Outline, Steps

if TYPE_CHECKING:
    from collections.abc import Iterable

    from pipeline.bumps import Bump
    from pipeline.findings import Caution
    from pipeline.intake.log import Column, Log
    from pipeline.testquality import Quality

#: Lines are broken here: wide enough to read, narrow enough for a split window.
_WIDTH = 96

#: Rows further apart than this many times the usual spacing are a gap: a single lost row is
#: not, three are (common practice).
_GAP = 3.5


def summary_text(outline: Outline) -> str:
    """Say in short what the report says: verdict, settings or cause, every caution.

    Cautions that stop or restrict are sentences; those of every report, and the notes, are
    named by their codes, since their sentences stand in the report.

    Parameters
    ----------
    outline : Outline

    Returns
    -------
    str
        Plain text without control characters, no newline at the end.
    """
    service = "" if outline.service == numbers.NOT_GIVEN else f": {outline.service}"
    lines = [f"{outline.tag}{service}", outline.headline]
    if outline.verdict != "withheld":
        lines += _aligned(outline.summary)
    blocks = [block for section in outline.sections for block in section.blocks]
    for block in blocks:
        if isinstance(block, Notices):
            spoken = [n for n in block.items if n.level != "note" and n.code not in ALWAYS]
            lines += [line for n in spoken for line in _hanging(n.level.ljust(6), n.text)]
            named = [n for n in block.items if n not in spoken]
            lines += _hanging(f"{named[0].level:6}", ", ".join(n.code for n in named)) if named else []
    if outline.verdict == "withheld":
        steps = [step for block in blocks if isinstance(block, Steps) for step in block.items]
        lines += ["What to do next:"] if steps else []
        lines += [line for step in steps for line in _hanging("    - ", step)]
    return "\n".join(printable(line) for line in lines)


def summary_line(outline: Outline) -> str:
    """Say the outcome in one line, for a list of many logs.

    Parameters
    ----------
    outline : Outline
    """
    told = "; ".join(f"{f.label} {f.text}" for f in outline.summary) or outline.headline
    return printable(f"{outline.tag}: {outline.verdict}. {told}")


def printable(text: str) -> str:
    """Replace what a terminal would obey rather than show."""
    return "".join(c if c.isprintable() else " " for c in text)


def _aligned(facts: Iterable[Fact]) -> list[str]:
    rows = list(facts)
    width = max((len(f.label) for f in rows), default=0)
    return [line for f in rows for line in _hanging(f"  {f.label.ljust(width)}  ", f.text)]


def _hanging(lead: str, text: str) -> list[str]:
    return textwrap.wrap(text, _WIDTH, initial_indent=lead, subsequent_indent=" " * len(lead)) or [lead]


def reading_text(log: Log, bumps: tuple[Bump, ...], quality: Quality) -> str:
    """Say what was understood of a log: columns and why, clock, gaps, bumps, test quality.

    Parameters
    ----------
    log : Log
    bumps : tuple of Bump
    quality : Quality

    Returns
    -------
    str
        Plain text without control characters, no newline at the end.
    """
    lines = [f"{log.file}: {log.rows} rows over {numbers.duration(log.span)}"]
    clock = f"one row every {numbers.duration(log.interval)}"
    lines += _aligned(
        [
            *(Fact(label=name, text=_column(column)) for name, column in _columns(log) if column is not None),
            Fact(label="Clock", text=f"{clock}, starting {log.start or 'at an unknown time'}"),
            Fact(label="Mode", text=_mode(log)),
            Fact(label="Gaps", text=_gaps_in_words(log)),
        ]
    )
    lines.append(f"{len(bumps)} bump{'' if len(bumps) == 1 else 's'} found." if bumps else "No bump found.")
    lines += [line for bump in bumps for line in _hanging("  ", _bump(bump))]
    lines.append(f"Verdict on the test: {quality.verdict}.")
    for caution in _by_severity((*quality.findings, *log.notes)):
        lines += _hanging(f"  {caution.level.ljust(6)}", caution.text)
    return "\n".join(printable(line) for line in lines)


def reading_data(log: Log, bumps: tuple[Bump, ...], quality: Quality) -> dict[str, Any]:
    """Give the same as plain values for a program: times in s, keys as in the record.

    Parameters
    ----------
    log : Log
    bumps : tuple of Bump
    quality : Quality
    """
    return {
        "log": {
            "file": log.file,
            "sha256": log.sha256,
            "rows": log.rows,
            "start": log.start,
            "span_s": log.span,
            "sample_s": log.interval,
            "columns": {
                name.lower(): None
                if column is None
                else {
                    "name": column.name,
                    "index": column.index,
                    "unit": column.unit,
                    "reason": column.reason,
                }
                for name, column in _columns(log)
            },
            "gaps": [{"at_s": at, "length_s": length} for at, length in _gaps(log)],
        },
        "bumps": [
            {
                "start_s": bump.start_s,
                "end_s": bump.end_s,
                "moves": [{"at_s": m.at_s, "from": m.before, "to": m.after} for m in bump.moves],
                "used": bump.used,
                "reason": bump.reason,
            }
            for bump in bumps
        ],
        "quality": {
            "verdict": quality.verdict,
            "findings": [_caution(c) for c in quality.findings],
        },
        "notes": [_caution(c) for c in log.notes],
    }


def _caution(caution: Caution) -> dict[str, Any]:
    return {
        "code": caution.code,
        "level": caution.level,
        "text": caution.text,
        "value": caution.value,
        "limit": caution.limit,
    }


def _by_severity(cautions: Iterable[Caution]) -> list[Caution]:
    return sorted(cautions, key=lambda c: SEVERITY[c.level])


def _columns(log: Log) -> tuple[tuple[str, Column | None], ...]:
    return (
        ("Time", log.time_column),
        ("PV", log.pv_column),
        ("CO", log.co_column),
        ("SP", log.sp_column),
        ("Mode", log.mode_column),
    )


def _column(column: Column) -> str:
    unit = f" [{column.unit}]" if column.unit else ""
    return f"{column.name}{unit}, column {column.index}: {column.reason}"


def _mode(log: Log) -> str:
    if log.automatic is None:
        return "the log does not say"
    share = float(np.mean(log.automatic))
    if share in (0.0, 1.0):
        return "automatic throughout" if share else "manual throughout"
    return f"automatic for {numbers.share(share)} of the rows"


def _gaps(log: Log) -> list[tuple[float, float]]:
    spacing = np.diff(log.t)
    wide = np.flatnonzero(spacing > _GAP * log.interval)
    return [(float(log.t[i]), float(spacing[i])) for i in wide]


def _gaps_in_words(log: Log) -> str:
    gaps = _gaps(log)
    if not gaps:
        return "none"
    at, longest = max(gaps, key=lambda gap: gap[1])
    return f"{len(gaps)}, the longest {numbers.duration(longest)} at {numbers.duration(at)}"


def _bump(bump: Bump) -> str:
    moves = [
        f"{numbers.plain(m.before)} to {numbers.plain(m.after)} at {numbers.duration(m.at_s)}"
        for m in bump.moves
    ]
    told = ", ".join(moves[:3]) + (f" and {len(moves) - 3} more" if len(moves) > 3 else "")
    used = "used" if bump.used else "not used"
    return f"CO {told}; {used}{f': {bump.reason}' if bump.reason else ''}"
