r"""What a thrust would leave in the residuals once the best gravity-only orbit took its part.

May import constants, errors and the public names of the rooms to the left of report.

With X the partials of the directions with respect to the orbit, B those with respect to the
thrust and W the inverse covariance of the observations, an orbit refitted to the sky of a body
under thrust A misses it, to first order, by

    d = P A,   P = B - X (X' W X)^{-1} X' W B,

and P' W P is the information about A after the orbit is marginalised (F_A of the limits room).
Everything here is linear least squares (C. F. Gauss 1821, Theoria combinationis).
"""

from typing import Any

import numpy as np

from ngbound.errors import FitError


def refit_departure(push: Any, keep: np.ndarray | None = None) -> np.ndarray:
    """Departures of the best gravity-only refit, from the partials of a fit with thrust.

    Parameters
    ----------
    push : Fit
        With ``components``, ``n_state``, ``design`` (2n, p; rad per unit parameter, rows RA
        cos(dec) and Dec by turns) and ``noise``.
    keep : ndarray (n,) of bool, optional
        The observations the refit uses; the fit's own ``keep`` by default.

    Returns
    -------
    ndarray (n, 2, k)
        RA cos(dec) and Dec, rad per au/d2, of every observation (kept or not).

    Raises
    ------
    FitError
        The fit holds no thrust, or its rows do not match ``keep``.
    """
    k = len(push.components)
    if k == 0:
        raise FitError(
            "The departures of a thrust need a fit that holds one, but this fit is gravity-only. "
            "Give the fit made with thrust=Thrust(...)."
        )
    design = np.asarray(push.design, dtype=float)
    keep = np.asarray(push.keep if keep is None else keep, dtype=bool)
    if design.shape[0] != 2 * len(keep):
        raise FitError(
            f"The fit with thrust has {design.shape[0] // 2} observations but the fit without has "
            f"{len(keep)}. Both must come from the same arc."
        )
    # Whatever is not thrust is absorbed: the state and, after it, any nuisance parameters.
    thrust_columns = np.arange(push.n_state, push.n_state + k)
    orbit_columns = np.setdiff1d(np.arange(design.shape[1]), thrust_columns)
    rows = np.repeat(keep, 2)
    white = push.noise.mask(keep).whiten(design[rows])
    scale = np.linalg.norm(white, axis=0)
    scale[scale == 0.0] = 1.0
    x = white[:, orbit_columns] / scale[orbit_columns]
    absorbed, *_ = np.linalg.lstsq(x, white[:, thrust_columns], rcond=None)
    left = design[:, thrust_columns] - (design[:, orbit_columns] / scale[orbit_columns]) @ absorbed
    return left.reshape(-1, 2, k)
