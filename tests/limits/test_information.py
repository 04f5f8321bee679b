from dataclasses import replace

import numpy as np
import pytest

from ngbound.errors import LimitError
from ngbound.limits import thrust_information
from tests.limits.toy import correlated, isotropic


def test_schur_complement_is_the_inverse_of_the_marginal_covariance():
    fit = correlated()
    info = thrust_information(fit)
    scale = np.sqrt(np.diag(fit.normal))
    covariance = np.linalg.inv(fit.normal / np.outer(scale, scale)) / np.outer(scale, scale)
    np.testing.assert_allclose(info.covariance, covariance[6:, 6:], rtol=1e-9)
    np.testing.assert_allclose(info.matrix, np.linalg.inv(covariance[6:, 6:]), rtol=1e-8)
    sigma = np.sqrt(np.diag(covariance))
    np.testing.assert_allclose(
        info.correlation, covariance[6:, :6] / np.outer(sigma[6:], sigma[:6]), atol=1e-9
    )


def test_conditional_orbit_and_thrust_together_give_the_whole_covariance():
    fit = correlated()
    info = thrust_information(fit)
    gain, spread = info.orbit.gain, info.orbit.spread
    scale = np.sqrt(np.diag(fit.normal))
    covariance = np.linalg.inv(fit.normal / np.outer(scale, scale)) / np.outer(scale, scale)
    rebuilt = spread @ spread.T + gain @ info.covariance @ gain.T
    units = np.sqrt(np.diag(covariance)[:6])
    np.testing.assert_allclose(
        rebuilt / np.outer(units, units), covariance[:6, :6] / np.outer(units, units), atol=1e-9
    )


def test_eigenvectors_rebuild_the_matrix_and_the_worst_comes_first():
    info = thrust_information(correlated())
    rebuilt = info.eigenvectors @ np.diag(info.eigenvalues) @ info.eigenvectors.T
    np.testing.assert_allclose(rebuilt, info.matrix, rtol=1e-9)
    assert np.all(np.diff(info.eigenvalues) >= 0.0)
    assert np.isclose(info.sigma_held(info.eigenvectors[:, 0]).value, info.eigenvalues[0] ** -0.5)


def test_held_is_never_worse_than_free_and_inflations_multiply():
    fit = correlated()
    info = thrust_information(fit)
    for i, letter in enumerate("RTN"):
        held, free = info.sigma_held(letter).value, info.sigma_free(letter).value
        assert held <= free
        assert np.isclose(info.inflation_by_thrust[i], (free / held) ** 2)
        assert np.isclose(info.inflation_by_orbit[i], fit.normal[6 + i, 6 + i] * held**2)
    assert np.all((info.absorbed_by_orbit >= 0.0) & (info.absorbed_by_orbit < 1.0))


def test_units_of_the_orbit_do_not_matter():
    fit = correlated()
    units = np.r_[1e6, 1e-3, 4.0, 1e9, 7.0, 1e-5, 1.0, 1.0, 1.0]
    other = replace(fit, normal=fit.normal * np.outer(units, units))
    np.testing.assert_allclose(
        thrust_information(other).matrix, thrust_information(fit).matrix, rtol=1e-10
    )


def test_a_component_is_named_by_letter_and_absorption_is_told():
    info = thrust_information(isotropic())
    assert info.sigma_held("T").to_value("au/d2") == pytest.approx(1e-9)
    assert info.sentences[0].startswith("The orbit absorbs 0.0 % of the information on the radial")
    assert "axis 1" in str(info)
    assert info.to_dict()["components"] == "RTN"


def test_fit_without_thrust_is_refused():
    with pytest.raises(LimitError, match="no thrust in it"):
        thrust_information(isotropic(k=0))


def test_parameters_that_cannot_be_told_apart_are_named():
    fit = isotropic()
    normal = fit.normal.copy()
    normal[0, 6] = normal[6, 0] = np.sqrt(normal[0, 0] * normal[6, 6])
    with pytest.raises(LimitError, match="x, A1|A1, x"):
        thrust_information(replace(fit, normal=normal))


def test_a_parameter_without_information_is_named():
    fit = isotropic()
    normal = fit.normal.copy()
    normal[8, 8] = 0.0
    with pytest.raises(LimitError, match="parameter A3"):
        thrust_information(replace(fit, normal=normal))


@pytest.mark.parametrize("direction", ["Q", [0.0, 0.0, 0.0], [1.0, 2.0], [np.nan, 1.0, 0.0]])
def test_bad_directions_are_refused(direction):
    with pytest.raises(LimitError):
        thrust_information(isotropic()).sigma_held(direction)
