"""The main job, as it is done on site: a bump-test log in, settings and their evidence out."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime
from typing import TYPE_CHECKING

import numpy as np

from fitters.choose import choose
from pipeline import __version__, advice
from pipeline.bumps import Bump, bump_data, find_bumps
from pipeline.cautions import Facts, cautions
from pipeline.intake import read_log
from pipeline.loop.limited import LimitedStep, limited_step
from pipeline.record import Made, Record, build, curves, parts
from pipeline.settings import LoopSheet
from pipeline.testquality import Quality, judge
from pipeline.tuning.recommend import Recommended, Wanted, as_found, recommend, tune_model, wanted
from pipeline.tuning.standing import Standing, stand

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from fitters.fit import Choice
    from pipeline.findings import Caution
    from pipeline.intake.log import Log
    from pipeline.loop.types import Kind

#: A rival structure with at least this weight is tuned too, to see what it would change [1].
_RIVAL_WEIGHT = 0.05


@dataclass(frozen=True, slots=True, kw_only=True)
class Request:
    """What the user asks besides the log; None is "not given".

    Attributes
    ----------
    sheet : LoopSheet or None
    controller : {"P", "I", "PI", "PD", "PID"} or None
    phase_margin : float or None
        [degrees].
    gain_margin, max_sensitivity : float or None
        [1].
    overshoot : float or None
        [%].
    """

    sheet: LoopSheet | None = None
    controller: Kind | None = None
    phase_margin: float | None = None
    gain_margin: float | None = None
    max_sensitivity: float | None = None
    overshoot: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Inspection:
    """What was understood of a log.

    Attributes
    ----------
    log : Log
    bumps : tuple of Bump
    quality : Quality
    """

    log: Log
    bumps: tuple[Bump, ...]
    quality: Quality


def inspect(path: Path, *, request: Request) -> Inspection:
    """Read a log and judge the test in it.

    Parameters
    ----------
    path : Path
    request : Request

    Raises
    ------
    LogUnreadable
        If the file cannot be turned into times and values, or in two ways.
    """
    sheet = request.sheet or LoopSheet()
    log = read_log(path, sheet=sheet)
    bumps = find_bumps(log)
    return Inspection(log=log, bumps=bumps, quality=judge(log, bumps, sheet=sheet))


def commission(path: Path, *, request: Request) -> Record:
    """Turn a bump-test log into settings, or say why not.

    Parameters
    ----------
    path : Path
    request : Request

    Returns
    -------
    Record
        With the verdict "withheld" and no settings where the test does not support a gain.

    Raises
    ------
    LogUnreadable
        If the log cannot be read.
    UsageError
        If the loop sheet asks for what cannot be.
    ChecksDisagree
        If two computations of one answer differ.
    """
    sheet = request.sheet or LoopSheet()
    asked = wanted(
        sheet,
        kind=request.controller,
        phase_margin=request.phase_margin,
        gain_margin=request.gain_margin,
        max_sensitivity=request.max_sensitivity,
        overshoot_pct=request.overshoot,
    )
    seen = inspect(path, request=request)
    choice: Choice | None = None
    recommended: Recommended | None = None
    stands: Standing | None = None
    if seen.quality.verdict != "do not use":
        low, high = sheet.co_limits()
        choice = choose(bump_data(seen.log, seen.bumps, co_low=low, co_high=high))
        if not _stopped(cautions(_facts(seen, sheet, asked, choice))):
            recommended = recommend(choice, asked, log_interval=seen.log.interval)
            stands = stand(recommended, asked)
    return _record(seen, sheet, asked, choice, recommended, stands)


def _facts(
    seen: Inspection,
    sheet: LoopSheet,
    asked: Wanted,
    choice: Choice | None,
    made: Recommended | None = None,
    stands: Standing | None = None,
    gains: dict[str, float] | None = None,
) -> Facts:
    return Facts(
        log=seen.log,
        sheet=sheet,
        quality=seen.quality,
        choice=choice,
        criteria=asked.criteria,
        tuning=None if made is None else made.tuning,
        backed_off=None if made is None else made.backed_off,
        dead_time_floor=0.0 if made is None else made.dead_time_floor,
        structure_gains=gains or {},
        standing=stands,
    )


def _stopped(told: Sequence[Caution]) -> bool:
    return any(caution.level == "stop" for caution in told)


def _record(
    seen: Inspection,
    sheet: LoopSheet,
    asked: Wanted,
    choice: Choice | None,
    made: Recommended | None,
    stands: Standing | None,
) -> Record:
    """Write down what was found; settings only where nothing stops them."""
    gains = {} if choice is None else _structure_gains(choice, asked, made)
    told = cautions(_facts(seen, sheet, asked, choice, made, stands, gains))
    pv_unit = sheet.pv.unit or seen.log.pv_column.unit
    co_unit = sheet.co.unit or seen.log.co_column.unit
    settings = None
    if choice is not None and made is not None and stands is not None and not _stopped(told):
        found = as_found(choice.best, sheet, asked, made.dead_time_floor)
        settings = build.settings(
            made.tuning,
            made.backed_off,
            made.source,
            asked.entry,
            found,
            stands,
            _limited(seen, sheet, choice, made),
            pv_unit,
            co_unit,
        )
        steps = advice.after_settings(made.backed_off, seen.bumps, sheet, pv_unit or "PV units", choice.best)
    else:
        fit = None if choice is None else choice.best
        steps = advice.after_withholding(seen.log, seen.bumps, fit, co_unit or "CO units")
    identified = None
    if choice is not None:
        identified = build.identified(choice, gains, pv_unit or "PV", co_unit or "CO")
    return build.assemble(
        made=Made(
            program="firstgain", version=__version__, created=datetime.now(UTC).isoformat(timespec="seconds")
        ),
        sheet=sheet,
        log=parts.log_info(seen.log, "open-loop"),
        bumps=parts.bump_infos(seen.bumps),
        quality=parts.quality_info(seen.quality),
        criteria=asked.criteria,
        cautions=told,
        next_steps=steps,
        shown=curves.series(seen.log, choice, pv_unit, co_unit),
        identified=identified,
        settings=settings,
    )


def _limited(seen: Inspection, sheet: LoopSheet, choice: Choice, made: Recommended) -> LimitedStep | None:
    """Step the set point as far as the PV moved in the test, where that would meet the output's limits."""
    low, high = sheet.co_limits()
    stands_at, step = float(seen.log.co[-1]), float(np.ptp(choice.best.fitted))
    room_low, room_high = min(low - stands_at, 0.0), max(high - stands_at, 0.0)
    prediction = made.backed_off.prediction
    moves = step * prediction.setpoint.co
    if step == 0.0 or (float(np.min(moves)) >= room_low and float(np.max(moves)) <= room_high):
        return None
    return limited_step(
        made.tuning.model, made.backed_off.controller, size=step, low=room_low, high=room_high
    )


def _structure_gains(choice: Choice, asked: Wanted, made: Recommended | None) -> dict[str, float]:
    """Give the controller gain that each believable structure would lead to, before any back-off."""
    if made is None:
        return {}
    gains = {choice.best.structure: parts.shown_gain(made.tuning.controller.gain, asked.entry)}
    for rival in choice.candidates[1:]:
        if rival.weight >= _RIVAL_WEIGHT:
            tuning = tune_model(rival.fit.model, asked, dead_time_floor=made.dead_time_floor)
            gains[rival.fit.structure] = parts.shown_gain(tuning.controller.gain, asked.entry)
    return gains
