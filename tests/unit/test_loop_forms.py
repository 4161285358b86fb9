"""Conversions between controller equations against printed pairs."""

import numpy as np
import pytest

from fitters.process import ProcessModel
from pipeline.errors import UsageError
from pipeline.loop.forms import Entry, action_for_model, action_in_words, enter, from_series, to_series
from pipeline.loop.types import Controller


def test_printed_pairs():
    # Skogestad (2003): series (1.30, 2, 1.2) is ideal (2.08, 3.20, 0.75).
    assert from_series(1.30, 2.0, 1.2) == pytest.approx((2.08, 3.2, 0.75), rel=1e-9)
    assert to_series(2.0, 8.0, 2.0) == pytest.approx((1.0, 4.0, 4.0), rel=1e-9)
    assert to_series(1.0, 10.0, 2.0) == pytest.approx((0.723606798, 7.236067977, 2.763932023), rel=1e-9)
    with pytest.raises(UsageError, match="four times"):
        to_series(1.0, 4.0, 1.01)


def test_band_repeats_and_spans():
    c = Controller(kind="PI", gain=0.5, action="reverse", integral_time=60.0)
    entry = Entry(
        proportional="band",
        proportional_basis="span",
        integral="repeats per minute",
        pv_span=200.0,
        co_span=100.0,
    )
    e = enter(c, entry)
    assert (e.proportional, e.integral, e.derivative) == (pytest.approx(100.0), pytest.approx(1.0), None)
    with pytest.raises(UsageError, match="range"):
        enter(c, Entry(proportional_basis="span"))


@pytest.mark.parametrize(
    ("num", "den", "words"),
    [
        (1.0, (5.0, 1.0), "fall"),
        (-1.0, (5.0, 1.0), "rise"),
        (1.0, (5.0, -1.0), "fall"),
        (-1.0, (1.0, 0.0), "rise"),
    ],
)
def test_action_in_words(num, den, words):
    action = action_for_model(ProcessModel(numerator=(num,), denominator=den))
    assert action_in_words(action) == f"PV rises: the output must {words}."
    assert np.isfinite(num)
