"""Margins on random loops against python-control and against exact inequalities."""

import control
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fitters.process import ProcessModel
from pipeline.loop.controller import loop_response
from pipeline.loop.forms import Entry, enter, understand
from pipeline.loop.margins import batch_margins, margins
from pipeline.loop.simulate import stable_in_time
from pipeline.loop.types import Controller

log = st.floats(-1.5, 1.5).map(np.exp)


@st.composite
def loops(draw, dead=True):
    den = np.polymul([draw(log), 1.0], [draw(log), 1.0])
    if draw(st.booleans()):
        den = np.polymul(den, [1.0, 0.0])
    num = (draw(st.floats(-1.0, 1.0).map(lambda x: round(x, 2))), 1.0)
    model = ProcessModel(numerator=num, denominator=tuple(den), dead_time=draw(log) if dead else 0.0)
    td = 0.2 * draw(log)
    c = Controller(
        kind="PID",
        gain=draw(log),
        action="reverse",
        integral_time=4.0 * draw(log),
        derivative_time=td,
        derivative_filter=0.1 * td,
    )
    return model, c


@settings(max_examples=150, deadline=None, derandomize=True)
@given(loops(dead=False))
def test_rational_loops_agree_with_python_control(loop):
    model, c = loop
    m = margins(model, c)
    s = control.tf("s")
    law = c.gain * (1 + 1 / (c.integral_time * s) + c.derivative_time * s / (1 + c.derivative_filter * s))
    whole = law * model.to_control()
    top, bottom = whole.num[0][0], whole.den[0][0]
    poles = np.roots(np.polyadd(top, bottom))
    if np.min(np.abs(poles.real) / np.abs(poles)) < 1e-6:
        return
    assert m.stable == bool(np.all(poles.real < 0.0))
    if not m.stable:
        return
    gm, pm, _, _, _, _ = control.stability_margins(whole, returnall=True)
    if len(pm):
        assert m.phase_margin == pytest.approx(np.min(np.abs(pm)), abs=1e-6)
    ups = [g for g in gm if g > 1.0]
    assert m.gain_margin == pytest.approx(min(ups, default=np.inf), rel=1e-6)


@settings(max_examples=150, deadline=None, derandomize=True)
@given(loops())
def test_sensitivity_bounds_the_margins_and_both_domains_agree(loop):
    # GM >= Ms/(Ms-1), PM >= 2 asin(1/(2 Ms)): Skogestad and Postlethwaite (2005), eq. 2.46-2.47.
    model, c = loop
    m = margins(model, c)
    if not m.stable:
        assert (m.phase_margin, m.gain_margin) == (0.0, 1.0)
        return
    ms = m.max_sensitivity
    assert m.gain_margin >= ms / (ms - 1.0) * (1.0 - 1e-9)
    assert m.phase_margin >= np.degrees(2.0 * np.arcsin(0.5 / ms)) - 1e-7
    assert m.gain_reduction_margin <= ms / (ms + 1.0) * (1.0 + 1e-9)
    w = np.geomspace(1e-3, 1e3, 4000)
    assert ms >= np.max(1.0 / np.abs(1.0 + loop_response(model, c, w))) * (1.0 - 1e-9)
    table = batch_margins([model], c)
    assert table.phase_margin[0] == pytest.approx(m.phase_margin, abs=0.01)
    assert table.max_sensitivity[0] == pytest.approx(ms, rel=1e-4)
    if m.gain_margin > 1.01 and m.gain_reduction_margin < 0.99:
        assert stable_in_time(model, c)


@settings(max_examples=200, deadline=None, derandomize=True)
@given(
    st.sampled_from(["standard", "series", "parallel"]),
    st.sampled_from(["gain", "band"]),
    st.sampled_from(["span", "engineering"]),
    st.sampled_from(
        [
            "seconds per repeat",
            "minutes per repeat",
            "repeats per minute",
            "repeats per second",
            "gain per second",
            "gain per minute",
            "gain per scan",
        ]
    ),
    st.sampled_from(["seconds", "minutes", "gain in seconds", "gain in minutes"]),
    log,
    log,
    st.floats(0.01, 0.249),
)
def test_entry_comes_back_the_same(equation, proportional, basis, integral, derivative, gain, ti, share):
    entry = Entry(
        equation=equation,
        proportional=proportional,
        proportional_basis=basis,
        integral=integral,
        derivative=derivative,
        pv_span=250.0,
        co_span=100.0,
        scan=0.2,
    )
    c = Controller(kind="PID", gain=gain, action="reverse", integral_time=ti, derivative_time=share * ti)
    assert understand(enter(c, entry), entry) == pytest.approx((gain, ti, share * ti), rel=1e-9)
