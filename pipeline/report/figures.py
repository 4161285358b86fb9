"""The report's figures: the only module that draws.

Palette
-------
Four inks on white, told apart by lightness first and hue second, so that they stay apart in
grey print and for every common colour-vision deficiency (blue against orange is the pair all
of them keep):

=========  =========  ==========================================  =============
name       hex        use                                         L* (0 black)
=========  =========  ==========================================  =============
INK        ``#16324f``  what the model says: fit, prediction, loop  20
OUTPUT     ``#b4541a``  the controller output                       46
MEASURED   ``#8d969e``  what was logged                             62
BAND       ``#cfdce6``  the plausible processes, filled             87
=========  =========  ==========================================  =============

Lines carry their names at their ends; there are no legend boxes. Axes are hairlines on the
left and the bottom only.
"""

from __future__ import annotations

import io
import math
import re
from collections.abc import Callable
from typing import TYPE_CHECKING

import matplotlib
import numpy as np
from matplotlib.figure import Figure

from fitters.process import ProcessModel
from pipeline.loop.controller import loop_response
from pipeline.loop.types import Controller
from pipeline.report import numbers

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from numpy.typing import NDArray

    from pipeline.record import BumpInfo, Record, Series

INK = "#16324f"
OUTPUT = "#b4541a"
MEASURED = "#8d969e"
BAND = "#cfdce6"
FRAME = "#5d676f"

#: Text width of an A4 page between 20 mm margins [inch]: figures are never scaled.
_WIDTH = 6.7

#: Points of the frequency response drawn: one a pixel over two decades.
_FREQUENCIES = 700


def draw(name: str, record: Record) -> Figure:
    """Draw one figure.

    Parameters
    ----------
    name : str
        A key of `FIGURES`.
    record : Record

    Returns
    -------
    Figure
        Not saved, not shown.
    """
    return FIGURES[name](record)


def svg(name: str, record: Record) -> str:
    """Draw one figure as an SVG element, the same text each time.

    Text stays text in the font of whatever holds the element; ids are unique to the figure.

    Parameters
    ----------
    name : str
        Key of `FIGURES`.
    record : Record
    """
    buffer = io.StringIO()
    with matplotlib.rc_context({"svg.hashsalt": name, "svg.fonttype": "none"}):
        draw(name, record).savefig(buffer, format="svg", metadata={"Date": None, "Creator": None})
    return _slim(buffer.getvalue())


def _slim(text: str) -> str:
    """Keep the element alone: no prolog, no unused ids, hundredths of a point, inherited font."""
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    text = re.sub(r"<style.*?</style>", "", text, flags=re.DOTALL)  # it would reach beyond the element
    text = text.replace("<svg ", '<svg style="stroke-linejoin: round; stroke-linecap: butt" ', 1)
    text = re.sub(r"<!--.*?-->", "", text, flags=re.DOTALL)
    used = set(re.findall(r"#([\w.-]+)", text))
    text = re.sub(r' id="([\w.-]+)"', lambda m: m[0] if m[1] in used else "", text)
    text = re.sub(r"font-family: [^;\"]+;? ?", "", text)
    text = re.sub(r"font: ([\d.]+)px [^;\"]+", r"font-size: \1px", text)
    text = re.sub(r"-?\d+\.\d{3,}", lambda m: f"{float(m[0]):.2f}".rstrip("0").rstrip("."), text)
    return re.sub(r"\n\s*", "\n", text).strip() + "\n"


def _axes_of(figure: Figure, heights: tuple[float, ...]) -> list[Axes]:
    grid = figure.add_gridspec(len(heights), 1, height_ratios=heights, hspace=0.3)
    axes: list[Axes] = []
    for row in range(len(heights)):
        axes.append(figure.add_subplot(grid[row, 0], sharex=axes[0] if axes else None))
    for upper in axes[:-1]:
        upper.tick_params(labelbottom=False)
    for each in axes:
        _plain_frame(each)
    return axes


def _plain_frame(axes: Axes) -> None:
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        axes.spines[side].set_linewidth(0.5)
        axes.spines[side].set_color(FRAME)
    axes.tick_params(width=0.5, length=2.5, color=FRAME, labelcolor=FRAME, labelsize=8, which="both")
    axes.tick_params(length=1.5, which="minor")


def _name_axis(axes: Axes, text: str, color: str = FRAME) -> None:
    """Write what an axis shows above its upper end, reading across."""
    axes.text(0.0, 1.03, text, transform=axes.transAxes, fontsize=8, color=color, va="bottom", ha="left")


def _gappy(values: tuple[float | None, ...]) -> NDArray[np.float64]:
    return np.array([math.nan if v is None else v for v in values], dtype=float)


def _log(record: Record) -> Figure:
    return traces(record.series, record.bumps, record.log.span_s)


def traces(series: Series, bumps: tuple[BumpInfo, ...], span: float) -> Figure:
    """Draw the PV with its fit, what is left over, and the CO, over the log.

    Parameters
    ----------
    series : Series
    bumps : tuple of BumpInfo
    span : float
        Length of the log [s].

    Returns
    -------
    Figure
        Not saved, not shown.
    """
    scale, unit = numbers.time_unit(span)
    t = np.asarray(series.t_s) / scale
    pv_unit, co_unit = series.pv_unit or "PV unit", series.co_unit or "CO unit"
    fitted = series.fitted is not None and series.residual is not None
    figure = Figure(figsize=(_WIDTH, 4.0 if fitted else 3.1))
    figure.subplots_adjust(left=0.085, right=0.985, top=0.94, bottom=0.11 if fitted else 0.14)
    axes = _axes_of(figure, (3.0, 1.1, 1.2) if fitted else (3.0, 1.2))
    upper, lower = axes[0], axes[-1]
    for axis in axes:
        for bump in bumps:
            for move in bump.moves[:12]:  # a busy CO would fill the page with marks
                axis.axvline(move.at_s / scale, color=BAND, linewidth=0.7, zorder=0)
    upper.plot(t, _gappy(series.pv), color=MEASURED, linewidth=0.9)
    _name_axis(upper, f"PV [{pv_unit}]: logged{', and fitted in dark' if fitted else ''}")
    if fitted:
        assert series.fitted is not None and series.residual is not None
        upper.plot(t, _gappy(series.fitted), color=INK, linewidth=1.3)
        middle = axes[1]
        middle.plot(t, _gappy(series.residual), color=MEASURED, linewidth=0.7)
        middle.axhline(0.0, color=INK, linewidth=0.6)
        middle.locator_params(axis="y", nbins=4)
        _name_axis(middle, f"residual [{pv_unit}]")
    lower.step(t, series.co, where="post", color=OUTPUT, linewidth=1.2)
    lower.margins(y=0.15)
    lower.locator_params(axis="y", nbins=4)
    _name_axis(lower, f"CO [{co_unit}]", OUTPUT)
    for bump in bumps:
        if not bump.used:
            for axis in axes:
                axis.axvspan(
                    bump.start_s / scale,
                    bump.end_s / scale,
                    facecolor="none",
                    hatch="//",
                    edgecolor=BAND,
                    linewidth=0.0,
                    zorder=0,
                )
            upper.text(
                (bump.start_s + bump.end_s) / 2 / scale,
                0.97,
                "not used",
                transform=upper.get_xaxis_transform(),
                fontsize=8,
                color=FRAME,
                ha="center",
                va="top",
            )
    lower.set_xlim(t[0], t[-1])
    lower.set_xlabel(f"time from the first row [{unit}]", fontsize=8, color=FRAME)
    return figure


def _step(record: Record) -> Figure:
    """Predicted set-point step with its band, and the CO it takes."""
    assert record.prediction is not None
    response = record.prediction.setpoint
    end = _interesting_end(record)
    scale, unit = numbers.time_unit(end)
    t = np.asarray(response.t_s) / scale
    figure = Figure(figsize=(_WIDTH, 3.1))
    figure.subplots_adjust(left=0.085, right=0.985, top=0.92, bottom=0.13)
    upper, lower = _axes_of(figure, (2.6, 1.3))
    if response.low is not None and response.high is not None:
        upper.fill_between(t, response.low, response.high, color=BAND, linewidth=0)
    upper.axhline(1.0, color=MEASURED, linewidth=0.8, dashes=(4, 3))
    upper.plot(t, response.pv, color=INK, linewidth=1.4)
    _name_axis(upper, "PV after a set-point step of 1, with the 5 to 95 % band of plausible processes")
    lower.plot(t, response.co, color=OUTPUT, linewidth=1.2)
    lower.locator_params(axis="y", nbins=4)
    _name_axis(lower, _per(record, "CO"), OUTPUT)
    lower.set_xlim(0.0, min(end / scale, t[-1]))
    lower.set_xlabel(f"time after the step [{unit}]", fontsize=8, color=FRAME)
    return figure


def _interesting_end(record: Record) -> float:
    """End the plot a while after the response has settled [s]."""
    assert record.prediction is not None
    last = record.prediction.setpoint.t_s[-1]
    settled = record.prediction.settling_s
    return last if math.isinf(settled) else min(2.5 * settled, last)


def _per(record: Record, name: str) -> str:
    pv, co = record.series.pv_unit or "PV unit", record.series.co_unit or "CO unit"
    return f"{name} [{co} per {pv} of the step]"


def _loop(record: Record) -> Figure:
    """The loop's frequency response: the plane near -1 on the left, magnitude and phase on the right."""
    assert record.margins is not None
    omega = _grid(record)
    response = _loop_response(record, omega)
    figure = Figure(figsize=(_WIDTH, 3.2))
    grid = figure.add_gridspec(
        2,
        2,
        width_ratios=(1.0, 1.15),
        left=0.065,
        right=0.985,
        top=0.92,
        bottom=0.13,
        wspace=0.22,
        hspace=0.3,
    )
    _plane(figure.add_subplot(grid[:, 0]), record, response)
    magnitude = figure.add_subplot(grid[0, 1])
    phase = figure.add_subplot(grid[1, 1], sharex=magnitude)
    _bode(magnitude, phase, record, omega, response)
    return figure


def _plane(axes: Axes, record: Record, response: NDArray[np.complex128]) -> None:
    m = record.margins
    assert m is not None
    _plain_frame(axes)
    angle = np.linspace(0.0, 2.0 * np.pi, 181)
    axes.plot(np.cos(angle), np.sin(angle), color=MEASURED, linewidth=0.6, dashes=(3, 3))
    radius = 1.0 / m.max_sensitivity
    axes.fill(
        -1.0 + radius * np.cos(angle), radius * np.sin(angle), facecolor=BAND, edgecolor=INK, linewidth=0.5
    )
    axes.plot(response.real, response.imag, color=INK, linewidth=1.4)
    axes.plot([-1.0], [0.0], marker="+", color=OUTPUT, markersize=9, markeredgewidth=1.3, linestyle="none")
    axes.text(-1.1, -0.05, "−1", fontsize=8, color=OUTPUT, ha="right", va="top")
    axes.annotate(
        f"no closer than 1/Ms = {numbers.plain(radius)}",
        (-1.0 - radius * 0.5, radius * 0.86),
        xytext=(-2.1, 1.28),
        fontsize=8,
        color=INK,
        va="center",
        arrowprops={"arrowstyle": "-", "linewidth": 0.5, "color": INK},
    )
    if math.isfinite(m.gain_crossover):
        point = _loop_response(record, np.array([m.gain_crossover]))[0]
        axes.plot([0.0, point.real], [0.0, point.imag], color=OUTPUT, linewidth=0.8)
        axes.plot([point.real], [point.imag], marker="o", markersize=4, color=OUTPUT, linestyle="none")
        axes.annotate(
            f"phase margin {numbers.plain(m.phase_margin_deg, digits=2)}°",
            (point.real, point.imag),
            xytext=(6, -9),
            textcoords="offset points",
            fontsize=8,
            color=OUTPUT,
            bbox={"facecolor": "white", "edgecolor": "none", "pad": 1.0},
        )
    axes.axhline(0.0, color=FRAME, linewidth=0.4)
    axes.axvline(0.0, color=FRAME, linewidth=0.4)
    axes.set_xlim(-2.2, 1.1)
    axes.set_ylim(-2.0, 1.45)
    axes.set_aspect("equal")
    axes.set_xticks([-2, -1, 0, 1])
    axes.set_yticks([-2, -1, 0, 1])
    _name_axis(axes, "loop response in the complex plane")


def _bode(
    magnitude: Axes, phase: Axes, record: Record, omega: NDArray[np.float64], response: NDArray[np.complex128]
) -> None:
    m = record.margins
    assert m is not None
    for each in (magnitude, phase):
        _plain_frame(each)
    magnitude.loglog(omega, np.abs(response), color=INK, linewidth=1.4)
    magnitude.axhline(1.0, color=MEASURED, linewidth=0.6, dashes=(3, 3))
    degrees = _degrees_near(record, omega, response)
    phase.semilogx(omega, degrees, color=INK, linewidth=1.4)
    phase.axhline(-180.0, color=MEASURED, linewidth=0.6, dashes=(3, 3))
    if math.isfinite(m.gain_crossover):
        at = float(np.interp(m.gain_crossover, omega, degrees))
        phase.plot([m.gain_crossover] * 2, [-180.0, at], color=OUTPUT, linewidth=1.2)
        phase.text(
            m.gain_crossover * 0.9,
            (at - 180.0) / 2,
            f"{numbers.plain(m.phase_margin_deg, digits=2)}°",
            fontsize=8,
            color=OUTPUT,
            ha="right",
            va="center",
        )
    if math.isfinite(m.phase_crossover) and math.isfinite(m.gain_margin):
        magnitude.plot([m.phase_crossover] * 2, [1.0 / m.gain_margin, 1.0], color=OUTPUT, linewidth=1.2)
        magnitude.text(
            1.15 * m.phase_crossover,
            1.0,
            f"gain margin {numbers.plain(m.gain_margin, digits=2)}",
            fontsize=8,
            color=OUTPUT,
            va="bottom",
        )
    phase.set_ylim(-300.0, 0.0)
    phase.set_yticks([-270, -180, -90, 0])
    magnitude.set_xlim(omega[0], omega[-1])
    magnitude.tick_params(labelbottom=False)
    _name_axis(magnitude, "magnitude")
    _name_axis(phase, "phase [degrees]")
    phase.set_xlabel("frequency [rad/s]", fontsize=8, color=FRAME)


def _degrees_near(
    record: Record, omega: NDArray[np.float64], response: NDArray[np.complex128]
) -> NDArray[np.float64]:
    """Unwrap the phase so that at the gain crossover it lies between -360 and 0 degrees."""
    assert record.margins is not None
    degrees = np.degrees(np.unwrap(np.angle(response)))
    anchor = record.margins.gain_crossover
    at = float(np.interp(anchor, omega, degrees)) if math.isfinite(anchor) else float(degrees[0])
    return degrees - 360.0 * math.ceil(at / 360.0)


def _grid(record: Record) -> NDArray[np.float64]:
    assert record.margins is not None and record.prediction is not None
    m = record.margins
    # dead time makes phase crossings without end: only the one of the gain margin sets the view
    known = [c.omega for c in m.crossings if c.kind == "gain" and math.isfinite(c.omega) and c.omega > 0]
    known += [w for w in (m.gain_crossover, m.phase_crossover) if math.isfinite(w) and w > 0]
    if not known:  # the loop never crosses: its response time gives the scale
        known = [2.0 / record.prediction.rise_s if math.isfinite(record.prediction.rise_s) else 1.0]
    return np.geomspace(min(known) / 10.0, max(known) * 14.0, _FREQUENCIES)


def _loop_response(record: Record, omega: NDArray[np.float64]) -> NDArray[np.complex128]:
    assert record.model is not None and record.controller is not None
    m, c = record.model, record.controller
    process = ProcessModel(numerator=m.numerator, denominator=m.denominator, dead_time=m.dead_time_s)
    controller = Controller(
        kind=c.kind,
        gain=c.gain_engineering,
        action=c.action,
        integral_time=c.integral_s,
        derivative_time=c.derivative_s,
        derivative_filter=c.filter_s,
        pv_filter=c.pv_filter_s,
        scan=c.scan_s,
        compute_delay=c.compute_delay_s,
    )
    return loop_response(process, controller, omega)


#: Every figure a report can hold, by the name its outline uses.
FIGURES: dict[str, Callable[[Record], Figure]] = {"log": _log, "step": _step, "loop": _loop}
