"""Invented arcs of an invented object, Wisp, seen from an invented spacecraft: what reconcile and
audit are tried on."""

from typing import Any

import numpy as np

from ngbound.arc import Arc
from ngbound.fit import Fit, fit_orbit
from ngbound.mass import Outgassing, ThrustResult
from ngbound.motion import Thrust
from ngbound.simulate import Recipe, simulate_arc

SIGMA_ARCSEC = 0.06
WATCH = {
    "code": "LTN",
    "name": "Lantern",
    "every_nights": 5,
    "frames": 3,
    "spacing_min": 40.0,
    "rms_arcsec": SIGMA_ARCSEC,
    "elongation_deg": (55.0, 180.0),
    "orbit": {
        "epoch": "2020-01-01",
        "q_au": 0.985,
        "e": 0.021,
        "i_deg": 0.4,
        "node_deg": 210.0,
        "argperi_deg": 251.0,
        "tp": "2020-01-04",
    },
}
PLANE = {"i_deg": 9.3, "node_deg": 48.0, "argperi_deg": 97.0}
ROUND = {"epoch": "2021-01-20", "q_au": 1.9, "e": 0.04, "tp": "2021-01-18", **PLANE}
"""Always near 1.95 au: no law and no onset distance can tell two epochs apart."""
INBOUND = {"epoch": "2021-06-20", "q_au": 1.3, "e": 0.75, "tp": "2022-01-18", **PLANE}
THRUST = np.array([4e-8, 1.2e-8, 0.6e-8])
"""A1, A2, A3 in au/d2."""


def observe(
    first: str,
    last: str,
    amounts: np.ndarray,
    seed: int,
    orbit: dict,
    law: str = "inverse-square",
    window_au: tuple[float, float] | None = None,
) -> tuple[Arc, Recipe]:
    """An arc of Wisp and the truth behind it; the thrust may act in a window of distances only."""
    recipe = Recipe.model_validate(
        {
            "object": {"name": "Wisp", "H": 14.0},
            "orbit": orbit,
            "thrust": {
                "law": law,
                "A_au_d2": tuple(float(a) for a in amounts),
                "window_au": window_au,
            },
            "schedule": {"first": first, "last": last, "seed": seed},
            "spacecraft": [WATCH],
        }
    )
    return simulate_arc(recipe).arc, recipe


def fitted(first: str, last: str, amounts: np.ndarray, seed: int, orbit: dict, **law: Any) -> Fit:
    """The arc fitted under the inverse-square law at all distances, whatever the true one."""
    arc, recipe = observe(first, last, amounts, seed, orbit, **law)
    true = recipe.orbit.orbit().with_thrust(Thrust("inverse-square", A=recipe.thrust.A_au_d2))
    return fit_orbit(arc, Thrust("inverse-square"), initial=true, reject=False)


EARLY = ("2020-08-01", "2021-06-01")
LATE = ("2023-02-01", "2024-02-01")


def dusty() -> Outgassing:
    """Gas and much slow dust, the same at both epochs."""
    return Outgassing.from_dict(
        {
            "rate": "(2.0 +- 0.2)e26",
            "at": 1.95,
            "collimation": 0.5,
            "more": [
                {
                    "rate": "(120 +- 20) kg/s",
                    "species": "dust",
                    "speed": "5 m/s",
                    "collimation": 0.5,
                    "at": 1.95,
                }
            ],
        }
    )


def mass_loss(seed: int) -> tuple[ThrustResult, ThrustResult]:
    """The same force on less than half the mass, three years later."""
    return (
        ThrustResult.from_fit(fitted(*EARLY, THRUST, seed, ROUND), "early", dusty()),
        ThrustResult.from_fit(fitted(*LATE, 2.2 * THRUST, seed + 1000, ROUND), "late", dusty()),
    )


def late_onset(seed: int) -> tuple[ThrustResult, ThrustResult]:
    """No thrust, then thrust, at the same distance from the Sun."""
    return (
        ThrustResult.from_fit(fitted(*EARLY, 0 * THRUST, seed, ROUND), "early"),
        ThrustResult.from_fit(fitted(*LATE, THRUST, seed + 1000, ROUND), "late"),
    )


def rotated_jet(seed: int) -> tuple[ThrustResult, ThrustResult]:
    """A thrust of the same size, turned by 29 degrees."""
    turned = np.array([4e-8, -0.9e-8, 1.0e-8])
    return (
        ThrustResult.from_fit(fitted(*EARLY, turned, seed, ROUND), "early"),
        ThrustResult.from_fit(fitted(*LATE, THRUST, seed + 1000, ROUND), "late"),
    )


INBOUND_ARCS = (("2020-01-01", "2021-06-20"), ("2021-07-01", "2021-12-20"))
ONSET_AU = 1.8


def onset_on_the_way(seed: int) -> tuple[ThrustResult, ThrustResult]:
    """A strong thrust that sets in at 1.8 au, in the midst of the later arc."""
    early, late = (
        fitted(*dates, 10 * THRUST, noise, INBOUND, window_au=(0.0, ONSET_AU))
        for dates, noise in zip(INBOUND_ARCS, (seed, seed + 1000), strict=True)
    )
    return ThrustResult.from_fit(early, "early"), ThrustResult.from_fit(late, "late")


def changed_law(seed: int) -> tuple[ThrustResult, ThrustResult]:
    """Water ice, far out and then nearer, both taken as inverse-square."""
    early, late = (
        fitted(*dates, 3 * THRUST, noise, INBOUND, law="water-ice")
        for dates, noise in zip(INBOUND_ARCS, (seed, seed + 1000), strict=True)
    )
    return ThrustResult.from_fit(early, "early"), ThrustResult.from_fit(late, "late")
