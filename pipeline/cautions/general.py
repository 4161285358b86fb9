"""What every report says."""

from __future__ import annotations

from typing import TYPE_CHECKING

from pipeline.findings import Caution
from pipeline.loop.forms import action_in_words

if TYPE_CHECKING:
    from pipeline.cautions.facts import Facts


def check_action(facts: Facts) -> Caution | None:
    """Have the action checked."""
    if facts.tuning is None:
        return None
    words = action_in_words(facts.tuning.controller.action)
    return Caution(
        code="check-action",
        level="care",
        text=f"Check the control action before switching to automatic. {words}",
    )


def motion(facts: Facts) -> Caution | None:
    """Keep people clear of moving machines."""
    if facts.sheet.loop.duty not in ("speed", "position"):
        return None
    return Caution(
        code="motion",
        level="care",
        text="Keep people clear. Test with torque, speed and travel limits set, guards closed and the "
        "emergency stop proven. First run at reduced limits. Vertical or stored-energy axes can move when "
        "disabled.",
    )


def clock_is_trusted(facts: Facts) -> Caution | None:
    """Say what the dead time rests on."""
    if facts.choice is None:
        return None
    return Caution(
        code="clock-trusted",
        level="note",
        text="Dead time rests on the clock of the export and on knowing every filter. If output and "
        "measurement were stamped by different clocks, the dead time is wrong by that difference.",
    )


def only_a_start(facts: Facts) -> Caution | None:
    """Say that it is a start and no proof."""
    if facts.tuning is None:
        return None
    return Caution(
        code="starting-setting",
        level="note",
        text="This is a starting setting from small tests around one operating point. It is not proof of "
        "stability at other loads, other products or with worn equipment.",
    )


def linear_prediction(facts: Facts) -> Caution | None:
    """Say what the prediction leaves out."""
    if facts.tuning is None:
        return None
    return Caution(
        code="linear-prediction",
        level="note",
        text="Predictions are for a linear model without limits, sticking or noise. Real overshoot is larger "
        "after saturation, and a sticking final element can cycle for ever.",
    )


def units_matter(facts: Facts) -> Caution | None:
    """Tie the settings to their equation and units."""
    if facts.tuning is None:
        return None
    return Caution(
        code="equation-and-units",
        level="care",
        text="The settings hold for the equation and units printed beside them. Entered in another form or "
        "unit they change the loop by large factors.",
    )


def safety_outside(facts: Facts) -> Caution | None:
    """Leave safety functions out."""
    del facts
    return Caution(
        code="safety-not-assessed",
        level="care",
        text="Safety functions are outside this report: not changed, not bypassed, not credited. Do not use "
        "this loop to protect against a hazard. Local codes and licensed practice go before this report.",
    )


def permit(facts: Facts) -> Caution | None:
    """Point to permit and change rules."""
    del facts
    return Caution(
        code="permit-and-change",
        level="care",
        text="Test and change settings only under the site's permit and change rules, with the area operator "
        "informed and the as-found settings at hand.",
    )


def not_assessed(facts: Facts) -> Caution | None:
    """List what was not assessed."""
    del facts
    return Caution(
        code="not-assessed",
        level="note",
        text="Not assessed: interaction with other loops, wear, control while a limit is active, start-up and "
        "shut-down, and who may change settings over the network.",
    )
