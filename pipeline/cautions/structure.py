"""What the choice between structures obliges us to say: ties, and what the runner-up would change."""

from __future__ import annotations

from typing import TYPE_CHECKING

from pipeline.findings import Caution

if TYPE_CHECKING:
    from fitters.fit import Candidate, Choice
    from pipeline.cautions.facts import Facts

#: Candidates this close by the criterion explain the log alike [1]: a difference above 6 is strong
#: evidence (Kass and Raftery 1995, table 2).
_ALIKE = 6.0
#: A rival that would change the controller gain by more than this restricts [1].
_GAIN_CHANGE = 0.10
#: Relative standard uncertainty of the gain from how the moves disagree, above which it restricts [1].
_SCATTER = 0.08
#: A last move missed by more than this share of its answer does not bear the model out (common practice) [1].
_MISSED = 0.15


def not_settled(facts: Facts) -> Caution | None:
    """Say that the PV had not levelled out."""
    if facts.choice is None:
        return None
    fit = facts.choice.best
    lags = [p for p in fit.parameters if p.name in ("lag", "longer_lag")]
    if fit.model.integrators or not lags or lags[0].high < facts.log.span:
        return None
    return Caution(
        code="not-settled",
        level="care",
        text="The PV had not levelled out: its first slope is known, its final gain is not. "
        "Tight control can rest on this test; slow control cannot.",
        value=lags[0].high,
        limit=facts.log.span,
    )


def lag_or_integrator(facts: Facts) -> Caution | None:
    """Say that a lag and an integrator explain the log alike, and what each would give."""
    if facts.choice is None:
        return None
    best = facts.choice.best
    rival = _first_alike(facts.choice, integrating=best.model.integrators == 0)
    if rival is None:
        return None
    return Caution(
        code="lag-or-integrator",
        level="care",
        text=f"Cannot tell lag from integrator: {best.structure} and {rival.fit.structure} explain the log alike. "
        "The first slope is known, the final gain is not. " + _in_words(facts, rival.fit.structure),
        value=rival.score,
        limit=_ALIKE,
    )


def rival_changes_gain(facts: Facts) -> Caution | None:
    """Say that a structure that explains the log alike would lead to another gain."""
    if facts.choice is None:
        return None
    name = facts.choice.best.structure
    own = facts.structure_gains.get(name)
    if not own:
        return None
    changes = {n: gain / own - 1.0 for n, gain in facts.structure_gains.items() if n != name}
    if not changes:
        return None
    rival = max(changes, key=lambda n: abs(changes[n]))
    if abs(changes[rival]) <= _GAIN_CHANGE:
        return None
    lower = changes[rival] < 0.0
    return Caution(
        code="structure-matters",
        level="care" if lower else "note",
        text=f"{rival.capitalize()} explains the log nearly as well as {name} and would lead to a controller gain "
        f"of {facts.structure_gains[rival]:.3g} instead of {own:.3g} ({100.0 * changes[rival]:+.0f} %). "
        + ("The lower one is the safer start." if lower else "The one given is the safer start."),
        value=abs(changes[rival]),
        limit=_GAIN_CHANGE,
    )


def moves_scatter(facts: Facts) -> Caution | None:
    """Say that the moves disagree on the gain, though no more than the noise may explain."""
    if facts.choice is None or facts.choice.gain_scatter is None or facts.choice.gain_scatter <= _SCATTER:
        return None
    scatter = facts.choice.gain_scatter
    return Caution(
        code="gain-scatters-between-moves",
        level="care",
        text=f"Taken one by one the moves show gains that scatter by about {100.0 * scatter:.0f} %. The gain may "
        "change with the level or the direction; more moves would tell.",
        value=scatter,
        limit=_SCATTER,
    )


def last_move_missed(facts: Facts) -> Caution | None:
    """Say that the model, fitted without the last move, does not foretell it."""
    if facts.choice is None or facts.choice.missed_share is None or facts.choice.missed_share <= _MISSED:
        return None
    return Caution(
        code="last-move-missed",
        level="care",
        text=f"Fitted without the last move, the model misses that move's answer by "
        f"{100.0 * facts.choice.missed_share:.0f} % of it: the moves do not tell the same story. "
        "Look for a change of load, level or direction, and repeat the test.",
        value=facts.choice.missed_share,
        limit=_MISSED,
    )


def _first_alike(choice: Choice, *, integrating: bool) -> Candidate | None:
    for candidate in choice.candidates[1:]:
        if candidate.score < _ALIKE and (candidate.fit.model.integrators > 0) is integrating:
            return candidate
    return None


def _in_words(facts: Facts, rival: str) -> str:
    """Give the controller gain each of two structures leads to."""
    if facts.choice is None:
        return ""
    name = facts.choice.best.structure
    gains = facts.structure_gains
    if name not in gains or rival not in gains:
        return ""
    apart = 100.0 * abs(gains[rival] / gains[name] - 1.0)
    return f"They lead to controller gains of {gains[name]:.3g} and {gains[rival]:.3g}, {apart:.0f} % apart."
