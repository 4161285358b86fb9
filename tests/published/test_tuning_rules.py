"""Published tuning rules give their published settings, and the margins those settings have."""

from dataclasses import replace

import numpy as np
import pytest

from fitters.process import ProcessModel
from pipeline.loop.margins import margins
from pipeline.loop.simulate import overshoot
from pipeline.loop.types import Controller
from pipeline.tuning import rules
from pipeline.tuning.compare import RULES, compare, facts_of
from pipeline.tuning.reduced import FirstOrder, first_order, ultimate


def process(num, *factors, integrators=0, dead_time=0.0):
    den = np.ones(1)
    for factor in factors:
        den = np.polymul(den, factor)
    den = np.concatenate([den, np.zeros(integrators)])
    return ProcessModel(numerator=tuple(num), denominator=tuple(den), dead_time=dead_time)


def lags(*times):
    return [[t, 1.0] for t in times]


def of(settings, kind):
    return next(s for s in settings if s.kind == kind)


def judged(model, s, filtered=0.0):
    return margins(
        model,
        Controller(
            kind=s.kind,
            gain=s.gain,
            action="reverse",
            integral_time=s.integral,
            derivative_time=s.derivative,
            derivative_filter=filtered,
        ),
    )


# Skogestad (2003), J. Process Control 13, 291-309, examples: lags kept, dead time, published PI settings.
HALF_RULE = {
    "E1": (process([1.0], *lags(1.0, 0.2)), 1.1, 0.1, 5.5, 0.8),
    "E4": (process([1.0], *lags(1.0, 1.0, 1.0, 1.0)), 1.5, 2.5, 0.3, 1.5),
    "E5": (process([1.0], *lags(1.0, 0.2, 0.04, 0.008)), 1.1, 0.148, 3.72, 1.1),
    "E7": (process([-2.0, 1.0], *lags(1.0, 1.0, 1.0)), 1.5, 3.5, 0.214, 1.5),
    "E8": (process([1.0], *lags(1.0, 1.0), integrators=1), np.inf, 1.5, 0.333, 12.0),
    "E9": (process([1.0], *lags(1.0, 1.0), dead_time=1.0), 1.5, 1.5, 0.5, 1.5),
    "E10": (process([1.0], *lags(20.0, 2.0), dead_time=1.0), 21.0, 2.0, 5.25, 16.0),
    "E11": (process([-1.0, 1.0], *lags(6.0, 2.0, 2.0), dead_time=1.0), 7.0, 5.0, 0.7, 7.0),
    "E14": (process([-1.0, 1.0], integrators=1), np.inf, 1.0, 0.5, 8.0),
    "E15": (process([-1.0, 1.0], *lags(1.0)), 1.0, 1.0, 0.5, 1.0),
}


@pytest.mark.parametrize("name", HALF_RULE)
def test_half_rule_and_pi_settings(name):
    model, lag, dead_time, gain, integral = HALF_RULE[name]
    reduced = first_order(model)
    assert (reduced.lag, reduced.dead_time) == pytest.approx((lag, dead_time), rel=5e-3)
    s = of(rules.simc(facts_of(model)), "PI")
    assert (s.gain, s.integral) == pytest.approx((gain, integral), rel=5e-3)


# The same source: series settings of the PID. E8's published gain of 1.5 does not follow from the rule (1.0).
PID = {
    "E4": (0.5, 1.5, 1.0),
    "E5": (17.86, 0.224, 0.22),
    "E7": (0.3, 1.5, 1.0),
    "E8": (1.0, 4.0, 1.5),
    "E9": (0.5, 1.0, 1.0),
    "E10": (10.0, 8.0, 2.0),
    "E11": (1.0, 6.0, 3.0),
}


@pytest.mark.parametrize("name", PID)
def test_pid_settings_in_the_series_equation(name):
    gain, integral, derivative = PID[name]
    s = of(rules.simc(facts_of(HALF_RULE[name][0])), "PID")
    factor = 1.0 + derivative / integral
    wanted = (gain * factor, integral * factor, derivative / factor)
    assert (s.gain, s.integral, s.derivative) == pytest.approx(wanted, rel=5e-3)


def test_reduction_examples_of_a_textbook():
    # Seborg, Edgar, Mellichamp, Process Dynamics and Control, Ex. 5.4 and 5.5 (2nd ed.).
    one = first_order(process([-0.1, 1.0], *lags(5.0, 3.0, 0.5)))
    assert (one.lag, one.dead_time) == pytest.approx((6.5, 2.1))
    model = process([-1.0, 1.0], *lags(12.0, 3.0, 0.2, 0.05), dead_time=1.0)
    one, two = first_order(model), first_order(model, lags=2)
    assert (one.lag, one.dead_time) == pytest.approx((13.5, 3.75))
    assert (two.lag, two.second_lag, two.dead_time) == pytest.approx((12.0, 3.1, 2.15))


def lag_facts(lag, dead_time, gain=1.0):
    one = FirstOrder(gain=gain, lag=lag, second_lag=0.0, dead_time=dead_time)
    return rules.Facts(one=one, two=None, ultimate=None)


@pytest.mark.parametrize(
    ("late", "lag", "pi", "pid"),
    [
        (0.075, 1.04, (4.13, 0.539), (6.44, 0.361, 0.0367)),
        (1.42, 2.9, (0.414, 2.66), (1.12, 2.40, 0.619)),
        (1.01, 0.0932, (0.175, 0.367), (0.242, 0.474, 0.119)),
    ],
)
def test_amigo_examples(late, lag, pi, pid):
    # Astrom and Hagglund (2004), J. Process Control 14, 635-650, sec. 6 (from memory; rule recomputed).
    found = rules.amigo(lag_facts(lag, late))
    s, d = of(found, "PI"), of(found, "PID")
    assert (s.gain, s.integral) == pytest.approx(pi, rel=0.01)
    assert (d.gain, d.integral, d.derivative) == pytest.approx(pid, rel=0.01)


INTEGRATOR = process([1.0], integrators=1, dead_time=1.0)
# Rules on an integrator with a dead time of one: settings and recomputed gain margin, phase margin, Ms.
# Tyreus and Luyben: Ku/3.2 and 2.2 Pu as in Bequette (2003), table 6-2.
ON_INTEGRATOR = {
    "Tyreus and Luyben": (0.4909, 8.8, 3.037, 48.4, 1.672),
    "Skogestad": (0.5, 8.0, 2.963, 46.9, 1.704),
    "Åström and Hägglund": (0.35, 13.4, 4.343, 57.7, 1.410),
    "Ziegler and Nichols, ultimate": (0.7069, 3.333, 1.868, 24.9, 2.831),
}


@pytest.mark.parametrize("name", ON_INTEGRATOR)
def test_rules_on_an_integrator_with_dead_time(name):
    gain, integral, gain_margin, phase_margin, peak = ON_INTEGRATOR[name]
    pattern = Controller(kind="PI", gain=1.0, action="reverse", integral_time=1.0)
    r = next(r for r in compare(INTEGRATOR, pattern) if r.name == name)
    assert (r.controller.gain, r.controller.integral_time) == pytest.approx((gain, integral), rel=1e-3)
    assert r.gain_margin == pytest.approx(gain_margin, abs=2e-3)
    assert r.phase_margin == pytest.approx(phase_margin, abs=0.06)
    assert r.max_sensitivity == pytest.approx(peak, abs=2e-3)


def test_ultimate_points():
    # 1/(s+1)^3: closed form 8 and 2 pi / sqrt 3; Bequette (2003), Module 6: 3.8009 and 17.16 off a coarse grid,
    # recomputed 3.80688 and 17.1055; Skogestad and Postlethwaite (2005), Ex. 2.4: 2.5 and 15.2.
    cube = ultimate(process([1.0], *lags(1.0, 1.0, 1.0)))
    assert (cube.gain, cube.period) == pytest.approx((8.0, 2.0 * np.pi / np.sqrt(3.0)), rel=1e-9)
    module = ultimate(process([1.0], *lags(10.0), dead_time=5.0))
    assert (module.gain, module.period) == pytest.approx((3.80688, 17.1055), rel=1e-5)
    inverse = ultimate(process([-6.0, 3.0], *lags(10.0, 5.0)))
    assert (inverse.gain, inverse.period) == pytest.approx((2.5, 15.24), rel=1e-3)
    assert ultimate(process([1.0], *lags(10.0))) is None


def test_ziegler_nichols_on_three_equal_lags():
    # Ziegler and Nichols (1942), Trans. ASME 64, 759-768, on the textbook's 1/(s+1)^3; margins recomputed.
    model = process([1.0], *lags(1.0, 1.0, 1.0))
    found = rules.ziegler_nichols_ultimate(facts_of(model))
    d, i = of(found, "PID"), of(found, "PI")
    assert (d.gain, d.integral, d.derivative) == pytest.approx((4.80, 1.81, 0.4535), rel=5e-3)
    assert (i.gain, i.integral) == pytest.approx((3.6, 3.023), rel=5e-4)
    m, n = judged(model, d), judged(model, i)
    assert (m.phase_margin, m.max_sensitivity) == pytest.approx((30.6, 2.13), rel=2e-3)
    assert (n.gain_margin, n.phase_margin, n.max_sensitivity) == pytest.approx((1.52, 14.8, 4.93), rel=4e-3)


def test_rules_on_a_textbook_module():
    # Bequette (2003), Module 6, e^-5s / (10 s + 1): recomputed margins of the rules' settings.
    model = process([1.0], *lags(10.0), dead_time=5.0)
    facts = facts_of(model)
    zn, tl = rules.ziegler_nichols_ultimate(facts), of(rules.tyreus_luyben(facts), "PI")
    m = judged(model, of(zn, "PI"))
    assert (m.gain_margin, m.phase_margin, m.max_sensitivity) == pytest.approx((1.975, 53.0, 2.198), rel=1e-3)
    assert (tl.gain, tl.integral) == pytest.approx((1.1897, 37.63), rel=1e-3)
    m = judged(model, tl)
    assert (m.gain_margin, m.phase_margin, m.max_sensitivity) == pytest.approx(
        (3.085, 101.5, 1.539), rel=1e-3
    )


def test_cohen_coon_samples():
    # Cohen and Coon (1953), Trans. ASME 75, 827-834: K 1, T 10, dead time 5 and T 1, dead time 0.2, recomputed.
    found = rules.cohen_coon(lag_facts(10.0, 5.0))
    assert of(found, "P").gain == pytest.approx(2.3333, abs=1e-4)
    assert (of(found, "PI").gain, of(found, "PI").integral) == pytest.approx((1.8833, 8.2895), abs=1e-4)
    assert (of(found, "PD").gain, of(found, "PD").derivative) == pytest.approx((2.6667, 1.0638), abs=1e-4)
    d = of(found, "PID")
    assert (d.gain, d.integral, d.derivative) == pytest.approx((2.9167, 10.2941, 1.6667), abs=1e-4)
    m = judged(process([1.0], *lags(10.0), dead_time=5.0), of(found, "PI"))
    assert (m.gain_margin, m.phase_margin, m.max_sensitivity) == pytest.approx((1.57, 29.0, 3.23), rel=4e-3)


@pytest.mark.parametrize("ratio", [0.1, 0.5, 1.0, 3.0])
def test_internal_model_margins_do_not_depend_on_the_lag(ratio):
    # Rivera, Morari, Skogestad (1986), table II with lambda 1.7 dead times (least value: Bequette 2003, table
    # 9-2): Ms 1.750, GM 2.67, PM 56.3, recomputed.
    model = process([1.0], *lags(1.0 / ratio), dead_time=1.0)
    m = judged(model, rules.internal_model(lag_facts(1.0 / ratio, 1.0))[0])
    if 0.2 / ratio <= 1.7:
        assert (m.max_sensitivity, m.gain_margin, m.phase_margin) == pytest.approx(
            (1.750, 2.67, 56.3), rel=2e-3
        )
    else:
        assert m.gain_margin > 2.67


@pytest.mark.parametrize("ratio", [0.1, 0.5, 1.0, 5.0])
@pytest.mark.parametrize(
    ("gain_margin", "phase_margin"), [(2.0, 45.0), (3.0, 60.0), (4.0, 67.5), (5.0, 72.0)]
)
def test_closed_form_is_exact_for_matching_pairs(ratio, gain_margin, phase_margin):
    # Ho, Hang, Cao (1995), Automatica 31, 497-502 (from memory): exact where PM = 90 (1 - 1/GM), recomputed.
    s = rules.ho_hang_cao(lag_facts(1.0 / ratio, 1.0), gain_margin=gain_margin, phase_margin=phase_margin)[0]
    m = judged(process([1.0], *lags(1.0 / ratio), dead_time=1.0), s)
    assert (m.gain_margin, m.phase_margin) == pytest.approx((gain_margin, phase_margin), rel=1e-4)


def test_closed_form_misses_the_phase_margin_where_dead_time_rules():
    # The same formula for 3 and 45 degrees: recomputed 2.90/41.7, 2.85/48.1, 2.86/53.9, 3.08/60.7.
    for ratio, gain_margin, phase_margin in (
        (0.1, 2.90, 41.7),
        (0.5, 2.85, 48.1),
        (1.0, 2.86, 53.9),
        (5.0, 3.08, 60.7),
    ):
        s = rules.ho_hang_cao(lag_facts(1.0 / ratio, 1.0), gain_margin=3.0, phase_margin=45.0)[0]
        m = judged(process([1.0], *lags(1.0 / ratio), dead_time=1.0), s)
        assert m.gain_margin == pytest.approx(gain_margin, abs=6e-3)
        assert m.phase_margin == pytest.approx(phase_margin, abs=0.06)


@pytest.mark.parametrize("ratio", [0.1, 0.5, 1.0])
def test_the_label_no_overshoot_holds_for_this_rule(ratio):
    # Chien, Hrones, Reswick (1952), Trans. ASME 74, 175-185: 0.35/a and 1.2 T; overshoot recomputed: none.
    s = of(rules.chien_hrones_reswick(lag_facts(1.0 / ratio, 1.0)), "PI")
    assert (s.gain, s.integral) == pytest.approx((0.35 / ratio, 1.2 / ratio))
    c = Controller(kind="PI", gain=s.gain, action="reverse", integral_time=s.integral)
    assert overshoot(process([1.0], *lags(1.0 / ratio), dead_time=1.0), c) == pytest.approx(0.0, abs=0.05)


def test_every_rule_names_its_source_and_scales_with_gain_and_time():
    """Common practice: a rule's gain goes with 1/K, its times with the process's own."""
    for rule in RULES:
        assert rule.source and rule.settings.__doc__
        one = rule.settings(facts_of(process([1.0], *lags(10.0, 1.0), dead_time=2.0)))
        ten = rule.settings(facts_of(process([3.0], *lags(100.0, 10.0), dead_time=20.0)))
        assert one
        for a, b in zip(one, ten, strict=True):
            stretched = replace(
                a, gain=a.gain / 3.0, integral=10.0 * a.integral, derivative=10.0 * a.derivative
            )
            assert (b.gain, b.integral, b.derivative) == pytest.approx(
                (stretched.gain, stretched.integral, stretched.derivative), rel=1e-6
            )


def test_no_rule_is_applied_to_what_it_was_not_written_for():
    pattern = Controller(kind="PI", gain=1.0, action="reverse", integral_time=1.0)
    assert compare(process([1.0], [1.0, -1.0], dead_time=0.2), pattern) == ()
    assert compare(process([1.0], integrators=2, dead_time=0.2), pattern) == ()
    ringing = {r.name for r in compare(process([1.0], [1.0, 0.3, 1.0], dead_time=0.2), pattern)}
    assert ringing <= {"Ziegler and Nichols, ultimate", "Tyreus and Luyben"}
