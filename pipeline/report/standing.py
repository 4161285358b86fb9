"""Sections on where the settings stand: what a phase margin tells here, what limits the gain, what others give."""

from __future__ import annotations

from pipeline.record import GuidePoint, LimitsInfo, Record, Standing
from pipeline.report import numbers
from pipeline.report.content import Block, Fact, Facts, Prose, Section, Table
from pipeline.report.performance import CRITERIA, degrees

#: Margins of the curve that the table shows [degrees]: every second one.
_SHOWN = (30.0, 40.0, 45.0, 50.0, 60.0, 70.0, 80.0)
_LOST = "lost"


def guide(record: Record) -> Section | None:
    """Say what the phase margin is worth on this loop, with the curve that shows it.

    Parameters
    ----------
    record : Record
    """
    found, c = record.margin_guide, record.controller
    if found is None or c is None:
        return None
    said = "holds here" if found.holds else "does not hold here"
    blocks: list[Block] = [
        Prose(text=f"A phase margin of 60 degrees means about 10 % of overshoot: this {said}. {found.why}")
    ]
    if found.steer_by:
        blocks.append(Prose(text=found.steer_by))
    wanted = record.criteria.overshoot_pct
    if wanted is not None:
        at = found.phase_margin_for_overshoot_deg
        text = "no gain at these times gives it" if at is None else degrees(at)
        blocks.append(
            Facts(
                rows=(Fact(label=f"Phase margin for an overshoot of {numbers.percent(wanted)}", text=text),)
            )
        )
    if found.curve:
        blocks.append(_curve(found.curve, c.gain_unit))
    return Section(key="guide", title="What the phase margin tells", blocks=tuple(blocks))


def _curve(curve: tuple[GuidePoint, ...], unit: str) -> Table:
    rows = [
        (
            degrees(p.phase_margin_deg),
            numbers.plain(p.gain),
            numbers.percent(p.overshoot_pct),
            numbers.plain(p.gain_margin),
            numbers.plain(p.max_sensitivity),
            numbers.duration(p.settling_s, never="never", digits=2),
        )
        for p in curve
        if p.phase_margin_deg in _SHOWN
    ]
    return Table(
        title="The gain varied, the times as recommended",
        head=("Phase margin", f"Gain, {unit}", "Overshoot", "Gain margin", "Ms", "Settled within 5 %"),
        rows=tuple(rows),
        numeric=(False, True, True, True, True, True),
    )


def standing(record: Record) -> Section | None:
    """Set the gain beside what each criterion, a changed process and published rules would make of it.

    Parameters
    ----------
    record : Record
    """
    s, c = record.standing, record.controller
    if s is None or c is None:
        return None
    blocks: list[Block] = [_allowed(s, c.gain_unit), _what_if(s), Facts(rows=_limits(s.process_limits, s))]
    if s.published_rules:
        blocks += [
            _rules(s, c.gain_unit),
            Prose(text="The rules are shown for comparison only; none of them set this gain."),
        ]
    return Section(key="standing", title="Where this gain stands", blocks=tuple(blocks))


def _allowed(s: Standing, unit: str) -> Table:
    def said(gain: float | None) -> str:
        return "no gain keeps it" if gain is None else numbers.plain(gain)

    return Table(
        title="The gain that each criterion by itself would allow, before any back-off",
        head=("Criterion", f"Gain, {unit}"),
        rows=tuple((_sentence(CRITERIA.get(a.criterion, a.criterion)), said(a.gain)) for a in s.allowed),
        numeric=(False, True),
    )


def _sentence(words: str) -> str:
    plain = words.removeprefix("the ").replace("_", " ")
    return plain[:1].upper() + plain[1:]


def _what_if(s: Standing) -> Table:
    return Table(
        title="What if the process changes and these settings stay",
        head=("Change of the process", "Phase margin", "Gain margin", "Ms", "Overshoot"),
        rows=tuple(
            (
                w.change[:1].upper() + w.change[1:],
                degrees(w.phase_margin_deg) if w.stable else _LOST,
                numbers.plain(w.gain_margin) if w.stable else _LOST,
                numbers.plain(w.max_sensitivity) if w.stable else _LOST,
                _LOST if w.overshoot_pct is None else numbers.percent(w.overshoot_pct),
            )
            for w in s.what_if
        ),
        numeric=(False, True, True, True, True),
    )


def _limits(limits: LimitsInfo, s: Standing) -> tuple[Fact, ...]:
    rows = [
        Fact(
            label="Gain and dead time may grow together by",
            text=numbers.plain(s.growth_borne),
            note="until the loop is lost",
        )
    ]
    if limits.crossover_most_by:
        rows.append(
            Fact(
                label="The process keeps any crossover below about",
                text=numbers.plain(limits.crossover_most, digits=2, unit="rad/s"),
                note=f"by its {limits.crossover_most_by}",
            )
        )
    if limits.crossover_least > 0.0:
        rows.append(
            Fact(
                label="The crossover must lie above about",
                text=numbers.plain(limits.crossover_least, digits=2, unit="rad/s"),
                note="the process runs away by itself",
            )
        )
    if limits.sensitivity_least > 1.0 or limits.complementary_least > 1.0:
        least = f"Ms {limits.sensitivity_least:.2f}, Mt {limits.complementary_least:.2f}"
        rows.append(Fact(label="No controller reaches less than", text=least))
    return tuple(rows)


def _rules(s: Standing, unit: str) -> Table:
    return Table(
        title="Published rules on the fitted process",
        head=("Rule", f"Gain, {unit}", "Integral time", "Phase margin", "Gain margin", "Ms", "Overshoot"),
        rows=tuple(
            (
                f"{r.name} ({r.source})",
                numbers.plain(r.gain),
                numbers.duration(r.integral_s, never="none"),
                degrees(r.phase_margin_deg) if r.stable else _LOST,
                numbers.plain(r.gain_margin) if r.stable else _LOST,
                numbers.plain(r.max_sensitivity) if r.stable else _LOST,
                _LOST if r.overshoot_pct is None else numbers.percent(r.overshoot_pct),
            )
            for r in s.published_rules
        ),
        numeric=(False, True, True, True, True, True, True),
    )
