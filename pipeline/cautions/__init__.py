"""What the reader must be told: facts in, cautions out, one table of rules.

Each rule looks at the facts and says nothing or one caution. The general rules speak in
every report. Levels: "stop" withholds the settings, "care" restricts their use, "note" informs.
"""

from __future__ import annotations

from collections.abc import Callable

from pipeline.cautions import general, guide, process, settings, structure
from pipeline.cautions.facts import Facts
from pipeline.findings import Caution, worst_first

__all__ = ["RULES", "Facts", "cautions"]

#: What the fit itself noticed and that restricts the use of the settings.
_RESTRICTING = frozenset({"gain-differs-between-moves", "dead-time-ambiguous", "load-step"})
#: The order is the order of reading within one level.
RULES: tuple[Callable[[Facts], Caution | None], ...] = (
    process.sign_unknown,
    process.runs_away,
    process.search_failed,
    process.gain_interval,
    settings.action_differs,
    settings.edge_of_uncertainty,
    general.check_action,
    process.wrong_way_first,
    process.rings,
    settings.no_integral_action,
    guide.phase_margin_misleads,
    guide.faster_than_process,
    guide.asked_faster_than_dead_time,
    settings.lower_limit,
    settings.criteria_not_met,
    settings.output_kick,
    settings.noisy_output,
    guide.entry_step_coarse,
    process.dead_time_floored,
    process.coarse_clock,
    structure.not_settled,
    structure.lag_or_integrator,
    structure.rival_changes_gain,
    structure.moves_scatter,
    structure.last_move_missed,
    general.motion,
    general.units_matter,
    general.permit,
    general.safety_outside,
    process.dead_time_rules,
    process.noise_is_slow,
    settings.rolling,
    settings.scan_counted,
    general.clock_is_trusted,
    general.only_a_start,
    general.linear_prediction,
    general.not_assessed,
)


def cautions(facts: Facts) -> tuple[Caution, ...]:
    """Apply every rule, worst first.

    Parameters
    ----------
    facts : Facts

    Returns
    -------
    tuple of Caution
        Findings on the test, what the rules say, and the remarks of tuner and back-off.
    """
    found = [*facts.quality.findings, *facts.log.notes]
    found += [caution for rule in RULES if (caution := rule(facts)) is not None]
    if facts.choice is not None:
        for code, text in facts.choice.best.notes:
            found.append(Caution(code=code, level="care" if code in _RESTRICTING else "note", text=text))
    if facts.tuning is not None:
        found += facts.tuning.remarks
    if facts.backed_off is not None:
        found += facts.backed_off.remarks
    return worst_first(found)
