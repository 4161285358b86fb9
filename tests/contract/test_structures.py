"""Every structure in the folder keeps the promises the fit relies on."""

import numpy as np
import pytest

from fitters.fit import BumpData
from fitters.problem import Problem
from fitters.response import HeldInput, _recur, _superpose
from fitters.structures import all_structures, structure_named

STRUCTURES = all_structures()


def settings_of(structure):
    """Typical searched numbers and gains: a span of 100 s, rows of 1 s."""
    starts = list(structure.starts(100.0, 1.0))
    for start in starts[:: max(1, len(starts) // 6)]:
        yield np.asarray(start, dtype=float) + 0.013, np.linspace(1.3, -0.7, structure.gains)


@pytest.fixture(params=STRUCTURES, ids=lambda s: s.name)
def structure(request):
    return request.param


def test_names_are_unique_and_found_by_looking():
    names = [s.name for s in STRUCTURES]
    assert len(set(names)) == len(names) >= 12
    assert all(structure_named(name).name == name for name in names)


def test_shapes_are_the_step_response_of_the_model(structure):
    tau = np.linspace(0.1, 130.0, 90)
    for search, gains in settings_of(structure):
        model = structure.model(search, gains, 0.0)
        want = model.step_response(tau)
        assert np.allclose(
            gains @ structure.shapes(tau, search).value, want, rtol=0, atol=1e-11 * np.abs(want).max()
        )


def test_slopes_are_the_derivatives(structure):
    tau = np.linspace(0.5, 130.0, 90)
    step = 1e-5
    for search, _ in settings_of(structure):
        shapes = structure.shapes(tau, search)
        by_time = (
            structure.shapes(tau + step, search).value - structure.shapes(tau - step, search).value
        ) / (2 * step)
        assert np.allclose(shapes.by_time, by_time, rtol=1e-5, atol=1e-7 * max(np.abs(by_time).max(), 1e-12))
        assert shapes.by_search.shape[0] == structure.searched
        for k in range(structure.searched):
            shift = np.eye(structure.searched)[k] * step
            change = (
                structure.shapes(tau, search + shift).value - structure.shapes(tau, search - shift).value
            ) / (2 * step)
            assert np.allclose(
                shapes.by_search[k], change, rtol=1e-5, atol=1e-7 * max(np.abs(change).max(), 1e-12)
            )


@pytest.mark.parametrize("irregular", [False, True])
def test_recursion_and_superposition_agree_on_a_busy_output(structure, irregular):
    rng = np.random.default_rng(7)
    t = np.sort(rng.uniform(0, 150, 300)) if irregular else np.arange(300) * 0.5
    at = t[4:260:2]
    held = HeldInput(t, at, rng.normal(size=at.size))
    search, _ = list(settings_of(structure))[-2 if structure.searched else -1]
    added = _superpose(structure, held, search, 2.3)
    run = _recur(structure, held, search, 2.3)
    for name in ("value", "by_search", "by_dead_time"):
        want, got = getattr(added, name), getattr(run, name)
        assert np.allclose(got, want, rtol=0, atol=1e-8 * np.abs(want).max(initial=1e-12)), name


def test_quantities_say_their_units_and_the_model_its_integrators(structure):
    search, gains = next(settings_of(structure))
    model = structure.model(search, gains, 1.5)
    assert model.integrators == structure.integrators
    assert model.dead_time == 1.5
    quantities = structure.quantities(search, gains, 1.5)
    assert len({q.name for q in quantities}) == len(quantities) >= structure.gains
    assert all(set(q.unit) <= set("PVCO/s²") for q in quantities)
    assert len(quantities) + 1 >= structure.parameter_count


def test_projected_slopes_are_what_the_search_needs(structure):
    """At the truth, without noise, Kaufman's derivative is the exact one."""
    if not structure.has_dead_time_search:
        pytest.skip("its cost is flat between rows")
    search, gains = next(settings_of(structure))
    t = np.linspace(0.0, 100.0, 211)
    co_times, co_values = np.array([0.0, 10.3, 55.1]), np.array([1.0, 3.0, 2.5])
    model = structure.model(search, gains, 3.77)
    pv = sum(d * model.step_response(t - a) for a, d in zip(co_times[1:], np.diff(co_values), strict=True))
    problem = Problem(
        BumpData(t=t, pv=pv, co_times=co_times, co_values=co_values),
        np.ones(t.size, bool),
        drift=True,
        settling=False,
    )
    residual, slopes = problem.project(structure, search, 3.77)
    assert np.abs(residual).max() < 1e-11
    point = np.append(search, 3.77)
    for k in range(point.size):
        shift = np.eye(point.size)[k] * 1e-6
        up = problem.project(structure, (point + shift)[:-1], (point + shift)[-1])[0]
        down = problem.project(structure, (point - shift)[:-1], (point - shift)[-1])[0]
        assert np.allclose(slopes[k], (up - down) / 2e-6, atol=2e-5 * max(np.abs(slopes[k]).max(), 1e-9)), k
