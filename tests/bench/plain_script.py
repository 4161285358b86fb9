"""The fit as a user would write it by hand: the yardstick for speed.

lmfit searches over everything at once with differences for slopes, python-control simulates,
dead time becomes a rational stand-in of order five, and three structures are tried.
"""

import control
import lmfit
import numpy as np

PADE_ORDER = 5


def first_order(p):
    return control.tf([p["gain"]], [p["lag"], 1.0])


def second_order(p):
    return control.tf([p["gain"]], np.polymul([p["lag"], 1.0], [p["second_lag"], 1.0]))


def integrator(p):
    return control.tf([p["gain"]], [1.0, 0.0])


STRUCTURES = {"first order": first_order, "second order": second_order, "integrator": integrator}


def fit_by_hand(t, co, pv):
    """Fit the three structures, best first by the Bayesian information criterion.

    Returns a list of (criterion, structure, lmfit result).
    """
    span = t[-1] - t[0]
    gain = np.ptp(pv) / np.ptp(co)
    results = []
    for name, build in STRUCTURES.items():
        parameters = lmfit.Parameters()
        parameters.add("gain", gain if name != "integrator" else 5.0 * gain / span)
        if name != "integrator":
            parameters.add("lag", span / 15.0, min=1e-3 * span)
        if name == "second order":
            parameters.add("second_lag", span / 60.0, min=1e-3 * span)
        parameters.add("dead_time", span / 60.0, min=1e-4 * span, max=span / 4.0)
        parameters.add("offset", pv[0])

        def residual(p, build=build):
            values = p.valuesdict()
            dead_time = control.tf(*control.pade(values["dead_time"], PADE_ORDER))
            system = control.ss(dead_time * build(values))
            answer = control.forced_response(system, timepts=t, inputs=co - co[0]).outputs
            return pv - values["offset"] - answer

        result = lmfit.minimize(residual, parameters)
        results.append((result.bic, name, result))
    return sorted(results, key=lambda r: r[0])
