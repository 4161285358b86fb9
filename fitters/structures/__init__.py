"""One file per structure; whatever stands in this folder is a structure and is found by looking."""

from __future__ import annotations

from functools import cache
from importlib import import_module
from pkgutil import iter_modules
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from fitters.structures.base import Structure

_NOT_STRUCTURES = frozenset({"base", "shapes"})


@cache
def all_structures() -> tuple[Structure, ...]:
    """Collect the structures of every module in this folder, fewest parameters first."""
    found: list[Structure] = []
    for module in iter_modules(__path__):
        if module.name not in _NOT_STRUCTURES:
            found.extend(import_module(f"{__name__}.{module.name}").STRUCTURES)
    return tuple(sorted(found, key=lambda s: (s.parameter_count, s.name)))


def structure_named(name: str) -> Structure:
    """Look a structure up by its name.

    Raises
    ------
    KeyError
        If no file in this folder has it.
    """
    for structure in all_structures():
        if structure.name == name:
            return structure
    raise KeyError(name)
