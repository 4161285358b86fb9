"""Which column is the PV and which the CO: evidence from names, units and behaviour, added up.

Each row of `EVIDENCE` gives points to one column in one role; `_pair_points` gives points to
two columns together. The best pair wins, and a tie is a question to the user, not a guess.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from pipeline.errors import LogUnreadable, QuestionForUser
from pipeline.findings import Caution
from pipeline.intake.names import Named, read_name, words_of
from pipeline.intake.table import Field

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: Rows looked at to judge behaviour: enough for the shape, few enough for no time.
_LOOK = 256
#: Points by which the best reading must lead the next one [1]: less is a question.
_LEAD = 0.25
#: Points by which one loop of a log may trail another and still count as one of its loops [1].
_LOOP_LEAD = 1.0
#: Points a pair must reach to be believed without a word from the user [1].
_ENOUGH = 2.0
#: Time constants tried for "the PV follows the CO", in looked-at rows [1]; the last integrates.
_LAGS = np.array([0.0, 2.0, 5.0, 12.0, 30.0, 80.0, 1e5])
#: Points for a PV that a lagged CO explains wholly [1].
_FOLLOWS = 2.5
#: Squared correlation above which two columns are one signal in two units [1].
_SAME_SIGNAL = 0.9999
#: Number of distinct values at which a column counts as continuous [1].
_FINE = 30

_KINDS_PV = ("temperature", "pressure", "flow", "length", "speed", "composition", "mechanical")


@dataclass(frozen=True, slots=True, kw_only=True)
class Signal:
    """A column seen as a candidate.

    Attributes
    ----------
    field : Field
    named : Named
    shape : (m,) ndarray
        Up to 256 of its values in time order, centred and scaled to a range of 1; zeros if constant.
    moves : bool
        It is not constant.
    levels : int
        Distinct values among all rows.
    """

    field: Field
    named: Named
    shape: NDArray[np.float64]
    moves: bool
    levels: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Evidence:
    """One row of the table: what speaks for or against a column in a role.

    Attributes
    ----------
    role : {"pv", "co"}
    points : float
        Given in full when the test says 1.
    test : callable
        Share of the points, and the clause that says why ("" for nothing to say).
    """

    role: Literal["pv", "co"]
    points: float
    test: Callable[[Signal], tuple[float, str]]


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


def _name_says(role: Literal["pv", "co"]) -> Callable[[Signal], tuple[float, str]]:
    def test(signal: Signal) -> tuple[float, str]:
        said = signal.named
        if said.role is None:
            return 0.0, ""
        if said.role == role:
            return said.weight, f'name says "{said.word}"'
        return -0.5 * said.weight, ""

    return test


def _unit_is(kinds: Sequence[str], share: float = 1.0) -> Callable[[Signal], tuple[float, str]]:
    def test(signal: Signal) -> tuple[float, str]:
        return (share, f"unit {signal.field.unit}") if signal.named.kind in kinds else (0.0, "")

    return test


def _steps_and_holds(signal: Signal) -> tuple[float, str]:
    """Few large jumps make up all its travel, and one jump is a good part of its range."""
    if not signal.moves or signal.shape.size < 4:
        return 0.0, ""
    jumps = np.sort(np.abs(np.diff(signal.shape)))[::-1]
    travel = float(jumps.sum())
    few = max(1, jumps.size // 20)
    share = float(jumps[:few].sum()) / travel if travel > 0 else 0.0
    size = min(1.0, float(jumps[0]) / 0.25)
    score = share * size
    return score, "steps and holds" if score > 0.7 else ""


def _many_values(signal: Signal) -> tuple[float, str]:
    return min(1.0, signal.levels / _FINE), ""


def _constant(signal: Signal) -> tuple[float, str]:
    return (0.0, "") if signal.moves else (1.0, "")


EVIDENCE: tuple[Evidence, ...] = (
    Evidence(role="pv", points=1.0, test=_name_says("pv")),
    Evidence(role="co", points=1.0, test=_name_says("co")),
    Evidence(role="pv", points=1.0, test=_unit_is(_KINDS_PV)),
    Evidence(role="co", points=1.0, test=_unit_is(("share",))),
    Evidence(role="co", points=0.5, test=_unit_is(("electric",))),
    Evidence(role="co", points=2.0, test=_steps_and_holds),
    Evidence(role="pv", points=0.5, test=_many_values),
    # a CO nobody moved is more likely than a PV that never moved
    Evidence(role="co", points=-0.5, test=_constant),
    Evidence(role="pv", points=-1.0, test=_constant),
)


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
    names = {f.index: _named(f, fields) for f in fields}
    mode = mode or next((f for f in fields if names[f.index].role == "mode" and not f.empty), None)
    spoken_for = {f.index for f in (sp, mode) if f is not None}
    usable = [
        f for f in fields if f.index not in spoken_for and not f.empty and _may_be_signal(f, names[f.index])
    ]
    signals = {f.index: _signal(f, rows, names[f.index]) for f in (*usable, *(g for g in (pv, co) if g))}
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
        pv_reason="named in the loop sheet" if pv else _reason("pv", y, best.follows),
        co_reason="named in the loop sheet" if co else _reason("co", u, 0.0),
        notes=tuple(notes),
    )


def _named(field: Field, fields: Sequence[Field]) -> Named:
    # "CO2" is a gas unless the log also speaks of PV2, SP2 or CO1
    pairs = [tuple(words_of(f.name)[k : k + 2]) for f in fields for k in range(2)]
    gas = not any(p in pairs for p in (("pv", "2"), ("sp", "2"), ("co", "1")))
    return read_name(field.name, field.unit, gas=gas)


def _may_be_signal(field: Field, named: Named) -> bool:
    if named.role in ("sp", "mode", "index") or (named.role == "time" and named.kind in (None, "time")):
        return False
    # a column of text is kept only where its name claims a role: then it is reported, not passed over
    return field.values is not None or (named.role in ("pv", "co") and named.weight >= 3.0)


def _signal(field: Field, rows: NDArray[np.intp], named: Named) -> Signal:
    if field.values is None:
        return Signal(field=field, named=named, shape=np.zeros(0), moves=False, levels=0)
    values = field.values[rows]
    known = np.isfinite(values)
    if not np.any(known):
        return Signal(field=field, named=named, shape=np.zeros(0), moves=False, levels=0)
    distinct = np.unique(values[known])
    low, high = float(distinct[0]), float(distinct[-1])
    looked = np.linspace(0, values.size - 1, min(values.size, _LOOK)).astype(np.intp)
    last = np.maximum.accumulate(np.where(known, np.arange(values.size), int(np.argmax(known))))
    shape = values[last][looked]
    shape = (shape - low) / (high - low) if high > low else np.zeros(looked.size)
    return Signal(
        field=field, named=named, shape=shape - shape.mean(), moves=high > low, levels=int(distinct.size)
    )


def _points(role: str, signal: Signal) -> float:
    return sum(e.points * e.test(signal)[0] for e in EVIDENCE if e.role == role)


def _reason(role: str, signal: Signal, follows: float) -> str:
    clauses = [
        clause
        for e in EVIDENCE
        if e.role == role
        for share, clause in [e.test(signal)]
        if share > 0 and clause
    ]
    if follows > 0.5:
        clauses.append("follows the CO")
    return ", ".join(clauses) or "the best of what is left"


@dataclass(frozen=True, slots=True, kw_only=True)
class _Pair:
    pv: Signal
    co: Signal
    score: float
    follows: float


def _choose(
    for_pv: Sequence[Signal], for_co: Sequence[Signal], *, asked_pv: bool, asked_co: bool, file: str
) -> tuple[_Pair, list[Caution]]:
    follows, same = _followed(for_pv, for_co)
    pv_points = [_points("pv", s) for s in for_pv]
    co_points = [_points("co", s) for s in for_co]
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
        reason = _reason(key, getattr(best, key), best.follows if key == "pv" else 0.0)
        notes.append(
            Caution(
                code=f"{key}-column",
                level="note",
                text=f'{key.upper()} is "{chosen.name}" ({reason}); if not, set [columns] {key}.',
            )
        )
    return best, notes


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


def _followed(
    for_pv: Sequence[Signal], for_co: Sequence[Signal]
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Squared correlation of each PV with each CO behind the best of a few lags, trend removed.

    Returns
    -------
    follows : (p, c) ndarray
    same : (p, c) bool ndarray
        The two are one signal up to scale.
    """
    size = max((s.shape.size for s in (*for_pv, *for_co)), default=0)
    follows = np.zeros((len(for_pv), len(for_co)))
    if size < 8:
        return follows, np.zeros(follows.shape, dtype=bool)
    empty = np.zeros(size)
    y = np.array([s.shape if s.shape.size == size else empty for s in for_pv])
    u = np.array([s.shape if s.shape.size == size else empty for s in for_co])
    keep = np.exp(-1.0 / np.maximum(_LAGS, 1e-3))[:, None]
    x = np.empty((size, _LAGS.size, len(for_co)))
    state = np.repeat(u[None, :, 0], _LAGS.size, axis=0) * (_LAGS[:, None] < 1e4)
    for k in range(size):
        state = keep * state + (1.0 - keep) * u[:, k]
        x[k] = state
    basis, _ = np.linalg.qr(np.column_stack([np.ones(size), np.linspace(-1, 1, size)]))
    flat = x.reshape(size, -1)
    flat = flat - basis @ (basis.T @ flat)
    bare = y.T - basis @ (basis.T @ y.T)
    top = (bare.T @ flat) ** 2
    bottom = np.outer((bare**2).sum(axis=0), (flat**2).sum(axis=0))
    # columns scaled to a range of 1: less energy than this is rounding, not movement
    square = np.where(bottom > 1e-18, top / np.maximum(bottom, 1e-18), 0.0).reshape(
        len(for_pv), _LAGS.size, -1
    )
    follows = np.clip(square.max(axis=1), 0.0, 1.0)
    return follows, square[:, 0, :] > _SAME_SIGNAL


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
