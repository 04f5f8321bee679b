import numpy as np
import pytest

from ngbound.errors import LimitError
from ngbound.limits import PRIOR_NAMES, thrust_information, thrust_prior
from tests.limits.toy import correlated


@pytest.mark.parametrize("name", PRIOR_NAMES)
@pytest.mark.parametrize("k", [1, 2, 3])
def test_the_prior_is_flat_in_its_own_coordinates(name, k):
    info = thrust_information(correlated(k=k, A_sigmas=1.0))
    prior = thrust_prior(info, name)
    random = np.random.default_rng(1)
    sigma = np.exp(np.mean(np.log(info.eigenvalues**-0.5)))
    A = np.abs(random.standard_normal((20, k))) * sigma
    w = prior.to_flat(A)
    np.testing.assert_allclose(prior.from_flat(w), A, rtol=1e-9)
    # log |dA / dw| by differences, plus the log density, is the same everywhere
    h = 1e-5
    jacobian = np.stack(
        [
            (prior.from_flat(w + h * e) - prior.from_flat(w - h * e)) / (2.0 * h * sigma)
            for e in np.eye(k)
        ],
        axis=2,
    )
    total = np.linalg.slogdet(jacobian)[1] + prior.log_density(A)
    np.testing.assert_allclose(total, total[0], atol=1e-5)


def test_edges_are_kept_and_recorded():
    info = thrust_information(correlated())
    prior = thrust_prior(info, "log-uniform", lower_au_d2=1e-12, upper_au_d2=1e-9)
    A = np.array([[0.5e-12, 0.0, 0.0], [1e-11, 0.0, 0.0], [2e-9, 0.0, 0.0]])
    assert prior.inside(A).tolist() == [False, True, False]
    assert prior.to_dict()["upper_au_d2"] == 1e-9
    assert "1.0e-12" in str(prior)
    worst = info.eigenvalues[0] ** -0.5
    assert thrust_prior(info).upper_au_d2 == pytest.approx(50.0 * worst)


def test_outward_radial_is_zero_inwards():
    prior = thrust_prior(thrust_information(correlated()), "outward-radial")
    assert prior.inside(np.array([[-1e-11, 1e-9, 0.0], [1e-11, -1e-9, 0.0]])).tolist() == [
        False,
        True,
    ]


@pytest.mark.parametrize(
    "choice", [{"name": "flat"}, {"upper_au_d2": 0.0}, {"name": "log-uniform", "lower_au_d2": 0.0}]
)
def test_bad_priors_are_refused(choice):
    with pytest.raises(LimitError):
        thrust_prior(thrust_information(correlated()), **choice)
