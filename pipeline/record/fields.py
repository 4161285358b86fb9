"""What a record's numbers may be: finite or "inf", never NaN; arrays become plain numbers."""

from __future__ import annotations

import math
from typing import Annotated

from pydantic import BaseModel, BeforeValidator, ConfigDict


def _number(value: object) -> object:
    """Take an int, a float, any numpy real or the string "inf"; refuse NaN and minus infinity."""
    if isinstance(value, str):
        if value == "inf":
            return math.inf
        raise ValueError('a number or "inf" belongs here')
    if isinstance(value, bool):
        raise ValueError("a number belongs here, not true or false")
    try:
        number = float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        raise ValueError("a number belongs here") from None
    if math.isnan(number) or number == -math.inf:
        raise ValueError("NaN and minus infinity are never recorded")
    return number


def _lower_end(value: object) -> object:
    """Take what `_number` takes, and minus infinity: an interval may have no lower end."""
    if value == "-inf" or (isinstance(value, float) and value == -math.inf):
        return -math.inf
    return _number(value)


def _plain_sequence(values: object) -> object:
    """Turn an array into plain numbers before they are looked at one by one."""
    return values.tolist() if hasattr(values, "tolist") else values


def _gappy_sequence(values: object) -> object:
    """Turn an array into plain numbers, with None where it holds NaN."""
    plain = _plain_sequence(values)
    if not isinstance(plain, (list, tuple)):
        return plain
    return [None if isinstance(v, float) and math.isnan(v) else v for v in plain]


Number = Annotated[float, BeforeValidator(_number)]
LowerEnd = Annotated[float, BeforeValidator(_lower_end)]
Numbers = Annotated[tuple[Number, ...], BeforeValidator(_plain_sequence)]
GappyNumbers = Annotated[tuple[Number | None, ...], BeforeValidator(_gappy_sequence)]
Percentiles = Annotated[tuple[Number, Number, Number], BeforeValidator(_plain_sequence)]


class Part(BaseModel):
    """Common ground: read-only, and a key nobody knows is an error."""

    model_config = ConfigDict(frozen=True, extra="forbid", populate_by_name=True)
