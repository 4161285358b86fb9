"""Logs with one known fault each, and the same logs without it.

The process is integrated here, step by step, by nothing of the program. Each fault is a row of the
list of failure cases that common practice knows (file and clock 1 to 16, test quality 17 to 37); what
is to come of it is that list's answer: refuse or ask (R), caution (C), handle and tell (H).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

REFUSE = frozenset({"do not use", "asked", "not read"})
CARE = frozenset({"use with care"})
HANDLE = frozenset({"use", "use with care"})
USE = frozenset({"use"})

#: Simulation steps a second [1/s].
FINE = 10


@dataclass(frozen=True, kw_only=True)
class Process:
    """Two lags, dead time, gain, and what can be wrong with the final element; times in s."""

    gain: float = 2.0
    lags: tuple[float, float] = (20.0, 0.5)
    dead: float = 4.0
    noise: float = 0.1
    start: float = 50.0
    dead_band: float = 0.0
    sticks: float = 0.0
    filtered: float = 0.0
    integrates: bool = False


@dataclass
class Test:
    """Rows of a bump test, to be damaged and written."""

    t: np.ndarray
    co: np.ndarray
    pv: np.ndarray
    sheet: dict[str, dict[str, object]] = field(default_factory=dict)
    extra: dict[str, list[str]] = field(default_factory=dict)

    def text(self, *, head: str = "Time (s),CO (%),PV (degC)", places: int = 3) -> str:
        """Write the rows as a logger would."""
        columns = [
            [f"{v:.10g}" for v in self.t],
            [f"{v:.10g}" for v in self.co],
            ["" if np.isnan(v) else f"{v:.{places}f}" for v in self.pv],
            *self.extra.values(),
        ]
        names = ",".join([head, *self.extra])
        return "\n".join([names, *(",".join(row) for row in zip(*columns, strict=True))]) + "\n"


def steps(t, *moves, base=40.0):
    """Give an output that makes moves (time [s], size [%]) from its base."""
    return base + sum((np.where(t >= at, size, 0.0) for at, size in moves), np.zeros(t.size))


STAIRS = ((80.0, 5.0), (220.0, -5.0), (360.0, 5.0), (500.0, -5.0))


def through_valve(co, process):
    """Give the travel of a final element with play or stiction."""
    band = process.dead_band or process.sticks
    if not band:
        return co
    travel = np.empty(co.size)
    at = co[0]
    for k, wanted in enumerate(co):
        if process.sticks:
            if abs(wanted - at) >= band:
                at = wanted
        else:  # play taken up at the start in the rising direction
            at = min(max(at, wanted - 0.0), wanted + band)
        travel[k] = at
    return travel


def simulate(rng, process=None, *, moves=STAIRS, end=640.0, scan=1.0, load=None, co=None):
    """Integrate a test and log it every scan; `load` is a change of the PV by time, before the lags."""
    p = process or Process()
    fine = np.arange(0.0, end + 1e-9, 1.0 / FINE)
    output = steps(fine, *moves) if co is None else co(fine)
    travel = through_valve(output, p)
    delay = round(p.dead * FINE)
    late = np.concatenate([np.full(delay, travel[0]), travel[: travel.size - delay]])
    drive = p.gain * (late - travel[0]) + (load(fine) if load is not None else 0.0)
    pv = np.empty(fine.size)
    first = second = filtered = 0.0
    keep = [np.exp(-1.0 / FINE / lag) for lag in p.lags]
    smooth = np.exp(-1.0 / FINE / p.filtered) if p.filtered else 0.0
    for k, value in enumerate(drive):
        pv[k] = second
        first = first + value / FINE / p.lags[0] if p.integrates else keep[0] * first + (1 - keep[0]) * value
        second = keep[1] * second + (1 - keep[1]) * first
    noise = rng.normal(0.0, p.noise, fine.size)
    if p.filtered:
        raw = pv + noise * np.sqrt(2.0 * p.filtered * FINE)  # the same noise after the filter
        for k, value in enumerate(raw):
            filtered = smooth * filtered + (1 - smooth) * value
            pv[k] = filtered
        noise = np.zeros(fine.size)
    rows = np.arange(0, fine.size, round(scan * FINE))
    return Test(t=fine[rows], co=output[rows], pv=p.start + pv[rows] + noise[rows])


@dataclass(frozen=True, kw_only=True)
class Case:
    """One log and what is to come of it."""

    row: int
    name: str
    make: Callable[[np.random.Generator], tuple[bytes, dict[str, dict[str, object]]]]
    verdicts: frozenset[str]
    code: str | None = None


CASES: list[Case] = []


def case(row, name, verdicts, code=None):
    """Register a maker of a test (or of text) as a case."""

    def register(make):
        def write(rng):
            made = make(rng)
            if isinstance(made, Test):
                return made.text().encode(), made.sheet
            if isinstance(made, tuple):
                return made
            return (made if isinstance(made, bytes) else made.encode()), {}

        CASES.append(Case(row=row, name=name, make=write, verdicts=verdicts, code=code))
        return make

    return register


def clean(row, name="as it should be", process=None, **how):
    """Register a twin without the fault."""
    case(row, f"clean: {name}", USE)(lambda rng: simulate(rng, process, **how))


# --- file and clock -----------------------------------------------------------------------------


@case(1, "decimal comma", HANDLE, "decimal-comma")
def _(rng):
    return simulate(rng).text(places=2).replace(",", ";").replace(".", ",")


@case(1, "comma that can be read in two ways", REFUSE)
def _(rng):
    test = simulate(rng, Process(start=1200.0, gain=20.0, noise=1.0))
    return "Time (s);CO;PV\n" + "".join(
        f"{a:.0f};{b:.0f};{c:,.0f}\n" for a, b, c in zip(test.t, test.co, test.pv, strict=True)
    )


@case(2, "trailing delimiter", HANDLE)
def _(rng):
    return simulate(rng).text().replace("\n", ",\n")


@case(3, "two bytes a letter", HANDLE, "encoding")
def _(rng):
    return simulate(rng).text().encode("utf-16")


@case(4, "unit row, comments and the header again", HANDLE, "repeated-header")
def _(rng):
    lines = simulate(rng).text(head="Time,CO,PV").splitlines()
    return "\n".join(["# exported", lines[0], "s,%,degC", *lines[1:200], lines[0], *lines[200:]])


@case(5, "bad cells inside the answer", REFUSE, "bad-on-rise")
def _(rng):
    test = simulate(rng)
    for start in (80, 220, 360, 500):
        test.pv[start + rng.permutation(40)[:14]] = np.nan
    return test


@case(5, "clean: few bad cells on the holds", HANDLE, "pv-missing")
def _(rng):
    lines = simulate(rng).text().splitlines()
    for k in (10, 30, 180, 190, 330):
        lines[k] = ",".join([*lines[k].split(",")[:2], "Bad"])
    return "\n".join(lines)


def stamped(test, form, shift=0):
    from datetime import datetime, timedelta

    start = datetime(2026, 3, 4, 10, 0) + timedelta(days=shift)
    when = [(start + timedelta(seconds=float(s))).strftime(form) for s in test.t]
    return "Time,CO,PV\n" + "".join(
        f"{a},{b:g},{c:.3f}\n" for a, b, c in zip(when, test.co, test.pv, strict=True)
    )


@case(6, "day or month first", REFUSE)
def _(rng):
    return stamped(simulate(rng), "%d/%m/%Y %H:%M:%S")


@case(6, "clean: a day above twelve", USE, "date-order")
def _(rng):
    return stamped(simulate(rng), "%d/%m/%Y %H:%M:%S", shift=20)


@case(7, "one time, two values, often", REFUSE, "conflicting-rows")
def _(rng):
    lines = simulate(rng).text().splitlines()
    for k in range(600, 100, -5):
        t, u, y = lines[k].split(",")
        lines.insert(k, f"{t},{u},{float(y) + 1.5:.3f}")
    return "\n".join(lines)


@case(7, "clean: rows written twice", USE, "duplicates-merged")
def _(rng):
    lines = simulate(rng).text().splitlines()
    for k in range(600, 100, -50):
        lines.insert(k, lines[k])
    return "\n".join(lines)


@case(8, "day numbers of a spreadsheet", HANDLE, "serial-days")
def _(rng):
    test = simulate(rng)
    return "Time,CO,PV\n" + "".join(
        f"{46085.5 + a / 86400:.9f},{b:g},{c:.3f}\n" for a, b, c in zip(test.t, test.co, test.pv, strict=True)
    )


@case(9, "rows counted or seconds", REFUSE)
def _(rng):
    return simulate(rng).text(head="Time,CO,PV")


@case(10, "irregular times", HANDLE)
def _(rng):
    test = simulate(rng, scan=0.5)
    kept = np.sort(rng.permutation(test.t.size)[: test.t.size // 2])
    return Test(t=test.t[kept], co=test.co[kept], pv=test.pv[kept])


@case(11, "hole over the whole rise", REFUSE, "gap-on-rise")
def _(rng):
    test = simulate(rng, moves=((80.0, 5.0),), end=240.0)
    kept = (test.t < 81) | (test.t > 125)
    return Test(t=test.t[kept], co=test.co[kept], pv=test.pv[kept])


@case(11, "hole over part of the rise", CARE | REFUSE, "gap-on-rise")
def _(rng):
    test = simulate(rng)
    kept = (test.t < 82) | (test.t > 96)
    return Test(t=test.t[kept], co=test.co[kept], pv=test.pv[kept])


@case(11, "clean: hole on a hold", USE)
def _(rng):
    test = simulate(rng)
    kept = (test.t < 180) | (test.t > 200)
    return Test(t=test.t[kept], co=test.co[kept], pv=test.pv[kept])


def late_output(rng, by, process=None):
    """The output is stamped late: the PV seems to answer before the move."""
    test = simulate(rng, process, moves=[(at - by, size) for at, size in STAIRS])
    test.co = steps(test.t, *STAIRS)
    return test


case(12, "output stamped late", REFUSE, "answer-before-move")(lambda rng: late_output(rng, 8.0))


def on_lines(test, limit):
    """Store by straight lines within a limit and fill the rows between: what an archive gives back."""
    stored = [0]
    for k in range(2, test.t.size):
        a = stored[-1]
        inside = slice(a + 1, k)
        line = test.pv[a] + (test.pv[k] - test.pv[a]) * (test.t[inside] - test.t[a]) / (test.t[k] - test.t[a])
        if np.max(np.abs(line - test.pv[inside])) > limit:
            stored.append(k - 1)
    stored.append(test.t.size - 1)
    return Test(t=test.t, co=test.co, pv=np.interp(test.t, test.t[stored], test.pv[stored]))


def on_change(test, limit, *, held):
    """Store on change only; hold in between, or keep the stored rows alone."""
    kept = [0]
    for k in range(1, test.t.size):
        if abs(test.pv[k] - test.pv[kept[-1]]) >= limit or (not held and test.co[k] != test.co[k - 1]):
            kept.append(k)
    if not held:
        return Test(t=test.t[kept], co=test.co[kept], pv=test.pv[kept])
    last = np.zeros(test.t.size, dtype=int)
    last[kept] = kept
    return Test(t=test.t, co=test.co, pv=test.pv[np.maximum.accumulate(last)])


case(13, "archive joined by lines, coarse", CARE | REFUSE, "joined-by-lines")(
    lambda rng: on_lines(simulate(rng), 1.0)
)
case(13, "archive joined by lines", CARE | REFUSE, "joined-by-lines")(
    lambda rng: on_lines(simulate(rng), 0.5)
)
case(14, "stored on change and held", CARE, "stored-on-change")(
    lambda rng: on_change(simulate(rng), 0.5, held=True)
)
case(14, "stored on change, coarse", CARE | REFUSE, "stored-on-change")(
    lambda rng: on_change(simulate(rng), 1.0, held=True)
)


@case(15, "the output in another unit for the PV", REFUSE, "wrong-column")
def _(rng):
    test = simulate(rng)
    test.pv = 4.0 + 0.16 * test.co
    return test


@case(15, "the set point for the PV", REFUSE, "wrong-column")
def _(rng):
    test = simulate(rng)
    test.pv = np.where(test.t < 81, 50.0, np.where(test.t < 300, 55.0, 52.0))
    test.extra["SP (degC)"] = [f"{v:.3f}" for v in test.pv]
    test.sheet = {"columns": {"pv": "PV (degC)"}}
    return test.text().encode(), test.sheet


case(16, "empty", REFUSE)(lambda rng: b"")
case(16, "one row", REFUSE)(lambda rng: "Time (s),CO,PV\n0,40,50\n")
case(16, "six rows", REFUSE)(lambda rng: "\n".join(simulate(rng).text().splitlines()[:7]))


@case(16, "clean: hundreds of columns beside it", HANDLE)
def _(rng):
    test = simulate(rng)
    for k in range(300):
        test.extra[f"spare {k}"] = ["0"] * test.t.size
    return test


# --- test quality -------------------------------------------------------------------------------

case(17, "nothing moved", REFUSE, "no-move")(lambda rng: simulate(rng, moves=()))


@case(17, "output that only chatters", REFUSE, "no-move")
def _(rng):
    test = simulate(rng, moves=())
    test.co = test.co + rng.normal(0.0, 0.05, test.t.size).round(3)
    return test


case(18, "move as large as the noise", REFUSE, "small-move")(
    lambda rng: simulate(rng, Process(noise=1.0, gain=0.4))
)
case(18, "move five times the noise", CARE | REFUSE, "small-move")(
    lambda rng: simulate(rng, Process(noise=0.3, gain=0.4))
)
case(19, "still settling before the move", HANDLE, "drifting-baseline")(
    lambda rng: simulate(rng, load=lambda t: np.where(t < 40, 0.0, 4.0), moves=STAIRS)
)
case(20, "drift through the test", HANDLE, "drifting-baseline")(
    lambda rng: simulate(rng, load=lambda t: 0.04 * t)
)
case(21, "load step in the middle", CARE, "load-disturbance")(
    lambda rng: simulate(rng, load=lambda t: np.where(t > 300, 4.0, 0.0))
)
case(21, "load as large as the moves", CARE | REFUSE, "load-disturbance")(
    lambda rng: simulate(rng, load=lambda t: np.where(t > 310, -9.0, 0.0))
)
case(22, "output ramped", HANDLE)(
    lambda rng: simulate(
        rng, co=lambda t: 40.0 + np.interp(t, [80, 90, 220, 230, 360, 370], [0, 5, 5, 0, 0, 5])
    )
)
case(22, "moves in stages", HANDLE)(
    lambda rng: simulate(rng, moves=((80, 3), (82, 2), (220, -3), (222, -2), (360, 3), (362, 2)))
)


def worked(rng, *, step):
    """A PI controller at work, with or without a set point step; integrated here."""
    n, dt = 640, 1.0
    pv, co, sp = np.full(n, 50.0), np.full(n, 40.0), np.full(n, 50.0)
    sp[200:] += 5.0 * step
    load = np.cumsum(rng.normal(0.0, 0.15, n))
    y, total, line = 0.0, 0.0, [0.0] * 5
    for k in range(1, n):
        pv[k] = 50.0 + y + rng.normal(0.0, 0.1)
        error = sp[k] - pv[k]
        total += error * dt / 20.0
        co[k] = np.clip(40.0 + 0.8 * (error + total), 0.0, 100.0)
        line = [co[k] - 40.0, *line[:4]]
        y += dt / 20.0 * (2.0 * line[4] + load[k] - y)
    test = Test(t=np.arange(n, dtype=float), co=co.round(3), pv=pv)
    test.extra["SP (degC)"] = [f"{v:.1f}" for v in sp]
    return test


case(23, "in automatic with a set point step", REFUSE, "closed-loop")(lambda rng: worked(rng, step=True))


@case(23, "in automatic by the mode column", REFUSE, "closed-loop")
def _(rng):
    test = simulate(rng)
    test.extra["Mode"] = ["AUTO"] * test.t.size
    return test


@case(23, "clean: in manual by the mode column", USE)
def _(rng):
    test = simulate(rng)
    test.extra["Mode"] = ["MAN"] * test.t.size
    return test


case(24, "routine control", REFUSE, "no-move")(lambda rng: worked(rng, step=False))


@case(25, "output at the end of its range", CARE, "co-at-range-end")
def _(rng):
    test = simulate(rng)
    test.sheet = {"co": {"low": 0, "high": 45, "unit": "%"}}
    return test


@case(26, "PV at the end of its range", REFUSE, "pv-at-range-end")
def _(rng):
    test = simulate(rng)
    test.pv = np.minimum(test.pv, 57.0)
    test.sheet = {"pv": {"low": 0, "high": 57.0}}
    return test


@case(26, "transmitter in failure", REFUSE, "failure-level")
def _(rng):
    test = simulate(rng, Process(start=12.0, gain=0.5, noise=0.02))
    test.pv[300:330] = 3.5
    return test.text(head="Time (s),CO (%),PV (mA)")


case(27, "not settled, slow lag", HANDLE, "short-hold")(
    lambda rng: simulate(rng, Process(lags=(300.0, 0.5), gain=10.0))
)
case(28, "too short, with dead time", CARE | REFUSE, "hold-too-short")(
    lambda rng: simulate(rng, Process(lags=(40.0, 0.5), dead=30.0), moves=((80, 5), (130, -5)), end=180.0)
)


def rounded(rng, to):
    test = simulate(rng)
    test.pv = np.round(test.pv / to) * to
    return test


case(29, "few steps in the answer", CARE, "quantised-pv")(lambda rng: rounded(rng, 1.25))
case(29, "half the answer one step", REFUSE, "quantised-pv")(lambda rng: rounded(rng, 5.0))

BOTH_WAYS = ((80, 4), (200, 4), (320, -4), (440, -4), (560, 4), (680, 4), (800, -4), (920, -4))
case(30, "play in the final element", CARE, "dead-band")(
    lambda rng: simulate(rng, Process(dead_band=1.5), moves=BOTH_WAYS, end=1040.0)
)
clean(30, "moves both ways", moves=BOTH_WAYS, end=1040.0)
UP = ((80, 2), (200, 2), (320, 2), (440, 2), (560, 2), (680, 2))
case(31, "sticks and jumps", REFUSE | CARE, "sticking")(
    lambda rng: simulate(rng, Process(sticks=3.5), moves=UP, end=800.0)
)
clean(31, "small moves one way", moves=UP, end=800.0)


def cycling(rng, *, size, period):
    test = simulate(rng)
    test.pv = test.pv + size * np.sin(2 * np.pi * test.t / period + rng.uniform(0, 6))
    return test


case(32, "cycles before and during", REFUSE, "oscillation")(lambda rng: cycling(rng, size=1.8, period=30.0))
case(32, "slow cycle", REFUSE, "oscillation")(lambda rng: cycling(rng, size=2.0, period=22.0))
case(33, "hum much faster than the answer", HANDLE)(lambda rng: cycling(rng, size=0.3, period=3.1))


@case(34, "six spikes", HANDLE, "spikes")
def _(rng):
    test = simulate(rng)
    test.pv[rng.permutation(test.t.size)[:6]] += 60.0 * rng.choice([-1, 1], 6)
    return test


case(35, "strong filter in the PV", CARE, "smooth-pv")(
    lambda rng: simulate(
        rng, Process(filtered=10.0, lags=(40.0, 0.5)), moves=((150, 5), (390, -5)), end=640.0
    )
)
clean(35, "no filter", Process(lags=(40.0, 0.5)), moves=((150, 5), (390, -5)), end=640.0)


@case(36, "up and down unlike", CARE, "moves-differ")
def _(rng):
    return simulate(rng, moves=((80, 5), (220, -5)), end=360.0, load=lambda t: np.where(t > 84, 5.0, 0.0))


@case(37, "PV goes the other way than declared", REFUSE, "action-differs")
def _(rng):
    test = simulate(rng, Process(gain=-2.0))
    test.sheet = {"controller": {"action": "reverse"}}
    return test


@case(37, "clean: falls, and the action is direct", USE)
def _(rng):
    test = simulate(rng, Process(gain=-2.0))
    test.sheet = {"controller": {"action": "direct"}}
    return test


#: Other processes that are to be let through wherever a row has no twin of its own.
_TWINS = [
    ("usual", Process()),
    ("fast", Process(lags=(12.0, 0.5), dead=2.0)),
    ("slow", Process(lags=(35.0, 0.5), dead=6.0)),
    ("two lags", Process(lags=(15.0, 8.0))),
    ("noisy", Process(noise=0.4)),
    ("falls", Process(gain=-1.5)),
    ("long dead time", Process(lags=(15.0, 0.5), dead=15.0)),
    ("large gain", Process(gain=6.0, noise=0.3)),
    ("quiet", Process(noise=0.01)),
]
for _row in range(1, 38):
    if not any(c.row == _row and c.verdicts == USE for c in CASES):
        _name, _process = _TWINS[_row % len(_TWINS)]
        clean(_row, _name, _process)
