"""What is left over after a fit: its colour is found, and what it costs is what it costs."""

import numpy as np
import pytest

from fitters.noise import Noise, Whitener, colour, covariance, whitened_covariance
from fitters.outliers import outliers

T = np.arange(400) * 0.5
ALIKE = np.ones(T.size)
LINE = np.column_stack([np.ones(T.size), T])


def slow_noise(rng, correlation, t=T):
    """First-order autoregressive noise of unit variance at any spacing."""
    out = np.empty(t.size)
    out[0] = rng.normal()
    memory = np.exp(-np.diff(t) / correlation)
    for i, m in enumerate(memory):
        out[i + 1] = m * out[i] + np.sqrt(1.0 - m * m) * rng.normal()
    return out


def left_over(noise, jacobian=LINE):
    return noise - jacobian @ np.linalg.lstsq(jacobian, noise, rcond=None)[0]


def test_white_noise_is_nearly_always_called_nearly_white():
    worth = [
        colour(left_over(np.random.default_rng(s).normal(size=T.size)), T, LINE, ALIKE).effective_samples
        for s in range(60)
    ]
    assert np.median(worth) > 0.9 * T.size
    assert np.mean(np.array(worth) > 0.4 * T.size) > 0.9


@pytest.mark.parametrize("correlation", [2.0, 6.0, 15.0])
@pytest.mark.parametrize("white", [0.0, 0.5])
def test_slow_noise_is_found_at_its_time_and_level(correlation, white):
    found = []
    for s in range(40):
        rng = np.random.default_rng(s)
        mixed = np.sqrt(1 - white) * slow_noise(rng, correlation) + np.sqrt(white) * rng.normal(size=T.size)
        found.append(colour(left_over(mixed), T, LINE, ALIKE))
    slow = [n for n in found if n.correlation > 0.0]
    assert len(slow) >= 36
    assert correlation / 2 < np.median([n.correlation for n in slow]) < correlation * 2
    assert np.median([n.sd for n in found]) == pytest.approx(1.0, rel=0.2)


def test_effective_samples_follow_the_published_ratio():
    """Bayley and Hammersley (1946): n (1 - phi) / (1 + phi) for long records."""
    phi = 0.6
    noise = Noise(sd=1.0, correlation=-0.5 / np.log(phi), slow_share=1.0, effective_samples=0.0)
    mean_variance = covariance(np.ones((T.size, 1)), T, noise, ALIKE)[0, 0]
    assert 1.0 / mean_variance == pytest.approx(T.size * (1 - phi) / (1 + phi), rel=0.01)


def test_the_mean_of_the_published_series_has_the_published_interval():
    """Brockwell and Davis, n = 100, phi = 0.6, noise variance 2: 95 % interval (-0.415, 0.957).

    Problem data read on a secondary page, interval recomputed with the exact sum.
    """
    phi, variance = 0.6, 2.0 / (1.0 - 0.36)
    noise = Noise(sd=np.sqrt(variance), correlation=-1.0 / np.log(phi), slow_share=1.0, effective_samples=0.0)
    sd = np.sqrt(covariance(np.ones((100, 1)), np.arange(100.0), noise, np.ones(100))[0, 0])
    assert 0.271 - 1.96 * sd == pytest.approx(-0.415, abs=2e-3)
    assert 0.271 + 1.96 * sd == pytest.approx(0.957, abs=2e-3)


def test_covariance_is_what_scatter_shows():
    """Least squares on mixed noise at uneven times: claimed and observed scatter agree."""
    rng = np.random.default_rng(5)
    t = np.sort(rng.uniform(0, 200, 300))
    jacobian = np.column_stack([np.ones(t.size), t, 1 - np.exp(-t / 20)])
    noise = Noise(sd=1.0, correlation=8.0, slow_share=0.6, effective_samples=0.0)
    estimates = []
    for s in range(600):
        r = np.random.default_rng(s)
        e = np.sqrt(0.6) * slow_noise(r, 8.0, t) + np.sqrt(0.4) * r.normal(size=t.size)
        estimates.append(np.linalg.lstsq(jacobian, e, rcond=None)[0])
    claimed = np.sqrt(np.diag(covariance(jacobian, t, noise, np.ones(t.size))))
    assert np.allclose(np.std(estimates, axis=0), claimed, rtol=0.1)


def test_a_parameter_the_rows_do_not_tell_has_no_finite_error():
    jacobian = np.column_stack([np.ones(T.size), T, 2.0 * T])
    noise = Noise(sd=1.0, correlation=0.0, slow_share=0.0, effective_samples=400.0)
    sd = np.sqrt(np.diag(covariance(jacobian, T, noise, ALIKE)))
    assert np.isfinite(sd[0]) and np.isinf(sd[1]) and np.isinf(sd[2])


def test_whitening_gives_back_the_number_of_rows():
    noise = Noise(sd=1.0, correlation=5.0, slow_share=0.7, effective_samples=0.0)
    sums = []
    for s in range(50):
        rng = np.random.default_rng(s)
        e = np.sqrt(0.7) * slow_noise(rng, 5.0) + np.sqrt(0.3) * rng.normal(size=T.size)
        sums.append(np.sum(Whitener(T, noise, ALIKE)(e) ** 2))
    assert np.mean(sums) == pytest.approx(T.size, rel=0.05)


def test_means_of_rows_tell_what_the_rows_told():
    """Whitened rows of means, each of several logged rows, have unit noise too."""
    noise = Noise(sd=1.0, correlation=40.0, slow_share=0.5, effective_samples=0.0)
    sizes = np.tile([1, 2, 5, 8], 25)
    edges = np.concatenate([[0], np.cumsum(sizes)])
    t = np.arange(edges[-1]) * 0.1
    mean = lambda x: np.add.reduceat(x, edges[:-1]) / sizes  # noqa: E731
    sums = []
    for s in range(60):
        rng = np.random.default_rng(s)
        e = np.sqrt(0.5) * slow_noise(rng, 40.0, t) + np.sqrt(0.5) * rng.normal(size=t.size)
        sums.append(np.mean(Whitener(mean(t), noise, sizes.astype(float))(mean(e)) ** 2))
    assert np.mean(sums) == pytest.approx(1.0, rel=0.05)


def test_least_squares_on_whitened_rows_scatters_as_claimed_and_less_than_plain():
    """Aitken (1936): no linear unbiased estimate scatters less."""
    t = np.arange(300.0)
    jacobian = np.column_stack([np.ones(t.size), 1 - np.exp(-np.maximum(t - 50.0, 0.0) / 20)])
    noise = Noise(sd=1.0, correlation=15.0, slow_share=0.9, effective_samples=0.0)
    whiten = Whitener(t, noise, np.ones(t.size))
    estimates = []
    for s in range(600):
        r = np.random.default_rng(s)
        e = np.sqrt(0.9) * slow_noise(r, 15.0, t) + np.sqrt(0.1) * r.normal(size=t.size)
        estimates.append(np.linalg.lstsq(whiten(jacobian.T).T, whiten(e), rcond=None)[0])
    claimed = np.sqrt(np.diag(whitened_covariance(whiten(jacobian.T).T, noise)))
    assert np.allclose(np.std(estimates, axis=0), claimed, rtol=0.1)
    assert np.all(claimed < np.sqrt(np.diag(covariance(jacobian, t, noise, np.ones(t.size)))))


def test_spikes_are_found_and_steps_are_not():
    residual = np.random.default_rng(2).normal(size=300)
    residual[[40, 41, 200]] += [25.0, -30.0, 22.0]
    assert set(np.flatnonzero(outliers(residual, 0.0))) == {40, 41, 200}
    step = np.random.default_rng(2).normal(size=300)
    step[150:] += 20.0
    assert np.count_nonzero(outliers(step, 0.0)) == 0


def test_a_perfect_fit_has_no_noise():
    assert colour(np.zeros(T.size), T, LINE, ALIKE).sd == 0.0
