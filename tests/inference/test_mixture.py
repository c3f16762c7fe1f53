import numpy as np
import pytest

from fitter.inference.mixture import fit_mixture


def cloud(n=200, d=2, seed=0):
    x = np.random.default_rng(seed).standard_normal((n, d))
    x[:, -1] += x[:, 0] ** 2
    return x


@pytest.mark.parametrize("iterations", [0, 5])
def test_density_integrates_to_one(iterations):
    mixture = fit_mixture(cloud(), 3, iterations=iterations, broad=0.1)
    # x = tan(u): the heavy tails are inside a finite square.
    u, h = np.linspace(-np.pi / 2, np.pi / 2, 1201, retstep=True)
    u = u[1:-1]
    x = np.stack(np.meshgrid(np.tan(u), np.tan(u), indexing="ij"), axis=-1).reshape(-1, 2)
    weight = 1 / (np.cos(u)[:, None] ** 2 * np.cos(u)[None, :] ** 2)
    total = (np.exp(mixture.log_density(x)).reshape(weight.shape) * weight).sum() * h**2
    assert total == pytest.approx(1, abs=1e-4)


def test_draws_follow_the_density():
    mixture = fit_mixture(cloud(), 3, broad=0.1)
    n = 200_000
    x = mixture.draw(np.random.RandomState(1), n)
    np.testing.assert_allclose(x.mean(axis=0), mixture.weights @ mixture.means, atol=5 * x.std(axis=0).max() / np.sqrt(n))
    # E_q[g / q] = ∫ g for a normalised Gaussian g: 1 if draws and density belong together.
    g = np.exp(-0.5 * (x**2).sum(axis=1)) / (2 * np.pi)
    ratio = g / np.exp(mixture.log_density(x))
    assert ratio.mean() == pytest.approx(1, abs=5 * ratio.std() / np.sqrt(n))


def test_more_iterations_fit_better():
    x = cloud(400)
    likelihood = [fit_mixture(x, 3, iterations=k).log_density(x).mean() for k in (0, 1, 5, 20)]
    assert np.all(np.diff(likelihood) > 0)


@pytest.mark.parametrize("points", [np.zeros((16, 2)), np.full((16, 3), 7.0), np.outer(np.arange(16.0), [1, 1])])
def test_degenerate_clouds(points):
    mixture = fit_mixture(points, 4, iterations=2, broad=0.1)
    x = mixture.draw(np.random.RandomState(0), 10)
    assert np.isfinite(x).all()
    assert np.isfinite(mixture.log_density(x)).all()


def test_scales_of_the_parameters_do_not_matter():
    x = cloud()
    scale = np.array([1e-6, 1e8])
    a, b = fit_mixture(x, 3), fit_mixture(x * scale, 3)
    np.testing.assert_allclose(b.log_density(x * scale) + np.log(scale).sum(), a.log_density(x), rtol=1e-9, atol=1e-9)


def test_depends_on_the_points_only():
    a, b = (fit_mixture(cloud(), 4, iterations=2) for _ in range(2))
    np.testing.assert_array_equal(a.factors, b.factors)
