"""Which column is the PV and which the CO: evidence from names, units and behaviour, added up.

`evidence` gives points to one column in one role; two columns together earn more where one follows
the other or both carry one number. The best pair wins, and a tie is a question to the user, not a guess.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from pipeline.errors import LogUnreadable, QuestionForUser
from pipeline.findings import Caution
from pipeline.intake.evidence import Signal, followed, observe, points, reason
from pipeline.intake.names import Named, read_name, words_of
from pipeline.intake.table import Field

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: Points by which the best reading must lead the next one [1]: less is a question.
_LEAD = 0.25
#: Points by which one loop of a log may trail another and still count as one of its loops [1].
_LOOP_LEAD = 1.0
#: Points a pair must reach to be believed without a word from the user [1].
_ENOUGH = 2.0
#: Columns that come into question for one role [1]: the best by name and behaviour, where a log has hundreds.
_CANDIDATES = 60
#: Points for a PV that a lagged CO explains wholly [1].
_FOLLOWS = 2.5


@dataclass(frozen=True, slots=True, kw_only=True)
class Roles:
    """The columns chosen and why.

    Attributes
    ----------
    pv, co : Field
    sp, mode : Field or None
    pv_reason, co_reason : str
    notes : tuple of Caution
    """

    pv: Field
    co: Field
    sp: Field | None
    mode: Field | None
    pv_reason: str
    co_reason: str
    notes: tuple[Caution, ...]


def assign_roles(
    fields: Sequence[Field],
    rows: NDArray[np.intp],
    *,
    pv: Field | None,
    co: Field | None,
    sp: Field | None,
    mode: Field | None,
    file: str,
) -> Roles:
    """Decide which columns are PV, CO, SP and mode.

    Parameters
    ----------
    fields : sequence of Field
        All columns but those of the time.
    rows : (m,) int ndarray
        Rows in time order.
    pv, co, sp, mode : Field or None
        Columns the loop sheet names.
    file : str
        Name for messages.

    Returns
    -------
    Roles

    Raises
    ------
    LogUnreadable
        If there are fewer than two columns of numbers, or PV and CO are the same signal.
    QuestionForUser
        If two readings are equally good.
    """
    gas = _speaks_of_a_gas(fields)
    names = {f.index: read_name(f.name, f.unit, gas=gas) for f in fields}
    mode = mode or next((f for f in fields if names[f.index].role == "mode" and not f.empty), None)
    spoken_for = {f.index for f in (sp, mode) if f is not None}
    usable = [
        f for f in fields if f.index not in spoken_for and not f.empty and _may_be_signal(f, names[f.index])
    ]
    signals = {f.index: observe(f, rows, names[f.index]) for f in (*usable, *(g for g in (pv, co) if g))}
    for_pv = [signals[pv.index]] if pv else [s for s in signals.values() if s.field is not co]
    for_co = [signals[co.index]] if co else [s for s in signals.values() if s.field is not pv]
    if len(signals) < 2:
        raise LogUnreadable(
            f"Beside the time the log holds {len(signals)} usable "
            f"{'column' if len(signals) == 1 else 'columns'} of "
            "numbers.",
            file=file,
            remedy="A log needs a PV and a CO column: export both on one clock.",
        )
    best, notes = _choose(for_pv, for_co, asked_pv=pv is None, asked_co=co is None, file=file)
    y, u = best.pv, best.co
    if y.field.values is not None and u.field.values is not None:
        _refuse_same(y.field, u.field, rows, file)
    return Roles(
        pv=y.field,
        co=u.field,
        sp=sp or _set_point(fields, names, y),
        mode=mode,
        pv_reason="named in the loop sheet" if pv else reason("pv", y, best.follows),
        co_reason="named in the loop sheet" if co else reason("co", u, 0.0),
        notes=tuple(notes),
    )


def _speaks_of_a_gas(fields: Sequence[Field]) -> bool:
    """Take "CO2" for a gas unless the log also speaks of PV2, SP2 or CO1."""
    pairs = {tuple(words_of(f.name)[k : k + 2]) for f in fields for k in range(2)}
    return pairs.isdisjoint({("pv", "2"), ("sp", "2"), ("co", "1")})


def _may_be_signal(field: Field, named: Named) -> bool:
    if named.role in ("sp", "mode", "index") or (named.role == "time" and named.kind in (None, "time")):
        return False
    # a column of text is kept only where its name claims a role: then it is reported, not passed over
    return field.values is not None or (named.role in ("pv", "co") and named.weight >= 3.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Pair:
    pv: Signal
    co: Signal
    score: float
    follows: float


def _choose(
    for_pv: Sequence[Signal], for_co: Sequence[Signal], *, asked_pv: bool, asked_co: bool, file: str
) -> tuple[_Pair, list[Caution]]:
    for_pv, for_co = _likely("pv", for_pv), _likely("co", for_co)
    follows, same = followed(for_pv, for_co)
    pv_points = [points("pv", s) for s in for_pv]
    co_points = [points("co", s) for s in for_co]
    numbers = {s.named.number for s in (*for_pv, *for_co)}
    pairs = []
    for i, y in enumerate(for_pv):
        for j, u in enumerate(for_co):
            if y.field is u.field:
                continue
            score = pv_points[i] + co_points[j] + _FOLLOWS * follows[i, j]
            if y.named.number is not None and y.named.number == u.named.number and len(numbers) > 1:
                score += 1.0
            if same[i, j]:
                score -= 2.0 * _FOLLOWS
            pairs.append(_Pair(pv=y, co=u, score=score, follows=float(follows[i, j])))
    pairs.sort(key=lambda p: -p.score)
    notes: list[Caution] = []
    pairs, second_loop = _first_loop(pairs)
    best = pairs[0]
    if second_loop is not None:
        notes.append(second_loop)
    for asked, key in ((asked_pv, "pv"), (asked_co, "co")):
        if not asked:
            continue
        rival = next((p for p in pairs[1:] if getattr(p, key).field is not getattr(best, key).field), None)
        chosen: Field = getattr(best, key).field
        if len(for_pv if key == "pv" else for_co) > 1 and (
            best.score < _ENOUGH or (rival is not None and best.score - rival.score < _LEAD)
        ):
            other: Field = getattr(rival or pairs[-1], key).field
            raise QuestionForUser(
                f'The {key.upper()} may be "{chosen.name}" (column {chosen.index}) or "{other.name}" (column '
                f"{other.index}): names and behaviour do not decide.",
                file=file,
                remedy=f"Say which in the loop sheet: [columns] {key} = {_quoted(chosen, other)} or {key} = "
                f"{_quoted(other, chosen)}.",
            )
        why = reason(key, getattr(best, key), best.follows if key == "pv" else 0.0)
        notes.append(
            Caution(
                code=f"{key}-column",
                level="note",
                text=f'{key.upper()} is "{chosen.name}" ({why}); if not, set [columns] {key}.',
            )
        )
    return best, notes


def _likely(role: Literal["pv", "co"], signals: Sequence[Signal]) -> Sequence[Signal]:
    if len(signals) <= _CANDIDATES:
        return signals
    return sorted(signals, key=lambda s: -points(role, s))[:_CANDIDATES]


def _first_loop(pairs: list[_Pair]) -> tuple[list[_Pair], Caution | None]:
    """Where the log holds two whole loops, PV 1 with CO 1 and PV 2 with CO 2, take the first one."""

    def whole(pair: _Pair) -> bool:
        return pair.pv.named.number is not None and pair.pv.named.number == pair.co.named.number

    best = pairs[0]
    apart = [p for p in pairs if best.score - p.score < _LOOP_LEAD and whole(p)]
    fields = [f.index for p in apart for f in (p.pv.field, p.co.field)]
    if len(apart) < 2 or len(set(fields)) < len(fields):
        return pairs, None
    first = min(apart, key=lambda p: p.co.field.index)
    others = {id(f) for p in apart if p is not first for f in (p.pv.field, p.co.field)}
    kept = [first, *(p for p in pairs if not others & {id(p.pv.field), id(p.co.field)} and p is not first)]
    other = next(p for p in apart if p is not first)
    return kept, Caution(
        code="several-loops",
        level="care",
        text=f"The log holds {len(apart)} loops; loop {first.pv.named.number} was taken. For the "
        f"other one set "
        f"[columns] pv = {_quoted(other.pv.field)} and co = {_quoted(other.co.field)}.",
        value=float(len(apart)),
    )


def _quoted(field: Field, other: Field | None = None) -> str:
    plain = field.name.startswith("column ") or (other is not None and other.name == field.name)
    return str(field.index) if plain else f'"{field.name}"'


def _refuse_same(pv: Field, co: Field, rows: NDArray[np.intp], file: str) -> None:
    assert pv.values is not None and co.values is not None
    a, b = pv.values[rows], co.values[rows]
    if np.array_equal(a, b, equal_nan=True) and np.nanmax(a) > np.nanmin(a):
        raise LogUnreadable(
            f'The PV column "{pv.name}" and the CO column "{co.name}" hold the same values.',
            file=file,
            column=co.name,
            remedy="Export the measured value and the controller output, or name the right "
            "columns with [columns] pv "
            "and co.",
        )


def _set_point(fields: Sequence[Field], names: dict[int, Named], pv: Signal) -> Field | None:
    found = [f for f in fields if names[f.index].role == "sp" and f.values is not None and not f.empty]
    number = pv.named.number
    return next((f for f in found if number and names[f.index].number == number), found[0] if found else None)
