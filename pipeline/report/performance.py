"""Sections on what the settings will do: margins asked and reached, predicted responses."""

from __future__ import annotations

import math

from pipeline.record import LimitedInfo, PredictionInfo, Record
from pipeline.report import numbers
from pipeline.report.content import Block, Fact, Facts, Picture, Prose, Section, Table

#: Criteria as they are said in a sentence.
CRITERIA = {
    "phase_margin": "the phase margin",
    "gain_margin": "the gain margin",
    "max_sensitivity": "the maximum sensitivity",
    "max_complementary": "the peak of the complementary sensitivity",
    "closed_loop_time": "the closed-loop time constant",
    "crossover": "how far up the log knows the process",
    "noise_gain": "the noise on the output",
    "co_peak": "the peak of the output",
    "overshoot": "the overshoot",
    "percentile_phase_margin": "the phase margin at the edge of the plausible processes",
}

#: A margin is the model's own, not a measurement: it is shown at least to this share of
#: itself, so that a criterion just missed never reads as met.
_READING = 0.035

#: Below this nobody sees a peak on a trend [%].
_PEAK_SEEN = 1.5

#: Degrees and percent are shown to no more than a tenth, however sure the log is.
_FINEST = 0.3

#: Digits of a predicted time: models know their lags to a few percent at best.
_TIME_DIGITS = 2

#: An overshoot is shown at least to this [%]: nobody reads less off a trend.
_OVERSHOOT_READING = 0.5


def asked_and_reached(record: Record) -> Section | None:
    """Set the margins asked for beside those reached and held over the plausible processes."""
    if record.margins is None:
        return None
    blocks = (_margin_table(record), Prose(text=_what_bound(record)))
    return Section(key="margins", title="Margins", blocks=blocks)


def loop(record: Record) -> Section | None:
    """Show the loop's frequency response and what else it says."""
    if record.margins is None:
        return None
    alt = (
        f"Frequency response of the loop. Gain crossover at {_per_second(record.margins.gain_crossover)}, "
        f"phase margin {degrees(record.margins.phase_margin_deg)}, gain margin "
        f"{numbers.plain(record.margins.gain_margin)}, maximum sensitivity "
        f"{numbers.plain(record.margins.max_sensitivity)}."
    )
    picture = Picture(name="loop", title="How far the loop stays from instability", alt=alt)
    return Section(key="loop", title="The loop", blocks=(picture, Facts(rows=_further_margins(record))))


def _margin_table(record: Record) -> Table:
    m, p, asked, b = record.margins, record.prediction, record.criteria, record.bands
    assert m is not None
    rows = [
        _row(
            "Phase margin",
            "°",
            f"at least {degrees(asked.phase_margin_deg)}" if asked.phase_margin_deg else None,
            m.phase_margin_deg,
            b.phase_margin_deg if b else None,
        ),
        _row(
            "Gain margin",
            "",
            f"at least {numbers.plain(asked.gain_margin)}" if asked.gain_margin else None,
            m.gain_margin,
            b.gain_margin if b else None,
        ),
        _row(
            "Maximum sensitivity Ms",
            "",
            f"at most {numbers.plain(asked.max_sensitivity)}" if asked.max_sensitivity else None,
            m.max_sensitivity,
            b.max_sensitivity if b else None,
        ),
    ]
    if p is not None:
        limit = asked.overshoot_pct
        rows.append(
            _row(
                "Overshoot",
                " %",
                f"at most {numbers.percent(limit)}" if limit is not None else None,
                p.overshoot_pct,
                b.overshoot_pct if b else None,
            )
        )
    return Table(
        title="Asked and reached",
        head=("Criterion", "Asked", "Reached", "5 to 95 % of plausible processes"),
        rows=tuple(rows),
        numeric=(False, True, True, True),
    )


def _row(
    name: str, unit: str, asked: str | None, reached: float, band: tuple[float, float, float] | None
) -> tuple[str, str, str, str]:
    wanted = asked or "not asked"
    if band is None:
        return name, wanted, _with(numbers.plain(reached), unit), "not computed"
    half = numbers.half_width(band[1], band[0], band[2])
    if unit:
        half = max(half, _FINEST)
    ends = _with(numbers.bounds(band[0], band[2], half), unit)
    finest = _READING * abs(reached)
    shown = numbers.rounded(reached, min(half, max(finest, _OVERSHOOT_READING) if unit == " %" else finest))
    return name, wanted, _with(shown, unit), ends


def _with(text: str, unit: str) -> str:
    return text if text.endswith(numbers.NO_LIMIT) else text + unit


def _what_bound(record: Record) -> str:
    name = record.binding or ""
    criterion = CRITERIA.get(name, name.replace("_", " "))
    said = f"The gain was set by {criterion}." if criterion else "No single criterion set the gain."
    if record.backoff is None or record.backoff.factor >= 1.0:
        return f"{said} It was not reduced for uncertainty."
    factor = numbers.plain(record.backoff.factor)
    return (
        f"{said} It was then multiplied by {factor} for uncertainty; what ruled was: {record.backoff.source}."
    )


def _further_margins(record: Record) -> tuple[Fact, ...]:
    m = record.margins
    assert m is not None
    rows = [
        Fact(label="Gain margin in decibels", text=_decibels(m.gain_margin)),
        Fact(label="Lower limit of the gain", text=_lower_limit(m.gain_reduction_margin)),
        Fact(
            label="Delay margin",
            text=numbers.duration(m.delay_margin_s, digits=_TIME_DIGITS),
            note="extra dead time it can bear",
        ),
        Fact(label="Gain crossover", text=_per_second(m.gain_crossover)),
        Fact(label="Phase crossover", text=_per_second(m.phase_crossover)),
        Fact(label="Peak of the complementary sensitivity Mt", text=f"{m.max_complementary:.2f}"),
    ]
    if record.bands is not None:
        lost = record.bands.unstable_share
        rows.append(Fact(label="Plausible processes that would be unstable", text=numbers.share(lost)))
    return tuple(rows)


def _decibels(ratio: float) -> str:
    return numbers.NO_LIMIT if math.isinf(ratio) else numbers.plain(20.0 * math.log10(ratio), unit="dB")


def _lower_limit(factor: float) -> str:
    if factor <= 0.0:
        return "none: the gain may fall to nothing"
    return f"the loop is lost at {numbers.plain(factor)} times the gain"


def _per_second(omega: float) -> str:
    return "none" if math.isinf(omega) else numbers.plain(omega, digits=2, unit="rad/s")


def phase_margin(record: Record) -> str:
    """Write the phase margin reached with its 5 to 95 % band.

    Parameters
    ----------
    record : Record
        With margins.
    """
    assert record.margins is not None
    reached = record.margins.phase_margin_deg
    if record.bands is None or math.isinf(record.bands.phase_margin_deg[2]):
        return degrees(reached)
    low, _, high = record.bands.phase_margin_deg
    half = max(min(numbers.half_width(reached, low, high), _READING * reached), _FINEST)
    return f"{numbers.rounded(reached, half)}° ({numbers.bounds(low, high, half)}°)"


def degrees(angle: float) -> str:
    """Write an angle, infinity in words."""
    return _with(numbers.plain(angle), "°")


def prediction(record: Record) -> Section | None:
    """What a set-point step and a load step will do."""
    p = record.prediction
    if p is None:
        return None
    pv, co = record.series.pv_unit or "PV unit", record.series.co_unit or "CO unit"
    rows = [
        Fact(label="Overshoot", text=overshoot(record, p), note="of the set-point change"),
        *_first_peak(p),
        Fact(
            label="Rise time, 10 to 90 %", text=numbers.duration(p.rise_s, never="never", digits=_TIME_DIGITS)
        ),
        Fact(label="Settled within 5 %", text=settled(p)),
        Fact(
            label="Largest CO move",
            text=numbers.plain(p.co_peak, unit=co),
            note=f"for a set-point step of 1 {pv}",
        ),
        Fact(
            label="Largest PV deviation",
            text=numbers.plain(p.load_peak, unit=pv),
            note=f"for a load step worth 1 {co}",
        ),
        Fact(label="Noise on the CO", text=f"{numbers.plain(p.noise_gain)} {co} per {pv} of PV noise"),
    ]
    blocks: list[Block] = [
        Facts(rows=tuple(rows)),
        Picture(
            name="step",
            title="Predicted set-point step",
            alt="Predicted response of PV and CO to a unit set-point step. "
            f"Overshoot {overshoot(record, p)}; rise time {numbers.duration(p.rise_s, never='endless')}.",
        ),
        Prose(text="The prediction is of a linear model without limits, sticking or noise."),
    ]
    if record.standing is not None and record.standing.limited is not None:
        blocks.insert(1, Prose(text=_through_limits(record.standing.limited, pv, co)))
    return Section(key="prediction", title="Predicted response", blocks=tuple(blocks))


def _through_limits(step: LimitedInfo, pv: str, co: str) -> str:
    """Say what the output's limits make of a step as large as the test's."""
    return (
        f"A set-point step of {numbers.plain(step.step, unit=pv)}, as far as the PV moved in the test, meets the "
        f"limits of the output (room from {numbers.plain(step.co_room_low)} to "
        f"{numbers.plain(step.co_room_high, unit=co)}) "
        f"for {numbers.duration(step.limited_s, digits=_TIME_DIGITS)}; with an integral term that stops there the "
        f"overshoot is {numbers.percent(step.overshoot_pct)}."
    )


def settled(p: PredictionInfo) -> str:
    """Write when the PV is within 5 % for good.

    Parameters
    ----------
    p : PredictionInfo
    """
    return numbers.duration(p.settling_s, never="never", digits=_TIME_DIGITS)


def overshoot(record: Record, p: PredictionInfo) -> str:
    """Write the predicted overshoot with its 5 to 95 % band.

    Parameters
    ----------
    record : Record
    p : PredictionInfo
        Its prediction.
    """
    if record.bands is None:
        return numbers.percent(p.overshoot_pct)
    low, _, high = record.bands.overshoot_pct
    half = max(numbers.half_width(p.overshoot_pct, low, high), _FINEST)
    if not math.isfinite(half):
        return numbers.interval(p.overshoot_pct, low, high, "%")
    return f"{numbers.rounded(p.overshoot_pct, half)} ({numbers.bounds(low, high, half)}) %"


def _first_peak(p: PredictionInfo) -> tuple[Fact, ...]:
    if p.overshoot_pct <= _PEAK_SEEN:
        return ()
    at = p.setpoint.t_s[max(range(len(p.setpoint.pv)), key=p.setpoint.pv.__getitem__)]
    return (Fact(label="Peak after", text=numbers.duration(at, digits=_TIME_DIGITS)),)
