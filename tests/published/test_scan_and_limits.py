"""Scan, filter and ultimate gains against published and recomputed numbers."""

import numpy as np
import pytest

from fitters.process import ProcessModel
from pipeline.loop.controller import controller_response
from pipeline.loop.margins import margins
from pipeline.loop.simulate import stable_in_time
from pipeline.loop.types import Controller
from pipeline.tuning.reduced import ultimate

LAG = ProcessModel(numerator=(1.0,), denominator=(4.0, 1.0), dead_time=1.0)

# PI 2 and 4 s on a lag of 4 and a dead time of 1, recomputed: scan; gain margin, phase margin and Ms with half
# the scan as dead time; exact phase margin of the sampled loop. The hold's phase is exactly -omega h / 2:
# Astrom and Wittenmark, Computer-Controlled Systems (from memory).
SCANS = [
    (0.05, 3.0650, 60.636, 1.6115, 60.630),
    (0.1, 2.9920, 59.920, 1.6331, 59.896),
    (0.2, 2.8560, 58.487, 1.6776, 58.391),
    (0.5, 2.5133, 54.190, 1.8250, 53.567),
]


@pytest.mark.parametrize(("scan", "gain_margin", "phase_margin", "peak", "exact"), SCANS)
def test_half_a_scan_counts_as_dead_time(scan, gain_margin, phase_margin, peak, exact):
    m = margins(LAG, Controller(kind="PI", gain=2.0, action="reverse", integral_time=4.0, scan=scan))
    assert (m.gain_margin, m.max_sensitivity) == pytest.approx((gain_margin, peak), abs=6e-5)
    assert m.phase_margin == pytest.approx(phase_margin, abs=6e-4)
    # good to a tenth of a degree up to a scan of a fifth of the dead time
    assert abs(m.phase_margin - exact) < (0.1 if scan <= 0.2 else 0.7)


@pytest.mark.parametrize(
    ("ratio", "lead"), [(2.0, 29.74), (5.0, 38.88), (8.0, 41.24), (10.0, 42.02), (20.0, 43.53)]
)
def test_a_filtered_derivative_leads_by_less_than_45_degrees(ratio, lead):
    # Closed form at one over the derivative time, recomputed; a tenth or less: Bequette (2003), sec. 5.4.
    c = Controller(kind="PD", gain=1.0, action="reverse", derivative_time=3.0, derivative_filter=3.0 / ratio)
    feedback, _ = controller_response(c, [1.0 / 3.0])
    assert np.degrees(np.angle(feedback[0])) == pytest.approx(lead, abs=6e-3)
    fast, _ = controller_response(c, [1e6])
    assert abs(fast[0]) == pytest.approx(1.0 + ratio, rel=1e-6)


def test_third_order_loop_is_lost_at_a_gain_of_ten():
    # Bequette (2003), Ex. 5.3 and 6.1: 1 / ((3 s + 1)(2 s + 1)(s + 1)), ultimate gain 10, frequency 1.
    model = ProcessModel(numerator=(1.0,), denominator=(6.0, 11.0, 6.0, 1.0))
    u = ultimate(model)
    assert (u.gain, u.period) == pytest.approx((10.0, 2.0 * np.pi), rel=1e-9)
    for gain, stable in ((1.0, True), (3.0, True), (9.99, True), (10.01, False), (11.0, False)):
        c = Controller(kind="P", gain=gain, action="reverse")
        assert margins(model, c).stable is stable and stable_in_time(model, c) is stable


@pytest.mark.parametrize(("lag", "dead_time", "limit"), [(4.0, 1.0, 6.9345)])
def test_stabilising_gains_of_a_pi_end_at_the_ultimate_gain(lag, dead_time, limit):
    # Silva, Datta, Bhattacharyya (2001), Automatica 37, 2025-2031 (formula from memory, recomputed).
    model = ProcessModel(numerator=(1.0,), denominator=(lag, 1.0), dead_time=dead_time)
    assert ultimate(model).gain == pytest.approx(limit, abs=1e-4)
    for gain, stable in ((0.999 * limit, True), (1.001 * limit, False)):
        slow = Controller(kind="PI", gain=gain, action="reverse", integral_time=1e5)
        assert margins(model, slow).stable is stable
