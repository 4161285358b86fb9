"""What a header says: the unit, the loop number, and which role the trade's words point to."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Literal

Role = Literal["time", "pv", "co", "sp", "mode", "index", "other"]

#: Units as loggers write them (lower case, set apart by bars) by the kind of quantity they measure.
_UNITS_BY_KIND: dict[str, str] = {
    "time": "s|sec|secs|second|seconds|seg|segundos|sek|sekunden|ms|msec|millisecond|milliseconds"
    "|min|mins|minute|minutes|minuten|minutos|h|hr|hrs|hour|hours|std|horas",
    "share": "%|pct|percent|% open|%co|%op",
    "temperature": "degc|deg c|°c|c|degf|deg f|°f|f|k|degk|kelvin|celsius|fahrenheit|deg",
    "pressure": "pa|kpa|mpa|bar|barg|bara|mbar|psi|psig|psia|mmhg|inh2o|mmh2o|kg/cm2",
    "flow": "m3/h|m3/s|m³/h|m³/s|l/min|l/s|l/h|lpm|gpm|kg/s|kg/h|kg/min|t/h|nm3/h|cfm|scfm|ml/min",
    "length": "m|cm|mm|in|ft|inch",
    "speed": "rpm|r/min|1/min|rad/s|m/s|m/min|mm/s|hz|deg/s",
    "electric": "v|mv|volt|volts|ma|a|w|kw|counts|count",
    "composition": "ppm|ppb|ph|mg/l|g/l|ms/cm|us/cm|mol/l|%rh|%o2|ntu",
    "mechanical": "n|nm|kn|kg|t|g|kg/m3",
}
UNITS: dict[str, str] = {unit: kind for kind, units in _UNITS_BY_KIND.items() for unit in units.split("|")}

_SECONDS_BY_UNIT: tuple[tuple[float, str], ...] = (
    (1.0, "s|sec|secs|second|seconds|seg|segundos|sek|sekunden"),
    (1e-3, "ms|msec|millisecond|milliseconds"),
    (60.0, "min|mins|minute|minutes|minuten|minutos"),
    (3600.0, "h|hr|hrs|hour|hours|std|horas"),
)
#: Seconds per unit of time, for every time word in `UNITS`.
SECONDS: dict[str, float] = {unit: size for size, units in _SECONDS_BY_UNIT for unit in units.split("|")}

#: Words that name a role outright (3), name the usual thing in that role (2), or hint at it (1).
_WORDS_BY_ROLE: tuple[tuple[Role, float, str], ...] = (
    ("pv", 3.0, "pv measurement measured istwert adc"),
    (
        "pv",
        2.0,
        "temp temperature temperatura temperatur level nivel niveau füllstand flow caudal durchfluss",
    ),
    ("pv", 2.0, "pressure presion presión druck press speed velocity velocidad drehzahl humidity ph rpm"),
    ("pv", 2.0, "concentration conductivity density composition position thickness weight tension oxygen"),
    ("pv", 1.0, "y sensor value response rate"),
    ("co", 3.0, "co op out output mv manipulated stellwert salida dac pwm"),
    ("co", 2.0, "valve válvula valvula ventil heater heating damper cmd command demand drive actuator"),
    ("co", 2.0, "opening vfd fan pump voltage voltaje duty travel ventilation"),
    ("co", 1.0, "u input steam power current fuel feed volt"),
    ("sp", 3.0, "sp setpoint sollwert consigna setpt reference target"),
    ("mode", 3.0, "mode auto man modus manual automatic automatik"),
    ("time", 3.0, "time t timestamp date datetime tiempo zeit temps elapsed seconds secs minutes hours"),
    ("time", 3.0, "uhrzeit datum fecha hora stamp clock"),
    ("index", 2.0, "id index idx row no nr sample samples scan record seq n"),
    ("other", 2.0, "status quality alarm err error deviation ambient outside comment"),
)
_WORDS: dict[str, tuple[Role, float]] = {
    word: (role, weight) for role, weight, words in _WORDS_BY_ROLE for word in words.split()
}

#: Runs of words that mean something else than their last word does.
_PHRASES: tuple[tuple[tuple[str, ...], Role, float], ...] = (
    (("process", "value"), "pv", 3.0),
    (("process", "variable"), "pv", 3.0),
    (("control", "output"), "co", 3.0),
    (("controller", "output"), "co", 3.0),
    (("set", "point"), "sp", 3.0),
    (("valve", "position"), "co", 2.0),
    (("valve", "travel"), "co", 2.0),
    (("valve", "opening"), "co", 2.0),
    (("damper", "position"), "co", 2.0),
    (("pump", "speed"), "co", 2.0),
    (("fan", "speed"), "co", 2.0),
    (("heater", "power"), "co", 2.0),
    (("sampling", "time"), "time", 3.0),
    (("sample", "time"), "time", 3.0),
    (("time", "stamp"), "time", 3.0),
)

#: Weight taken off when an earlier word points to another role ("heater 1 temp") [1].
_MIXED_PENALTY = 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Named:
    """What a header says.

    Attributes
    ----------
    role : Role or None
        The role its words point to, None where they point nowhere.
    weight : float
        3 names the role, 2 names the usual thing in it, 1 hints at it; less where words disagree.
    word : str
        The word that decided.
    number : str or None
        First number in the name, which ties the columns of one loop together.
    kind : str or None
        Kind of quantity by the unit.
    """

    role: Role | None
    weight: float
    word: str
    number: str | None
    kind: str | None


def _plain_unit(text: str) -> str:
    return text.strip().strip("[]()").strip().lower()


def is_unit(text: str) -> bool:
    """Tell whether a cell is a unit and nothing else; "-" stands for a pure number."""
    return _plain_unit(text) in UNITS or text.strip() in ("-", "[-]", "(-)")


def split_unit(header: str) -> tuple[str, str | None]:
    """Take the unit off a header.

    Parameters
    ----------
    header : str
        "Time (sec)", "Tunnel air [degC]", "DrumLevel_cm", "FeedFlow_kg_s", "Level, %".

    Returns
    -------
    base : str
        The name without it.
    unit : str or None
        The unit as written, None if the header gives none.
    """
    found = re.match(r"^(.+?)[\s_,]*[\[(]\s*([^\])]+?)\s*[\])]\s*$", header)
    if found and _plain_unit(found[2]) in UNITS:
        return found[1], found[2].strip()
    parts = header.split("_")
    for tail in (2, 1):
        unit = "/".join(parts[-tail:])
        if len(parts) > tail and all(parts) and unit.lower() in UNITS:
            return "_".join(parts[:-tail]), unit
    words = re.split(r"[\s,]+", header.strip())
    # a bare letter after a blank is more often a loop's name than a unit
    if len(words) > 1 and words[-1].lower() in UNITS and (len(words[-1]) > 1 or words[-1] == "%"):
        return header[: header.rstrip().rfind(words[-1])].rstrip(" ,"), words[-1]
    return header, None


def words_of(base: str) -> list[str]:
    """Cut a name into lower-case words and numbers: "DrumLevel" into drum, level; "Q1" into q, 1."""
    return [w.lower() for w in re.findall(r"[^\W\d_]+?(?=[A-ZÄÖÜ][a-zäöü])|[^\W\d_]+|\d+", base)]


def _tag(base: str) -> tuple[Role, float, str] | None:
    """Read a bare instrument tag by its letters: FT transmits, FV is a valve.

    References
    ----------
    ANSI/ISA-5.1, identification letters: first letter the measured variable, then
    I indicate, T transmit, E element; V valve, Z driver or final element (from memory).
    """
    found = re.match(r"^\s*(?:\d+[-_ ]?)?([A-Z])D?([A-Z]{1,2})[-_ ]?\d{1,6}[A-Z]?\s*$", base)
    if not found or found[1] not in "AFJLPSTWX":
        return None
    letters = found[1] + found[2]
    if found[2] in ("T", "I", "IT", "E"):
        return "pv", 3.0, f"tag letters {letters}"
    if found[2] in ("V", "CV", "Z", "Y"):
        return "co", 3.0, f"tag letters {letters}"
    return None


def read_name(header: str, unit: str | None, *, gas: bool = False) -> Named:
    """Read what a header points to.

    Parameters
    ----------
    header : str
        As written.
    unit : str or None
        Unit of the column, from the header or a unit row.
    gas : bool
        Take "CO2" for the gas and not for output number 2.

    Returns
    -------
    Named
    """
    base = split_unit(header)[0]
    kind = UNITS.get(unit.lower()) if unit else None
    words = words_of(base)
    number = next((w for w in words if w.isdigit()), None)
    tag = _tag(base)
    if tag is not None:
        return Named(role=tag[0], weight=tag[1], word=tag[2], number=number, kind=kind)
    hits: list[tuple[Role, float, str]] = []
    k = 0
    while k < len(words):
        phrase = next((p for p in _PHRASES if tuple(words[k : k + len(p[0])]) == p[0]), None)
        if gas and words[k : k + 2] == ["co", "2"]:
            hits.append(("pv", 2.0, "CO2"))
            k += 2
        elif phrase:
            hits.append((phrase[1], phrase[2], " ".join(phrase[0])))
            k += len(phrase[0])
        else:
            hit = _WORDS.get(words[k])
            lone_letter = len(words[k]) == 1 and k + 1 < len(words) and words[k + 1].isdigit()
            if words[k] == "t" and lone_letter:
                hits.append(("pv", 1.0, base))
            elif words[k] == "q" and lone_letter:
                hits.append(("co", 1.0, base))
            elif hit:
                hits.append((*hit, words[k]))
            k += 1
    if not hits:
        return Named(role=None, weight=0.0, word="", number=number, kind=kind)
    # the last word is what the name is about, unless an earlier one names its role outright
    role, weight, word = max(enumerate(hits), key=lambda h: (h[1][1] >= 3.0, h[0]))[1]
    if any(other != role for other, _, _ in hits):
        weight -= _MIXED_PENALTY
    return Named(role=role, weight=weight, word=word, number=number, kind=kind)
