"""Record to outline: what a report says and in which order, decided once for every form.

A section is one function in `_WITH_SETTINGS` or `_WITHHELD`; it gives None when the record
holds nothing for it.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Mapping

from pipeline.findings import ALWAYS, SEVERITY
from pipeline.record import AsFound, CautionInfo, Entered, Record, to_json
from pipeline.report import numbers
from pipeline.report.content import (
    Fact,
    Facts,
    Notice,
    Notices,
    Outline,
    Prose,
    Section,
    Signature,
    Signatures,
    Steps,
    Table,
)
from pipeline.report.evidence import model, provenance, test
from pipeline.report.performance import (
    asked_and_reached,
    degrees,
    loop,
    overshoot,
    phase_margin,
    prediction,
    settled,
)
from pipeline.report.standing import guide, standing

_HEADLINES = {
    "ready": "Settings are ready to enter.",
    "ready with cautions": "Settings are ready to enter, with the cautions below.",
    "withheld": "Settings are withheld: this test does not support a gain.",
}

#: Significant digits of a setting to type in: a change of 0.05 % at most, which moves a phase
#: margin by a few hundredths of a degree.
_ENTRY_DIGITS = 4

#: Roles of the sign-off block and where the loop sheet names them.
_ROLES = (("Tested", "tested_by"), ("Checked", "checked_by"), ("Approved", "approved_by"))

#: References of the loop sheet that belong on a signed page.
_REFERENCES = (
    ("Loop drawing", "loop_drawing"),
    ("Permit", "permit"),
    ("Change number", "change_number"),
    ("Valve test", "valve_test"),
    ("Loop check", "loop_check"),
)

#: What one bump can never tell, whatever its quality (common practice).
_NEVER_ASSESSED = (
    "other operating points, loads and products",
    "wear of the final controlling element and of the sensor",
    "interaction with other loops",
    "control while an output or rate limit is active, start-up and shut-down",
    "whether the clocks of PV and CO agree, and filters that nobody recorded",
    "safety functions, alarms and trips",
)


def build_outline(record: Record) -> Outline:
    """Decide what the report on a record says.

    Parameters
    ----------
    record : Record

    Returns
    -------
    Outline
        The cautions stand first, then settings, margins and what to do; a withheld record leads
        with its cause.
    """
    sections = _WITHHELD if record.verdict == "withheld" else _WITH_SETTINGS
    built = (section(record) for section in sections)
    return Outline(
        title="Controller settings from a bump test",
        tag=_tag(record),
        service=_sheet(record, "loop", "service"),
        verdict=record.verdict,
        headline=_HEADLINES[record.verdict],
        summary=_summary(record),
        sections=tuple(s for s in built if s is not None),
        created=record.made.created,
        record_hash=hashlib.sha256(to_json(record).encode()).hexdigest(),
    )


def _tag(record: Record) -> str:
    """Give the loop's tag, or the log's name where the sheet has none."""
    tag = _sheet(record, "loop", "tag")
    return record.log.file if tag == numbers.NOT_GIVEN else tag


def _sheet(record: Record, table: str, key: str) -> str:
    rows = record.loop.get(table)
    value = rows.get(key) if isinstance(rows, dict) else None
    return numbers.NOT_GIVEN if value in (None, "") else str(value)


def _summary(record: Record) -> tuple[Fact, ...]:
    if record.controller is None or record.margins is None or record.prediction is None:
        stops = [c for c in record.cautions if c.level == "stop"]
        return tuple(Fact(label="Cause", text=c.text) for c in stops)
    rows = _entries(record.controller.as_entered)
    rows.append(Fact(label="Controller", text=record.controller.kind))
    rows.append(Fact(label="Phase margin", text=phase_margin(record)))
    rows.append(Fact(label="Predicted overshoot", text=overshoot(record, record.prediction)))
    rows.append(Fact(label="Settled within 5 %", text=settled(record.prediction)))
    rows.append(Fact(label="Action", text=record.action_words or record.controller.action))
    return tuple(rows)


def _entries(entered: Mapping[str, Entered]) -> list[Fact]:
    return [Fact(label=_sentence(name), text=_entry(entry)) for name, entry in entered.items()]


def _entry(entry: Entered) -> str:
    """Show a setting as it is to be typed: what is left off moves no margin by a digit shown."""
    if isinstance(entry.value, str):
        return f"{entry.value} {entry.unit}".strip()
    return numbers.plain(entry.value, digits=_ENTRY_DIGITS, unit=entry.unit)


def _sentence(name: str) -> str:
    words = name.replace("_", " ")
    return words[:1].upper() + words[1:]


def _cautions(record: Record) -> Section | None:
    """Show what withholds or restricts the settings."""
    return _notices(record, "cautions", "Cautions", ("stop", "care"))


def _notes(record: Record) -> Section | None:
    """Show what informs."""
    return _notices(record, "notes", "Notes", ("note",))


def _notices(record: Record, key: str, title: str, levels: tuple[str, ...]) -> Section | None:
    chosen = [c for c in record.cautions if c.level in levels]
    if not chosen:
        return None
    ordered = sorted(chosen, key=lambda c: (SEVERITY[c.level], c.code in ALWAYS))
    return Section(key=key, title=title, blocks=(Notices(items=tuple(map(_notice, ordered))),))


def _notice(caution: CautionInfo) -> Notice:
    parts = []
    if caution.value is not None:
        parts.append(f"observed {numbers.plain(caution.value)}")
    if caution.limit is not None:
        parts.append(f"limit {numbers.plain(caution.limit)}")
    return Notice(level=caution.level, code=caution.code, text=caution.text, measure=", ".join(parts))


def _settings(record: Record) -> Section | None:
    c = record.controller
    if c is None:
        return None
    facts = Facts(
        rows=(
            Fact(label="Action", text=record.action_words or c.action, note="check before automatic"),
            Fact(label="Controller's equation", text=c.equation),
        )
    )
    return Section(key="settings", title="Settings", blocks=(_entry_table(record), facts))


def _entry_table(record: Record) -> Table:
    """Set what to enter beside what was found, and what each means on this model."""
    c, p, found = record.controller, record.prediction, record.as_found
    assert c is not None and p is not None
    rows: list[tuple[str, str, str]] = []
    before = {} if found is None else found.as_entered
    for name in dict.fromkeys([*c.as_entered, *before]):
        new = _entry(c.as_entered[name]) if name in c.as_entered else "none"
        old = _entry(before[name]) if name in before else ("none" if before else numbers.NOT_GIVEN)
        rows.append((_sentence(name), new, old))
    rows.append(("Phase margin on this model", phase_margin(record), _found_margin(found)))
    over = numbers.NOT_GIVEN
    if found is not None:
        over = "none: unstable" if found.overshoot_pct is None else numbers.percent(found.overshoot_pct)
    rows.append(("Predicted overshoot", overshoot(record, p), over))
    return Table(
        title="What to enter, and what was found (the settings to go back to)",
        head=("Setting", "Enter", "As found"),
        rows=tuple(rows),
        numeric=(False, False, False),
    )


def _found_margin(found: AsFound | None) -> str:
    if found is None or found.margins is None:
        return numbers.NOT_GIVEN
    return degrees(found.margins.phase_margin_deg)


def _in_full(record: Record) -> Section | None:
    """Show the settings once more in the standard equation."""
    if record.controller is None:
        return None
    table = Table(
        title="The same settings in the standard equation",
        head=("Setting", "Value"),
        rows=_standard_rows(record),
        numeric=(False, False),
    )
    return Section(key="standard", title="Settings in full", blocks=(table,))


def _standard_rows(record: Record) -> tuple[tuple[str, str], ...]:
    c = record.controller
    assert c is not None
    series = record.series
    rows = [("Gain", numbers.plain(c.gain, digits=4, unit=c.gain_unit))]
    if c.gain_unit == "%/%" and (series.pv_unit, series.co_unit) != ("%", "%"):
        unit = f"{series.co_unit or 'CO unit'} per {series.pv_unit or 'PV unit'}"
        rows.append(("Gain in the log's units", numbers.plain(c.gain_engineering, digits=4, unit=unit)))
    rows.append(("Integral time", numbers.plain(c.integral_s, digits=4, unit="s")))
    rows.append(("Derivative time", numbers.plain(c.derivative_s, digits=4, unit="s")))
    if c.derivative_s > 0:
        rows.append(("Derivative filter", numbers.plain(c.filter_s, digits=4, unit="s")))
    rows.append(("Set-point weight", numbers.plain(c.setpoint_weight)))
    rows.append(("PV filter", numbers.plain(c.pv_filter_s, unit="s")))
    rows.append(("Scan", numbers.plain(c.scan_s, unit="s") if c.scan_s > 0 else "continuous"))
    return tuple(rows)


def _next_steps(record: Record) -> Section | None:
    if not record.next_steps:
        return None
    return Section(key="next", title="What to do next", blocks=(Steps(items=record.next_steps),))


def _not_assessed(record: Record) -> Section:
    rises = {move.to > move.from_ for bump in record.bumps if bump.used for move in bump.moves}
    unknown = _NEVER_ASSESSED if len(rises) > 1 else (*_NEVER_ASSESSED, "moves of the CO the other way")
    said = f"The test cannot tell, and this report does not assess: {'; '.join(unknown)}."
    return Section(key="not-assessed", title="What was not assessed", blocks=(Prose(text=said),))


def _sign_off(record: Record) -> Section:
    papers = tuple(Fact(label=label, text=_sheet(record, "references", key)) for label, key in _REFERENCES)
    rows = tuple(Signature(role=role, name=_sheet(record, "people", key)) for role, key in _ROLES)
    return Section(key="sign-off", title="Sign-off", blocks=(Facts(rows=papers), Signatures(rows=rows)))


#: First what someone needs to decide and to enter, then the evidence, then the signatures.
_WITH_SETTINGS: tuple[Callable[[Record], Section | None], ...] = (
    _cautions,
    _settings,
    asked_and_reached,
    _next_steps,
    prediction,
    loop,
    guide,
    standing,
    test,
    model,
    _in_full,
    _notes,
    _not_assessed,
    provenance,
    _sign_off,
)

_WITHHELD: tuple[Callable[[Record], Section | None], ...] = (
    _cautions,
    _next_steps,
    test,
    model,
    _notes,
    _not_assessed,
    provenance,
    _sign_off,
)
