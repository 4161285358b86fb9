"""The mode column to "in automatic, yes or no": by its words, its name, or how the CO moves under each code."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from pipeline.findings import Caution
from pipeline.intake.names import words_of
from pipeline.intake.table import Field

if TYPE_CHECKING:
    from numpy.typing import NDArray

_AUTOMATIC = frozenset(
    {
        "a",
        "auto",
        "automatic",
        "automatik",
        "automatico",
        "automático",
        "automatique",
        "cas",
        "cascade",
        "rcas",
        "c",
    }
)
_MANUAL = frozenset({"m", "man", "manual", "manuell", "manuel", "hand", "iman", "rman", "off", "rout"})
#: Share of rows on which a controller at work moves its CO, and share that a person never reaches [1].
_BUSY, _BY_HAND = 0.2, 0.05
#: Fewest rows under a code from which its share is taken [rows].
_FEW = 10
#: Codes a mode column may hold before it is no mode at all.
_MOST_CODES = 8


def read_mode(
    field: Field, rows: NDArray[np.intp], co: NDArray[np.float64]
) -> tuple[NDArray[np.bool_] | None, list[Caution]]:
    """Tell on which rows the controller was in automatic.

    Parameters
    ----------
    field : Field
        The mode column.
    rows : (m,) int ndarray
        Rows in time order.
    co : (m,) ndarray
        Controller output on those rows [CO unit].

    Returns
    -------
    automatic : (m,) bool ndarray or None
        None where the column cannot be understood.
    notes : list of Caution
        What was guessed about it.
    """
    if field.text is not None:
        cells = field.text.str.lower().iloc[rows].reset_index(drop=True)
    else:
        values = field.values if field.values is not None else np.full(rows.max() + 1, np.nan)
        numbers = pd.Series(values[rows])
        cells = numbers.map("{:g}".format).astype("string").mask(numbers.isna())
    automatic = cells.isin(_AUTOMATIC).to_numpy(dtype=bool)
    known = automatic | cells.isin(_MANUAL).to_numpy(dtype=bool)
    notes: list[Caution] = []
    if not np.any(known):
        found = _by_name(field, cells) or _by_behaviour(field, cells, co)
        if found is None:
            return None, [_not_known(field, cells)]
        code, note = found
        automatic = (cells == code).to_numpy(dtype=bool, na_value=False)
        known = cells.notna().to_numpy(dtype=bool)
        notes.append(note)
    unknown = ~known & cells.notna().to_numpy(dtype=bool)
    if np.any(unknown):
        count = int(unknown.sum())
        example = cells.iloc[int(np.argmax(unknown))]
        notes.append(
            Caution(
                code="mode-unknown",
                level="care",
                text=f"{count} {'row holds' if count == 1 else 'rows hold'} a mode that is not known here "
                f'("{example}"); the mode before was taken to go on. '
                "Check that the controller was in manual there.",
                value=float(count),
            )
        )
    # blank or unknown cells keep the last known mode
    last = np.maximum.accumulate(np.where(known, np.arange(known.size), int(np.argmax(known))))
    return automatic[last], notes


def _by_name(field: Field, cells: pd.Series) -> tuple[str, Caution] | None:
    """A column of zeros and ones whose name is one of the two modes says which is which."""
    if not set(cells.dropna().unique()) <= {"0", "1", "true", "false"}:
        return None
    words = set(words_of(field.name))
    says_automatic, says_manual = bool(words & _AUTOMATIC), bool(words & _MANUAL)
    if says_automatic == says_manual:
        return None
    yes = "true" if cells.isin(["true", "false"]).any() else "1"
    no = "false" if yes == "true" else "0"
    return (yes if says_automatic else no), Caution(
        code="mode-by-name",
        level="note",
        text=f'In "{field.name}" {yes} was read as {"automatic" if says_automatic else "manual"}.',
    )


def _by_behaviour(field: Field, cells: pd.Series, co: NDArray[np.float64]) -> tuple[str, Caution] | None:
    """Of two codes, the one under which the CO never rests is automatic."""
    codes = list(cells.dropna().unique())
    if len(codes) != 2:
        return None
    moved = np.diff(co) != 0.0
    busy: dict[str, float] = {}
    for code in codes:
        under = (cells == code).to_numpy(dtype=bool, na_value=False)
        both = under[1:] & under[:-1]
        if int(both.sum()) < _FEW:
            return None
        busy[code] = float(np.mean(moved[both]))
    active, resting = sorted(codes, key=lambda c: -busy[c])
    if busy[active] <= _BUSY or busy[resting] > _BY_HAND:
        return None
    return active, Caution(
        code="mode-by-behaviour",
        level="care",
        text=f'In "{field.name}" {active} was taken for automatic and {resting} for manual: under {active} the CO '
        f"changes on {100.0 * busy[active]:.0f} % of the rows, under {resting} on {100.0 * busy[resting]:.0f} %. "
        "Check it against the controller.",
        value=busy[active],
        limit=_BUSY,
    )


def _not_known(field: Field, cells: pd.Series) -> Caution:
    codes = list(cells.dropna().unique())
    shown = ", ".join(f'"{c}"' for c in codes[:_MOST_CODES])
    return Caution(
        code="mode-codes",
        level="care",
        text=f'Which mode the cells of "{field.name}" stand for is not known here ({shown}); it was not used. '
        "Check that the controller was in manual.",
    )
