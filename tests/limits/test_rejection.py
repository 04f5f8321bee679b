import numpy as np
import pytest

from ngbound.arc import Noise
from ngbound.fit.outliers import judge, residual_chi2
from ngbound.limits.rejection import judge_many, residual_chi2_many
from tests.units import arcsec


@pytest.mark.parametrize("gross", [0.0, 6.0, 60.0])
def test_the_rule_for_many_arcs_is_the_rule_for_one(gross):
    random = np.random.default_rng(1)
    m, n, p = 20, 60, 6
    sigma = random.uniform(0.2, 1.0, (n, 2))
    corr = random.uniform(-0.5, 0.5, n)
    noise = Noise(
        sigma[:, 0], sigma[:, 1], corr, np.zeros(n), np.arange(n), np.full(n, "", dtype=object)
    )
    design = random.standard_normal((n, 2, p)) * arcsec
    root = random.standard_normal((m, p, p)) * 0.1
    cov = root @ root.transpose(0, 2, 1) + 1e-4 * np.eye(p)
    seen = random.standard_normal((m, n, 2)) * sigma * arcsec
    seen[:, 3] += gross * arcsec
    keep = random.random((m, n)) < 0.9
    error = np.einsum("ni,nj->nij", sigma, sigma)
    error[:, 0, 1] *= corr
    error[:, 1, 0] *= corr
    many = residual_chi2_many(seen, design, cov, error, keep)
    for i in range(m):
        alone = residual_chi2(seen[i], design, cov[i], noise, keep[i])
        np.testing.assert_allclose(many[i], alone, rtol=1e-9)
    kept = judge_many(many, keep)
    for i in range(m):
        assert np.array_equal(kept[i], judge(many[i], keep[i]))
