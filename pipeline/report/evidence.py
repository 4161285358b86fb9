"""Sections on what the settings rest on: the test, the model, the files."""

from __future__ import annotations

from pipeline.findings import SEVERITY
from pipeline.record import BumpInfo, ParameterInfo, Record
from pipeline.report import numbers
from pipeline.report.content import Block, Fact, Facts, Picture, Prose, Section, Table

#: A structure with less weight than this is named but not tabled [1].
_BELIEVABLE = 0.001


def test(record: Record) -> Section:
    """The bumps, the verdict on them, and the log with what was fitted to it."""
    rows = [Fact(label="Verdict on the test", text=record.quality.verdict)]
    if record.fit is not None:
        rows += _fit_facts(record)
    blocks: list[Block] = [Facts(rows=tuple(rows))]
    fitted = record.series.fitted is not None
    used = sum(b.used for b in record.bumps)
    said = f"{len(record.bumps)} bumps, {used} used"
    blocks.append(
        Picture(
            name="log",
            title="The log and the fit" if fitted else "The log",
            alt=f"Measured PV{', fitted PV, residual' if fitted else ''} and CO over the log: {said}.",
        )
    )
    if record.bumps:
        blocks.append(_bump_table(record))
    ordered = sorted(record.quality.findings, key=lambda f: SEVERITY[f.level])
    if ordered:
        blocks.append(
            Table(
                title="Findings on the test",
                head=("Level", "Finding", "Observed", "Limit"),
                rows=tuple((f.level, f.text, _or_blank(f.value), _or_blank(f.limit)) for f in ordered),
                numeric=(False, False, True, True),
            )
        )
    return Section(key="test", title="The test", blocks=tuple(blocks))


def _or_blank(value: float | None) -> str:
    return "" if value is None else numbers.plain(value)


def _fit_facts(record: Record) -> list[Fact]:
    f = record.fit
    assert f is not None
    unit = record.series.pv_unit or ""
    rows = [
        Fact(label="Fit", text=numbers.percent(f.fit_pct, digits=3), note="100 % would meet every row"),
        Fact(label="Noise, standard deviation", text=numbers.plain(f.noise_sd, digits=2, unit=unit)),
        Fact(
            label="Noise, correlation time",
            text=numbers.duration(f.noise_correlation_s) if f.noise_correlation_s > 0 else "none seen",
        ),
        Fact(
            label="Rows that count as independent",
            text=f"{numbers.plain(f.effective_samples, digits=2)} of {record.log.rows}",
        ),
        Fact(
            label="Drift taken out",
            text=numbers.plain(3600.0 * f.drift_per_s, digits=2, unit=f"{unit or 'PV unit'} per hour"),
        ),
        Fact(label="Starting points that agree", text=str(f.starts_agreeing)),
    ]
    if not f.converged:
        rows.append(Fact(label="Search", text="ended before it had settled"))
    return rows


def _bump_table(record: Record) -> Table:
    scale, unit = numbers.time_unit(record.log.span_s)
    co = record.series.co_unit or "CO unit"
    return Table(
        title="Bumps",
        head=("Bump", f"From [{unit}]", f"To [{unit}]", f"CO moves [{co}]", "Used"),
        rows=tuple(_bump_row(i, b, scale) for i, b in enumerate(record.bumps, start=1)),
        numeric=(False, True, True, False, False),
    )


def _bump_row(number: int, bump: BumpInfo, scale: float) -> tuple[str, ...]:
    told = [f"{numbers.plain(m.from_)} to {numbers.plain(m.to)}" for m in bump.moves]
    if len(told) > 3:
        told = [*told[:3], f"and {len(told) - 3} more"]
    return (
        str(number),
        numbers.plain(bump.start_s / scale),
        numbers.plain(bump.end_s / scale),
        ", ".join(told),
        "yes" if bump.used else "no",
    )


def model(record: Record) -> Section | None:
    """The process model, its intervals, and the structures that stood beside it."""
    m = record.model
    if m is None:
        return None
    blocks: list[Block] = [
        Table(
            title=f"Structure: {_words(m.structure)}",
            head=("Parameter", "Value", "95 % interval", "Unit"),
            rows=tuple(_parameter_row(name, p) for name, p in m.parameters.items()),
            numeric=(False, True, True, False),
        )
    ]
    if record.candidates:
        believable = [c for i, c in enumerate(record.candidates) if i == 0 or c.weight >= _BELIEVABLE]
        unit = record.controller.gain_unit if record.controller else ""
        blocks.append(
            Table(
                title="Structures compared",
                head=(
                    "Structure",
                    "Behind the best by",
                    "Weight",
                    f"Gain it would give [{unit}]" if unit else "Gain it would give",
                ),
                rows=tuple(
                    (
                        _words(c.structure),
                        numbers.plain(c.score, digits=2),
                        numbers.share(c.weight),
                        "none" if c.gain_recommended is None else numbers.plain(c.gain_recommended),
                    )
                    for c in believable
                ),
                numeric=(False, True, True, True),
            )
        )
        others = [_words(c.structure) for c in record.candidates if c not in believable]
        if others:
            blocks.append(Prose(text=f"Tried too, and far behind: {', '.join(others)}."))
    if record.choice_reason:
        blocks.append(Prose(text=record.choice_reason))
    return Section(key="model", title="The process model", blocks=tuple(blocks))


def _words(name: str) -> str:
    return name.replace("_", " ")


def _parameter_row(name: str, p: ParameterInfo) -> tuple[str, str, str, str]:
    label = _words(name)
    half = numbers.half_width(p.value, p.low, p.high)
    value = numbers.rounded(p.value, half)
    ends = numbers.bounds(p.low, p.high, half)
    return label[:1].upper() + label[1:], value, ends, p.unit


def provenance(record: Record) -> Section:
    """Which file, which program, when."""
    log = record.log
    columns = log.columns
    named = [f"time {columns.time}", f"PV {columns.pv}", f"CO {columns.co}"]
    named += [f"SP {columns.sp}"] if columns.sp else []
    named += [f"mode {columns.mode}"] if columns.mode else []
    rows = (
        Fact(label="Log", text=log.file),
        Fact(label="SHA-256 of the log", text=log.sha256),
        Fact(
            label="Rows",
            text=f"{log.rows} over {numbers.duration(log.span_s)}",
            note=f"one every {numbers.duration(log.sample_s)}",
        ),
        Fact(label="Columns", text="; ".join(named)),
        Fact(label="Logged in", text="automatic" if log.mode == "closed-loop" else "manual"),
        Fact(label="Program", text=f"{record.made.program} {record.made.version}"),
        Fact(label="Record made", text=record.made.created, note=f"version {record.record_version}"),
    )
    return Section(key="provenance", title="Where this comes from", blocks=(Facts(rows=rows),))
