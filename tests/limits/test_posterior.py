import json
from dataclasses import dataclass, replace

import numpy as np
import pytest

from ngbound.errors import LimitError, SamplingError
from ngbound.limits import Posterior, sample_posterior, thrust_information, upper_limit
from ngbound.limits import posterior as module
from ngbound.limits.priors import thrust_prior
from tests.limits.toy import ToyFit, correlated, isotropic

SIGMA = 1e-9


@pytest.fixture(scope="module")
def flat() -> Posterior:
    return sample_posterior(correlated(), seed=1, prior="flat-components")


def test_flat_prior_gives_the_least_squares_covariance(flat):
    fit = correlated()
    scale = np.sqrt(np.diag(fit.normal))
    covariance = np.linalg.inv(fit.normal / np.outer(scale, scale)) / np.outer(scale, scale)
    sigma = np.sqrt(np.diag(covariance))
    deviation = (flat.samples - fit.theta) / sigma
    n_eff = min(flat.ess.values())
    assert np.all(np.abs(deviation.mean(axis=0)) < 4.5 / np.sqrt(n_eff))
    np.testing.assert_allclose(deviation.std(axis=0), 1.0, atol=4.5 / np.sqrt(2.0 * n_eff))
    np.testing.assert_allclose(
        np.corrcoef(deviation.T), covariance / np.outer(sigma, sigma), atol=0.06
    )


def test_convergence_is_reached_and_told(flat):
    assert flat.converged
    assert flat.n_steps >= 50.0 * max(flat.tau.values())
    assert min(flat.ess[name] for name in ("A1", "A2", "A3", "|A|")) >= 5000.0
    assert max(flat.r_hat.values()) < 1.01
    assert flat.message.startswith("The chain has converged")
    assert len(flat.samples) == flat.n_steps * flat.n_walkers


def test_few_evaluations_are_needed_on_a_nearly_linear_arc(flat):
    assert flat.evaluations < 3.0 * min(flat.ess.values())
    assert flat.acceptance_independence > 0.7


@dataclass(frozen=True)
class BentFit(ToyFit):
    """An orbit that follows the thrust along a parabola many conditional sigmas deep."""

    def chi2_many(self, thetas):
        d = (np.asarray(thetas) - self.theta) * np.sqrt(np.diag(self.normal))
        a = d[:, self.n_state :]
        d[:, 0] -= 2.0 * a[:, 0] ** 2 - 1.5 * a[:, 0] * a[:, 1]
        d[:, 4] += 0.5 * a[:, 2] ** 2
        return self.chi2 + np.sum(d**2, axis=1)


def test_an_orbit_that_bends_with_the_thrust_is_followed():
    fit = BentFit(**vars(isotropic(sigma=SIGMA)))
    prior = thrust_prior(thrust_information(fit), "flat-components")
    target = module._Target(fit, thrust_information(fit), prior, False, "gaussian", fit.chi2_many)
    bend = np.zeros((3, 3, 6))
    bend[0, 0, 0], bend[0, 1, 0], bend[1, 0, 0], bend[2, 2, 4] = 2.0, -0.75, -0.75, -0.5
    turn = target.information.eigenvectors
    form = np.einsum("ip,jq,pqn->ijn", turn, turn, target.bend)
    orbit = np.einsum("ijn,mn->ijm", form, target.information.orbit.spread)
    np.testing.assert_allclose(orbit * np.sqrt(np.diag(fit.normal))[:6], bend, atol=1e-6)
    post = sample_posterior(fit, seed=1, prior="flat-components")
    # straight coordinates would not get anywhere: sigma of the first element is 3.8 of its own
    assert post.acceptance_independence > 0.5 and post.converged
    a = post.A_samples / SIGMA
    np.testing.assert_allclose(a.std(axis=0), 1.0, atol=0.05)
    x = (post.samples[:, 0] - 1.0) * np.sqrt(fit.normal[0, 0])
    # x = 2 a^2 - 1.5 a b + noise of unit variance: mean 2, variance 8 + 2.25 + 1
    assert x.mean() == pytest.approx(2.0, abs=0.2)
    assert x.std() == pytest.approx(np.sqrt(11.25), rel=0.08)


def test_isotropic_flat_components_limit_is_2_7955_sigma():
    post = sample_posterior(isotropic(sigma=SIGMA), seed=4, prior="flat-components")
    limit = upper_limit(post, confidence=0.95)
    assert abs(limit.magnitude.value / SIGMA - 2.7955) < 4.0 * limit.magnitude_error.value / SIGMA
    assert limit.magnitude_error.value / SIGMA < 0.04


@pytest.mark.parametrize("k", [1, 2, 3])
def test_isotropic_uniform_limit_without_signal_is_1_96_sigma(k):
    post = sample_posterior(isotropic(k=k, sigma=SIGMA), seed=5)
    limit = upper_limit(post, confidence=0.95)
    assert abs(limit.magnitude.value / SIGMA - 1.95996) < 4.0 * limit.magnitude_error.value / SIGMA
    direction = post.A_samples / np.linalg.norm(post.A_samples, axis=1)[:, None]
    n_eff = min(post.ess.values())
    assert np.all(np.abs(direction.mean(axis=0)) < 4.5 / np.sqrt(n_eff))


@pytest.mark.parametrize("prior", ["isotropic-uniform", "log-uniform", "outward-radial"])
@pytest.mark.parametrize("A_sigmas", [0.0, 3.0])
def test_every_prior_agrees_with_linear_theory_on_a_linear_arc(prior, A_sigmas):
    fit = correlated(A_sigmas=A_sigmas)
    post = sample_posterior(fit, seed=6, prior=prior, target_ess=2000)
    sampled, linear = upper_limit(post), upper_limit(fit, prior=prior)
    error = np.hypot(sampled.magnitude_error.value, linear.magnitude_error.value)
    assert abs(sampled.magnitude.value - linear.magnitude.value) < 4.5 * error
    errors = np.hypot(sampled.component_error.value, linear.component_error.value)
    assert np.all(np.abs(sampled.component.value - linear.component.value) < 4.5 * errors)


def test_curved_likelihood_against_importance_sampling():
    fit = correlated(curvature=0.08)
    post = sample_posterior(fit, seed=7, prior="flat-components")
    random = np.random.default_rng(8)
    z = 1.3 * random.standard_normal((60_000, 9))
    theta = fit.theta + np.linalg.solve(np.linalg.cholesky(fit.normal).T, z.T).T
    log_w = -0.5 * (fit.chi2_many(theta) - fit.chi2) + 0.5 * np.sum((z / 1.3) ** 2, axis=1)
    w = np.exp(log_w - log_w.max())
    w /= w.sum()
    kish = 1.0 / np.sum(w**2)
    mean = w @ theta
    sigma = np.sqrt(w @ (theta - mean) ** 2)
    n_eff = 1.0 / (1.0 / kish + 1.0 / min(post.ess.values()))
    shift = (post.samples.mean(axis=0) - mean) / sigma
    assert np.all(np.abs(shift) < 4.5 / np.sqrt(n_eff))
    np.testing.assert_allclose(post.samples.std(axis=0) / sigma, 1.0, atol=0.06)


def test_same_seed_same_numbers_other_seed_others():
    one, two, other = (
        sample_posterior(correlated(), seed=s, n_walkers=32, target_ess=100) for s in (3, 3, 4)
    )
    assert np.array_equal(one.samples, two.samples)
    assert not np.array_equal(one.samples[: len(other.samples)], other.samples[: len(one.samples)])


def test_two_solutions_are_not_called_converged():
    # the bend has a second exact solution some fifteen sigma away
    post = sample_posterior(correlated(curvature=0.2, A_sigmas=5.0), seed=1, max_steps=200)
    assert not post.converged
    assert "NOT converged within 200 steps" in post.message
    assert "not converged" in str(upper_limit(post)).lower()


def test_free_noise_scale_widens_to_the_residuals():
    fit = replace(correlated(), chi2=4.0 * 191.0)
    held = sample_posterior(fit, seed=9, prior="flat-components", target_ess=2000)
    free = sample_posterior(fit, seed=9, prior="flat-components", noise_scale=True, target_ess=2000)
    ratio = free.A_samples.std(axis=0) / held.A_samples.std(axis=0)
    # Student with nu = 191 degrees of freedom: variance nu / (nu - 2)
    np.testing.assert_allclose(ratio, 2.0 * np.sqrt(191.0 / 189.0), rtol=0.06)
    assert free.noise_scale is not None
    assert np.mean(free.noise_scale) == pytest.approx(2.0, rel=0.02)
    assert np.std(free.noise_scale) == pytest.approx(2.0 / np.sqrt(2.0 * 191.0), rel=0.1)
    assert "noise scale" in free.summary().index


def test_errors_that_rest_on_few_degrees_of_freedom_widen_the_posterior_by_themselves():
    fit = replace(correlated(), noise_dof=12)
    by_itself = sample_posterior(fit, seed=9, prior="flat-components", target_ess=4000)
    off = sample_posterior(fit, seed=9, prior="flat-components", target_ess=4000, noise_dof=None)
    ratio = by_itself.A_samples.std(axis=0) / off.A_samples.std(axis=0)
    np.testing.assert_allclose(ratio, np.sqrt(12.0 / 10.0), rtol=0.06)
    assert np.mean(by_itself.noise_scale) == pytest.approx(1.0, abs=0.1)
    assert off.noise_scale is None and off.information.noise_dof is None
    robust = sample_posterior(
        replace(fit, noise_dof=None), seed=9, prior="flat-components", target_ess=4000
    )
    assert np.array_equal(robust.samples, off.samples)


class Interrupted(Exception):
    """Stands for the process being killed."""


@pytest.mark.parametrize("stop_at", [1, 3])
def test_interrupted_run_resumes_to_the_same_numbers(tmp_path, stop_at):
    fit = correlated(curvature=0.05)
    whole = sample_posterior(fit, seed=11, target_ess=500)
    path = tmp_path / "chain.npz"
    calls = []

    def kill(step: int, total: int, message: str) -> None:
        calls.append((step, total, message))
        if len(calls) == stop_at:
            raise Interrupted

    with pytest.raises(Interrupted):
        sample_posterior(fit, seed=11, target_ess=500, checkpoint=path, progress=kill)
    resumed = sample_posterior(fit, seed=11, target_ess=500, checkpoint=path)
    assert np.array_equal(whole.samples, resumed.samples)
    assert whole.to_dict() == resumed.to_dict()
    assert [p.name for p in tmp_path.iterdir()] == ["chain.npz"]


def test_checkpoint_of_another_problem_or_no_checkpoint_at_all_is_refused(tmp_path):
    path = tmp_path / "chain.npz"
    sample_posterior(correlated(), seed=1, target_ess=200, checkpoint=path)
    with pytest.raises(SamplingError, match="another problem"):
        sample_posterior(correlated(), seed=2, target_ess=200, checkpoint=path)
    path.write_bytes(b"no chain at all")
    with pytest.raises(SamplingError, match="cannot be read"):
        sample_posterior(correlated(), seed=1, checkpoint=path)


def test_orbits_that_cannot_be_computed_are_never_kept():
    fit = replace(correlated(), fails_beyond=16.0)
    post = sample_posterior(fit, seed=12, prior="flat-components", target_ess=1000)
    assert np.all(np.isfinite(post.log_likelihood))
    assert np.max(-2.0 * post.log_likelihood) < 16.0


def test_model_that_always_fails_is_one_sentence():
    with pytest.raises(SamplingError, match="at the least-squares solution itself"):
        sample_posterior(replace(correlated(), fails_beyond=-1.0), seed=1)
    with pytest.raises(SamplingError, match="could be computed"):
        sample_posterior(replace(correlated(), fails_beyond=1e-6), seed=1)


@pytest.mark.parametrize("choice", [{"n_walkers": 63}, {"n_walkers": 4}, {"max_steps": 5}])
def test_choices_out_of_range_are_refused(choice):
    with pytest.raises(LimitError):
        sample_posterior(correlated(), seed=1, **choice)


def test_unknown_prior_and_outward_without_radial_are_refused():
    with pytest.raises(LimitError, match="no prior called"):
        sample_posterior(correlated(), seed=1, prior="jeffreys")
    with pytest.raises(LimitError, match="needs the radial component"):
        sample_posterior(
            ToyFit(**{**vars(correlated(k=1)), "components": "T"}), seed=1, prior="outward-radial"
        )


def test_record_print_and_thinning(flat):
    json.dumps(flat.to_dict())
    assert "prior flat-components" in str(flat)
    thin = flat.thinned(3)
    assert thin.n_steps == -(-flat.n_steps // 3)
    assert np.array_equal(thin.chain(thin.A_samples)[1], flat.chain(flat.A_samples)[3])
    assert flat.A.unit.to_string() == "AU / d2"
    with pytest.raises(LimitError):
        flat.thinned(0)


def test_information_of_the_solution_is_carried(flat):
    np.testing.assert_array_equal(flat.information.matrix, thrust_information(correlated()).matrix)


class FakeArviz:
    """Records what it is given, in the way of ArviZ 0.x and 1.x."""

    def __init__(self, version: str) -> None:
        self.__version__ = version

    def from_dict(self, *args, **kwargs):
        return args[0] if args else kwargs


@pytest.mark.parametrize("version", ["0.23.1", "1.0.0"])
def test_samples_are_handed_to_either_arviz(monkeypatch, flat, version):
    monkeypatch.setattr(module, "arviz", FakeArviz(version))
    groups = flat.to_arviz()
    assert set(groups) == {"posterior", "sample_stats"}
    assert groups["posterior"]["A1"].shape == (flat.n_walkers, flat.n_steps)
    assert groups["posterior"]["A1"][5, 7] == flat.chain(flat.A_samples)[7, 5, 0]


def test_missing_arviz_is_one_sentence(monkeypatch, flat):
    monkeypatch.setattr(module, "arviz", None)
    with pytest.raises(SamplingError, match=r"ngbound\[arviz\]"):
        flat.to_arviz()


class FakeGroups:
    """Writes, or finds no writer."""

    def __init__(self, works: bool) -> None:
        self.works = works

    def to_netcdf(self, path: str) -> str:
        with open(path, "wb") as stream:
            stream.write(b"CDF")
        if not self.works:
            raise ImportError("no netCDF engine")
        return path


@pytest.mark.parametrize("works", [True, False])
def test_netcdf_is_whole_or_absent(monkeypatch, tmp_path, flat, works):
    monkeypatch.setattr(Posterior, "to_arviz", lambda self: FakeGroups(works))
    path = tmp_path / "samples.nc"
    if works:
        assert flat.to_netcdf(path).read_bytes() == b"CDF"
    else:
        with pytest.raises(SamplingError, match="h5netcdf"):
            flat.to_netcdf(path)
    assert [p.name for p in tmp_path.iterdir()] == (["samples.nc"] if works else [])


def test_unknown_or_impossible_likelihoods_are_refused():
    with pytest.raises(LimitError, match="no likelihood called"):
        sample_posterior(correlated(), seed=1, likelihood="cauchy")
    with pytest.raises(LimitError, match="residuals of a fitted arc"):
        sample_posterior(correlated(), seed=1, likelihood="student")
