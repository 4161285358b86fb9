"""What speaks for a column as PV or as CO: its name, its unit, how it moves, what follows what.

Each row of `EVIDENCE` gives points to one column in one role.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from pipeline.intake.names import Named
from pipeline.intake.table import Field

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: Rows looked at to judge behaviour: enough for the shape, few enough for no time.
_LOOK = 256
#: Time constants tried for "the PV follows the CO", in looked-at rows [1]; the last integrates.
_LAGS = np.array([0.0, 2.0, 5.0, 12.0, 30.0, 80.0, 1e5])
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


def observe(field: Field, rows: NDArray[np.intp], named: Named) -> Signal:
    """See a column as a candidate.

    Parameters
    ----------
    field : Field
    rows : (m,) int ndarray
        Rows in time order.
    named : Named
        What its header says.

    Returns
    -------
    Signal
    """
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


def points(role: str, signal: Signal) -> float:
    """Add up what speaks for a column in a role.

    Parameters
    ----------
    role : {"pv", "co"}
    signal : Signal

    Returns
    -------
    float
        Points [1].
    """
    return sum(e.points * e.test(signal)[0] for e in EVIDENCE if e.role == role)


def reason(role: str, signal: Signal, follows: float) -> str:
    """Say in a clause why a column stands for its role.

    Parameters
    ----------
    role : {"pv", "co"}
    signal : Signal
    follows : float
        Share of the PV that a lagged CO explains [1]; zero for a CO.

    Returns
    -------
    str
    """
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


def followed(
    for_pv: Sequence[Signal], for_co: Sequence[Signal]
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Squared correlation of each PV with each CO behind the best of a few lags, trend removed.

    Parameters
    ----------
    for_pv, for_co : sequence of Signal
        p and c candidates.

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
