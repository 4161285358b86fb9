"""Bytes of a logger's export to a `Log`: encoding, layout, numbers, clock, columns.

::

    text.py      bytes -> text lines            clock.py     the time column -> seconds
    layout.py    lines -> delimiter, header     names.py     what a header says: unit and role
    table.py     body  -> columns of numbers    evidence.py  what speaks for a column as PV or CO
    order.py     rows in time order, once each  roles.py     which column is PV, CO, SP
    read.py      the composition, `read_log`
"""

from __future__ import annotations

from pipeline.intake.log import Column, Log
from pipeline.intake.read import read_log

__all__ = ["Column", "Log", "read_log"]
