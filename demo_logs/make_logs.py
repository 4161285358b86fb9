"""Make the Emberfold mushroom farm's logs, the same bytes every time.

Run ``python demo_logs/make_logs.py`` to rewrite the logs and ``truth.json`` beside this
file, or give another folder as the one argument.

The simulation is its own: the state is carried exactly from one event to the next (a row
of the log, or a CO move arriving after its dead time), so no dead time is rounded to a
sample and no integration step enters. It shares no code with the packages it tests.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path

import numpy as np
from scipy.linalg import expm
from scipy.signal import tf2ss

HERE = Path(__file__).parent


@dataclass(frozen=True, kw_only=True)
class Truth:
    """Transfer function, PV unit per CO unit: numerator / denominator * exp(-dead_time s)."""

    numerator: tuple[float, ...]
    denominator: tuple[float, ...]
    dead_time: float


@dataclass(frozen=True, kw_only=True)
class Noise:
    """What the transmitter adds, in PV units."""

    white: float  # standard deviation of the fast part
    slow: float = 0.0  # standard deviation of the correlated part
    correlation: float = 1.0  # its correlation time [s]
    wave: float = 0.0  # amplitude of a periodic part
    period: float = 1.0  # its period [s]
    drift: float = 0.0  # straight line [PV unit/s]


@dataclass(frozen=True, kw_only=True)
class Demo:
    """One loop, its test and the way its logger writes."""

    name: str
    tag: str
    seed: int
    truth: Truth
    noise: Noise
    t: np.ndarray  # logged times [s]
    pv: float  # level before the test
    moves: tuple[tuple[float, float], ...]  # (time [s], CO from then on); the first is the start
    pv_step: float  # smallest change the transmitter shows
    write: Callable[[Demo, Run], str]
    start: str = "2026-03-03T06:00:00"
    missing: tuple[int, ...] = ()  # rows without a PV
    automatic: Automatic | None = None


@dataclass(frozen=True, kw_only=True)
class Automatic:
    """A PI controller in standard form, direct acting, and the set points it was given."""

    gain: float  # [CO unit / PV unit]
    integral: float  # [s]
    scan: float  # [s]
    setpoints: tuple[tuple[float, float], ...]  # (time [s], SP from then on)


@dataclass(frozen=True, kw_only=True)
class Run:
    """Signals at the logged times, before the transmitter rounds them."""

    pv: np.ndarray
    co: np.ndarray
    sp: np.ndarray


class Plant:
    """A rational process carried exactly over any interval with its input held."""

    def __init__(self, truth: Truth) -> None:
        a, b, c, _ = tf2ss(truth.numerator, truth.denominator)
        self._n = len(a)
        self._block = np.zeros((self._n + 1, self._n + 1))
        self._block[: self._n, : self._n] = a
        self._block[: self._n, self._n :] = b
        self._c = c[0]
        self._known: dict[float, np.ndarray] = {}
        self.state = np.zeros(self._n)

    def advance(self, dt: float, u: float) -> None:
        """Carry the state over `dt` seconds with the input held at `u`."""
        key = round(dt, 9)
        if key <= 0.0:
            return
        if key not in self._known:
            self._known[key] = expm(self._block * key)
        step = self._known[key]
        self.state = step[: self._n, : self._n] @ self.state + step[: self._n, self._n] * u

    @property
    def output(self) -> float:
        """PV's deviation from its start."""
        return float(self._c @ self.state)


def held(changes: Sequence[tuple[float, float]], t: float) -> float:
    """Value in force at time `t`."""
    return [value for at, value in changes if at <= t + 1e-9][-1]


def disturbance(noise: Noise, t: np.ndarray, rng: np.random.RandomState) -> np.ndarray:
    """Noise, slow noise, waves and drift at the logged times."""
    fast = noise.white * rng.standard_normal(t.size)
    slow = np.zeros(t.size)
    kicks = rng.standard_normal(t.size)
    slow[0] = kicks[0]
    for i, keep in enumerate(np.exp(-np.diff(t) / noise.correlation), start=1):
        slow[i] = keep * slow[i - 1] + np.sqrt(1.0 - keep**2) * kicks[i]
    wave = noise.wave * np.sin(2.0 * np.pi * t / noise.period)
    return fast + noise.slow * slow + wave + noise.drift * t


def in_manual(demo: Demo, rng: np.random.RandomState) -> Run:
    """Bump the CO by hand and watch."""
    plant = Plant(demo.truth)
    rest = demo.moves[0][1]
    arrivals = [(at + demo.truth.dead_time, co - rest) for at, co in demo.moves]
    arrivals[0] = (-np.inf, 0.0)
    now, response = float(demo.t[0]), np.empty(demo.t.size)
    for i, row in enumerate(demo.t):
        for at in [at for at, _ in arrivals if now < at < row]:
            plant.advance(at - now, held(arrivals, now))
            now = at
        plant.advance(row - now, held(arrivals, now))
        now = float(row)
        response[i] = plant.output
    co = np.array([held(demo.moves, row) for row in demo.t])
    pv = demo.pv + response + disturbance(demo.noise, demo.t, rng)
    return Run(pv=pv, co=co, sp=np.full(demo.t.size, demo.pv))


def under_control(demo: Demo, rng: np.random.RandomState) -> Run:
    """Leave the controller in automatic and move the set point; it sees the noise too."""
    auto = demo.automatic
    assert auto is not None
    plant = Plant(demo.truth)
    rest = demo.moves[0][1]
    scans = np.arange(0.0, demo.t[-1] + auto.scan / 2, auto.scan)
    added = disturbance(demo.noise, scans, rng)
    outputs: list[tuple[float, float]] = [(-np.inf, 0.0)]
    pv, co, sp = np.empty(scans.size), np.empty(scans.size), np.empty(scans.size)
    integral, now = 0.0, 0.0
    for i, scan in enumerate(scans):
        for at in [at for at, _ in outputs if now < at < scan]:
            plant.advance(at - now, held(outputs, now))
            now = at
        plant.advance(scan - now, held(outputs, now))
        now = float(scan)
        sp[i] = held(auto.setpoints, scan)
        pv[i] = demo.pv + plant.output + added[i]
        error = pv[i] - sp[i]  # direct acting: more air when the heap is too warm
        integral += error * auto.scan / auto.integral
        move = float(np.clip(auto.gain * (error + integral), -rest, 100.0 - rest))
        co[i] = rest + move
        outputs = [*outputs[-200:], (scan + demo.truth.dead_time, move)]
    rows = np.round(demo.t / auto.scan).astype(int)
    return Run(pv=pv[rows], co=co[rows], sp=sp[rows])


def stamp(demo: Demo, row: float, form: str) -> str:
    """Wall-clock time of a row."""
    return (datetime.fromisoformat(demo.start) + timedelta(seconds=round(float(row), 3))).strftime(form)


def pv_text(demo: Demo, i: int, run: Run) -> str:
    """PV as the transmitter shows it, empty where the logger dropped it."""
    if i in demo.missing:
        return ""
    decimals = len(f"{demo.pv_step:g}".partition(".")[2])
    return f"{round(run.pv[i] / demo.pv_step) * demo.pv_step:.{decimals}f}"


def comma_iso(demo: Demo, run: Run) -> str:
    """Write a historian export: ISO time stamps with the zone, set point, mode."""
    mode = "AUTO" if demo.automatic else "MAN"
    lines = [f"Timestamp,{demo.tag}.SP,{demo.tag}.PV,{demo.tag}.CO,{demo.tag}.MODE"]
    for i, row in enumerate(demo.t):
        clock = stamp(demo, row, "%Y-%m-%dT%H:%M:%S+00:00")
        lines.append(f"{clock},{run.sp[i]:.1f},{pv_text(demo, i, run)},{run.co[i]:.1f},{mode}")
    return "\n".join(lines) + "\n"


def comma_iso_uneven(demo: Demo, run: Run) -> str:
    """Write a polled logger: stamps to the millisecond, uneven, some readings lost."""
    lines = ["Time,Sump level (mm),Inlet valve (%)"]
    for i, row in enumerate(demo.t):
        clock = stamp(demo, row, "%Y-%m-%d %H:%M:%S.%f")[:-3]
        lines.append(f"{clock},{pv_text(demo, i, run)},{run.co[i]:.1f}")
    return "\n".join(lines) + "\n"


def semicolon_elapsed(demo: Demo, run: Run) -> str:
    """Write a hand-held logger: elapsed seconds, semicolons, decimal commas, CR LF."""
    lines = ["Elapsed (s);Air flow (m3/h);Damper (%)"]
    for i, row in enumerate(demo.t):
        lines.append(f"{row:.1f};{pv_text(demo, i, run)};{run.co[i]:.1f}".replace(".", ","))
    return "\r\n".join(lines) + "\r\n"


def semicolon_dotted(demo: Demo, run: Run) -> str:
    """Write a spreadsheet export: day.month.year, semicolons, decimal commas, CR LF."""
    lines = ["Date and time;CO2 hall 2 [ppm];Ventilation [%];Set point [ppm]"]
    for i, row in enumerate(demo.t):
        values = f"{pv_text(demo, i, run)};{run.co[i]:.1f};{run.sp[i]:.0f}".replace(".", ",")
        lines.append(f"{stamp(demo, row, '%d.%m.%Y %H:%M:%S')};{values}")
    return "\r\n".join(lines) + "\r\n"


def tab_minutes(demo: Demo, run: Run) -> str:
    """Write a panel recorder: tabs, decimal minutes, a row of units under the names."""
    lines = ["Time\tHall temp\tHeating valve", "min\tdegC\t%"]
    for i, row in enumerate(demo.t):
        lines.append(f"{row / 60.0:.4f}\t{pv_text(demo, i, run)}\t{run.co[i]:.1f}")
    return "\n".join(lines) + "\n"


def preamble(demo: Demo, run: Run) -> str:
    """Write a boiler panel: comment lines first, then names with units."""
    lines = [
        "# Boiler house trend export",
        f"# Started {demo.start.replace('T', ' ')}, interval 1 s",
        "#",
        "Seconds,LIC-402 level [mm],LIC-402 output [%],Mode",
    ]
    for i, row in enumerate(demo.t):
        lines.append(f"{row:.0f},{pv_text(demo, i, run)},{run.co[i]:.1f},MANUAL")
    return "\n".join(lines) + "\n"


def bare(demo: Demo, run: Run) -> str:
    """Write a drive's trace memory: elapsed seconds and numbers, no header."""
    lines = [f"{row:.3f},{run.co[i]:.2f},{pv_text(demo, i, run)}" for i, row in enumerate(demo.t)]
    return "\n".join(lines) + "\n"


def even(length: float, interval: float) -> np.ndarray:
    """Rows at a fixed interval [s]."""
    return np.round(np.arange(0.0, length + interval / 2, interval), 6)


def uneven(length: float, seed: int) -> np.ndarray:
    """Rows every 1.4 to 3.4 s, to the millisecond."""
    rng = np.random.RandomState(seed)  # its stream is promised never to change
    t = np.concatenate([[0.0], np.cumsum(rng.uniform(1.4, 3.4, int(length)))])
    return np.round(t[t <= length], 3)


def tunnel(gain: float) -> Truth:
    """Steam valve to tunnel air temperature, degC per %."""
    return Truth(numerator=(gain,), denominator=(230.0, 1.0), dead_time=38.0)


SUMP = Truth(numerator=(0.021,), denominator=(1.0, 0.0), dead_time=9.0)

DEMOS = (
    Demo(
        name="tunnel_air_temperature", tag="TIC-101", seed=101, write=comma_iso,
        truth=tunnel(0.82), noise=Noise(white=0.04, slow=0.05, correlation=25.0, drift=4e-5),
        t=even(7800, 5), pv=57.4, pv_step=0.05,
        moves=((0.0, 41.0), (900.0, 47.0), (2700.0, 41.0), (4400.0, 35.0), (6200.0, 41.0)),
    ),
    Demo(
        name="make_up_air_flow", tag="FIC-210", seed=210, write=semicolon_elapsed,
        truth=Truth(numerator=(27.0,), denominator=(2.6, 1.0), dead_time=0.7),
        noise=Noise(white=9.0, slow=11.0, correlation=0.5, drift=0.03),
        t=even(220, 0.2), pv=1480.0, pv_step=1.0,
        moves=((0.0, 52.0), (40.0, 60.0), (85.0, 52.0), (130.0, 45.0), (175.0, 52.0)),
    ),
    Demo(
        name="sump_level", tag="LIC-305", seed=305, write=comma_iso_uneven,
        truth=SUMP, noise=Noise(white=0.9, slow=0.7, correlation=6.0, drift=0.003),
        t=uneven(2500, 3051), pv=642.0, pv_step=0.5, missing=(118, 119, 603),
        moves=((0.0, 38.0), (300.0, 48.0), (660.0, 38.0), (900.0, 28.0), (1260.0, 38.0),
               (1500.0, 46.0), (1800.0, 38.0), (2000.0, 30.0), (2300.0, 38.0)),
        start="2026-03-10T13:20:00",
    ),
    Demo(
        name="hall_temperature_long_duct", tag="TIC-330", seed=330, write=tab_minutes,
        truth=Truth(numerator=(0.31,), denominator=(75.0, 1.0), dead_time=290.0),
        noise=Noise(white=0.03, slow=0.04, correlation=60.0, drift=3e-5),
        t=even(9900, 9), pv=17.8, pv_step=0.02,
        moves=((0.0, 34.0), (1500.0, 46.0), (3600.0, 34.0), (5700.0, 24.0), (7800.0, 34.0)),
    ),
    Demo(
        name="boiler_drum_level", tag="LIC-402", seed=402, write=preamble,
        truth=Truth(numerator=(-0.99, 0.055), denominator=(6.0, 1.0, 0.0), dead_time=2.0),
        noise=Noise(white=0.5, slow=0.5, correlation=3.0, drift=0.004),
        t=even(900, 1), pv=-12.0, pv_step=0.25,
        moves=((0.0, 55.0), (120.0, 63.0), (210.0, 55.0), (330.0, 47.0), (420.0, 55.0),
               (560.0, 64.0), (640.0, 55.0), (740.0, 46.0), (820.0, 55.0)),
        start="2026-04-14 09:05:00",
    ),
    Demo(
        name="spawn_conveyor_speed", tag="SIC-510", seed=510, write=bare,
        truth=Truth(numerator=(0.24 * 81.0,), denominator=(1.0, 2 * 0.32 * 9.0, 81.0), dead_time=0.045),
        noise=Noise(white=0.02, slow=0.02, correlation=0.05, drift=0.002),
        t=even(24, 0.02), pv=9.6, pv_step=0.01,
        moves=((0.0, 40.0), (3.0, 48.0), (8.0, 40.0), (13.0, 30.0), (18.5, 40.0)),
    ),
    Demo(
        name="hall_co2_ventilation", tag="AIC-340", seed=340, write=semicolon_dotted,
        truth=Truth(numerator=(-21.0,), denominator=(440.0, 1.0), dead_time=95.0),
        noise=Noise(white=5.0, slow=6.0, correlation=40.0, drift=-0.002),
        t=even(12600, 10), pv=1210.0, pv_step=1.0,
        moves=((0.0, 35.0), (1500.0, 43.0), (4200.0, 35.0), (7200.0, 28.0), (9900.0, 35.0)),
        start="2026-05-06T05:30:00",
    ),
    Demo(
        name="tunnel_air_temperature_year_later", tag="TIC-101", seed=1012, write=comma_iso,
        truth=tunnel(1.6 * 0.82), noise=Noise(white=0.04, slow=0.06, correlation=25.0, drift=-5e-5),
        t=even(7800, 5), pv=57.8, pv_step=0.05,
        moves=((0.0, 27.0), (900.0, 31.0), (2700.0, 27.0), (4400.0, 23.0), (6200.0, 27.0)),
        start="2027-03-09T06:30:00",
    ),
    Demo(
        name="heap_temperature_in_automatic", tag="TIC-120", seed=120, write=comma_iso,
        truth=Truth(numerator=(-0.55,), denominator=(1900.0, -1.0), dead_time=130.0),
        noise=Noise(white=0.05, slow=0.06, correlation=120.0),
        t=even(36000, 30), pv=61.5, pv_step=0.05, moves=((0.0, 46.0),),
        automatic=Automatic(gain=7.0, integral=4200.0, scan=10.0,
                            setpoints=((0.0, 61.5), (7200.0, 60.0), (22200.0, 61.5))),
        start="2026-06-18T04:00:00",
    ),
    Demo(
        name="sump_level_refused", tag="LIC-305", seed=3059, write=comma_iso_uneven,
        truth=SUMP, noise=Noise(white=3.0, slow=5.0, correlation=25.0, wave=4.0, period=47.0),
        t=uneven(900, 3052), pv=655.0, pv_step=0.5,
        moves=((0.0, 38.0), (240.0, 39.0), (330.0, 38.0), (540.0, 37.0), (630.0, 38.0)),
        start="2026-03-10T10:45:00",
    ),
)  # fmt: skip


def make(demo: Demo) -> str:
    """Simulate one loop and write its log as text."""
    rng = np.random.RandomState(demo.seed)  # its stream is promised never to change
    simulate = under_control if demo.automatic else in_manual
    return demo.write(demo, simulate(demo, rng))


def truth_of(demo: Demo) -> dict[str, object]:
    """Collect what a reader may hold the answers against."""
    entry: dict[str, object] = {
        "tag": demo.tag,
        "numerator": demo.truth.numerator,
        "denominator": demo.truth.denominator,
        "dead_time_s": demo.truth.dead_time,
        "noise_white_sd": demo.noise.white,
        "noise_slow_sd": demo.noise.slow,
        "noise_slow_correlation_s": demo.noise.correlation,
        "wave_amplitude": demo.noise.wave,
        "wave_period_s": demo.noise.period,
        "drift_per_s": demo.noise.drift,
        "pv_step": demo.pv_step,
        "pv_start": demo.pv,
        "rows": demo.t.size,
    }
    if demo.automatic:
        entry["controller"] = {
            "equation": "standard PI, direct acting",
            "gain_engineering": demo.automatic.gain,
            "integral_s": demo.automatic.integral,
            "scan_s": demo.automatic.scan,
            "setpoints": demo.automatic.setpoints,
        }
    else:
        entry["moves"] = demo.moves
    return entry


def main(folder: Path) -> None:
    """Write every log and the truth into `folder`."""
    for demo in DEMOS:
        (folder / f"{demo.name}.csv").write_bytes(make(demo).encode("utf-8"))
    truth = {demo.name: truth_of(demo) for demo in DEMOS}
    (folder / "truth.json").write_text(json.dumps(truth, indent=2) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else HERE)
