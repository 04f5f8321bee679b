"""The departure of the best gravity-only refit, against an actual refit."""

import numpy as np
import pytest

from ngbound.constants import ARCSEC_RAD
from ngbound.errors import FitError
from ngbound.limits import thrust_information
from ngbound.report.departure import refit_departure
from tests.report.standins import archive_pair, demo_pair

MAS = 1e-3 * ARCSEC_RAD


def test_it_is_what_a_refit_leaves():
    null, push = demo_pair()
    thrust = np.array([2e-9, -5e-9, 1e-9])
    sky = push.design[:, 6:] @ thrust
    rows = np.repeat(null.keep, 2)
    white = null.noise.mask(null.keep).whiten(np.column_stack([push.design[rows, :6], sky[rows]]))
    scale = np.linalg.norm(white[:, :6], axis=0)
    orbit, *_ = np.linalg.lstsq(white[:, :6] / scale, white[:, 6])
    left = sky - push.design[:, :6] @ (orbit / scale)
    assert refit_departure(push) @ thrust == pytest.approx(left.reshape(-1, 2), abs=1e-4 * MAS)


@pytest.mark.parametrize("pair", [demo_pair, archive_pair])
def test_its_weighted_square_is_the_thrust_information(pair):
    _, push = pair()
    rows = np.repeat(push.keep, 2)
    left = refit_departure(push).reshape(-1, 3)[rows]
    white = push.noise.mask(push.keep).whiten(left)
    expected = thrust_information(push).matrix
    scale = np.sqrt(np.diag(expected))
    assert (white.T @ white) / np.outer(scale, scale) == pytest.approx(
        expected / np.outer(scale, scale), abs=1e-4
    )


def test_refusals():
    null, push = demo_pair()
    with pytest.raises(FitError, match="gravity-only"):
        refit_departure(null)
    with pytest.raises(FitError, match="same arc"):
        refit_departure(push, keep=np.ones(10, dtype=bool))
