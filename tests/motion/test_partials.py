"""Analytic partials against Richardson-extrapolated differences of the same trajectory."""

from dataclasses import replace

import numpy as np
import pytest

from ngbound.motion import (
    LAWS,
    PARAMETERS,
    ForceModel,
    TableLaw,
    Thrust,
    Window,
    integrate_track,
    partials_along,
    radiation_pressure_au_d2,
)
from ngbound.sky import load_ephemeris
from tests.motion.orbits import BELT, HYPERBOLA, at_perihelion
from tests.units import km

AMOUNTS = (1e-6, 3e-7, 2e-7)
AREA_TO_MASS = 1e-4
STEP = {"exponent": 1e-2, "srp": 1e-6}
KNOTS = np.geomspace(0.1, 10.0, 9)
CURVED = TableLaw(tuple(KNOTS), tuple(Thrust("water-ice").g(float(r)) for r in KNOTS))
EXPONENT = {"power": 2.3, "water-ice": LAWS["water-ice"].m, "co-5au": LAWS["co-5au"].m}


def make_thrust(law: str, exponent: float | None = None, **choices: object) -> Thrust:
    """A thrust of a law, whose exponent may be moved while g(1 au) keeps its value."""
    if law == "table":
        return Thrust(CURVED, **choices)
    if law == "power":
        return Thrust("power", exponent=exponent or EXPONENT[law], **choices)
    form = LAWS[law]
    m = exponent or form.m
    return Thrust(replace(form, m=m, alpha=form.alpha * form.r0_au ** (form.m - m)), **choices)


def numeric(
    name: str,
    state: np.ndarray,
    times: np.ndarray,
    law: str,
    forces: ForceModel,
    lag: float,
    cap_d: float,
    area_to_mass: float = AREA_TO_MASS,
) -> np.ndarray:
    """Central differences extrapolated twice (L. F. Richardson 1911)."""

    def at(change: float) -> np.ndarray:
        moved = state.copy()
        amounts = list(AMOUNTS)
        choices: dict[str, object] = {"lag": lag, "area_to_mass": area_to_mass}
        number = PARAMETERS.index(name)
        if number < 6:
            moved[number] += change
        elif number < 9:
            amounts[number - 6] += change
        elif name == "lag":
            choices["lag"] = lag + change
        elif name == "exponent":
            choices["exponent"] = EXPONENT[law] + change
        else:
            choices["area_to_mass"] = area_to_mass + change / radiation_pressure_au_d2(1.0)
        thrust = make_thrust(law, A=amounts, **choices)
        track = integrate_track(0.0, moved, 0.0, times[-1], thrust, forces, 1e-9, cap_d)
        return track.at_offset(times)

    number = PARAMETERS.index(name)
    step = STEP.get(name, 1e-4 if number < 3 else 1e-6)
    if name == "lag":
        # far from the Sun a lag does little, and little of it drowns in rounding
        step = 5.0 if times[-1] > 200.0 else 0.5
    rows = [(at(step / 2**k) - at(-step / 2**k)) / (2 * step / 2**k) for k in range(3)]
    once = [(4 * rows[k + 1] - rows[k]) / 3 for k in range(2)]
    return (16 * once[1] - once[0]) / 15


@pytest.mark.parametrize("law", [*EXPONENT, "table"])
@pytest.mark.parametrize(
    ("state", "days"), [(BELT, 365.0), (HYPERBOLA, 120.0)], ids=["belt", "hyperbola"]
)
@pytest.mark.parametrize("relativity", ["sun", "all"])
def test_all_parameters_of_all_laws(
    law: str, state: np.ndarray, days: float, relativity: str
) -> None:
    # the hyperbola passes knots of the table, where the second derivative of g jumps: paths and
    # partials are only as good as their steps there, which are therefore kept short
    knots = law == "table" and days < 200.0
    lag = 0.0 if law == "power" or knots else 20.0
    cap_d = 0.1 if knots else 40.0
    names = [n for n in PARAMETERS if n != "exponent" or law in EXPONENT]
    forces = ForceModel(relativity=relativity, sun_j2=True, frame_dragging=True)
    thrust = make_thrust(law, A=AMOUNTS, lag=lag, area_to_mass=AREA_TO_MASS)
    track = integrate_track(0.0, state, 0.0, days, thrust, forces, cap_d=cap_d)
    times = np.array([days / 3, days])
    exact = partials_along(track, names).at_offset(times)
    for c, name in enumerate(names):
        truth = numeric(name, state, times, law, forces, lag, cap_d)
        error = np.abs(exact[:, :3, c] - truth[:, :3]).max(axis=1)
        assert np.all(error < 1e-8 * np.abs(truth[:, :3]).max(axis=1)), name


def test_lag_across_the_knots_of_a_table() -> None:
    # with short steps the partials are as exact as elsewhere; the steps an orbit takes by itself
    # leave 1e-6 of the lag's and 1e-8 of the others', as a thrust of 1e-6 au/d2 turns a corner
    thrust = make_thrust("table", A=AMOUNTS, lag=20.0)
    times = np.array([40.0, 120.0])
    names = ("x", "vy", "A1", "A2", "lag")
    forces = ForceModel()
    own = integrate_track(0.0, HYPERBOLA, 0.0, 120.0, thrust, forces)
    short = integrate_track(0.0, HYPERBOLA, 0.0, 120.0, thrust, forces, 1e-10, 0.05)
    rough = partials_along(own, names).at_offset(times)
    exact = partials_along(short, names).at_offset(times)
    for c, name in enumerate(names):
        size = np.abs(exact[:, :3, c]).max(axis=1)
        truth = numeric(name, HYPERBOLA, times, "table", forces, 20.0, 0.05, 0.0)
        assert np.all(np.abs(exact - truth[..., None])[:, :3, c].max(axis=1) < 1e-8 * size), name
        loose = 1e-6 if name == "lag" else 1e-8
        assert np.all(np.abs(exact - rough)[:, :3, c].max(axis=1) < loose * size), name


@pytest.mark.parametrize("backward", [False, True])
def test_switch_by_distance_moves_with_the_orbit(backward: bool) -> None:
    state = at_perihelion(0.3, 0.9)
    window = Window.between_distances(0.0, 0.6)
    end = -40.0 if backward else 40.0
    thrust = Thrust(A=(3e-6, 1e-6, 5e-7), window=window)
    track = integrate_track(0.0, state, min(0.0, end), max(0.0, end), thrust)
    exact = partials_along(track, PARAMETERS[:9]).at_offset([end])[0]
    for c in range(9):
        step = 1e-5 if c < 3 else 1e-7

        def at(change: float, c: int = c) -> np.ndarray:
            moved = state.copy()
            amounts = np.array([3e-6, 1e-6, 5e-7])
            if c < 6:
                moved[c] += change
            else:
                amounts[c - 6] += change
            push = Thrust(A=amounts, window=window)
            return integrate_track(0.0, moved, min(0.0, end), max(0.0, end), push).at_offset([end])[
                0
            ]

        rough = (at(step) - at(-step)) / (2 * step)
        fine = (at(step / 2) - at(-step / 2)) / step
        truth = (4 * fine - rough) / 3
        assert np.abs(exact[:3, c] - truth[:3]).max() < 1e-6 * np.abs(truth[:3]).max(), c
        # the kick at the switch is a part of this that the tolerance resolves
    without = partials_along(
        integrate_track(0.0, state, min(0.0, end), max(0.0, end), Thrust(A=(3e-6, 1e-6, 5e-7))),
        ("x",),
    )
    assert np.abs(without.at_offset([end])[0, :3, 0] - exact[:3, 0]).max() > 1e-5


def test_coarse_steps_give_the_same_partials() -> None:
    thrust = Thrust("water-ice", A=AMOUNTS, lag=10.0)
    track = integrate_track(0.0, HYPERBOLA, 0.0, 120.0, thrust)
    coarse = integrate_track(0.0, HYPERBOLA, 0.0, 120.0, thrust, eps=5e-6)
    assert coarse.ahead is not None and track.ahead is not None and coarse.ahead.n < track.ahead.n
    times = np.linspace(0.0, 120.0, 13)
    fine = partials_along(track, PARAMETERS[:9]).at_offset(times)
    rough = partials_along(track, PARAMETERS[:9], coarse).at_offset(times)
    scale = np.abs(fine).max(axis=(0, 1))
    assert np.all(np.abs(fine - rough).max(axis=(0, 1)) < 1e-9 * scale)


def test_oblate_earth_in_a_close_encounter() -> None:
    # 40,000 km from the Earth its flattening moves the path by kilometres within days
    epoch = 50.0
    position, velocity = load_ephemeris().posvel("earth", epoch)
    state = np.concatenate([position + [2.7e-4, 0.0, 1e-4], velocity + [0.0, 4.0e-3, 1e-3]])
    end = np.array([epoch + 3.0])
    flat = integrate_track(epoch, state, epoch, end[0])
    round_earth = integrate_track(epoch, state, epoch, end[0], None, ForceModel(earth_j2=False))
    assert 0.1 * km < np.abs(flat.at(end) - round_earth.at(end))[0, :3].max() < 100.0 * km
    exact = partials_along(flat, PARAMETERS[:6]).at_offset([3.0])[0]
    for c in range(6):
        step = 1e-8 if c < 3 else 1e-7
        rows = []
        for k in range(3):
            sides = []
            for sign in (1.0, -1.0):
                moved = state.copy()
                moved[c] += sign * step / 2**k
                sides.append(integrate_track(epoch, moved, epoch, end[0]).at(end)[0])
            rows.append((sides[0] - sides[1]) / (2 * step / 2**k))
        once = [(4 * rows[k + 1] - rows[k]) / 3 for k in range(2)]
        truth = (16 * once[1] - once[0]) / 15
        assert np.abs(exact[:3, c] - truth[:3]).max() < 1e-6 * np.abs(truth[:3]).max(), c
