"""What could reconcile two results about one object: one function an explanation.

May import: constants, errors, motion, sky, and from its own room outgassing, size, results,
thrust_history.

Each function scans one free quantity, keeps the values at which one thrust fits both results (chi2
above their own best fits within the chosen quantile, else within three sigma), and compares these
with the published range. Excluded means: no value fits within three sigma, or none that was ever
published or could be conceived.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar
from scipy.stats import chi2, ncx2

from ngbound.constants import AU_D2_TO_M_S2, DAY_S
from ngbound.motion import LAWS
from ngbound.motion import Thrust as LawThrust
from ngbound.sky import tdb_d_to_iso

from .distributions import AtMost, number_text
from .outgassing import DEFAULT_COLLIMATION_SOURCE, Outgassing
from .results import THREE_SIGMA, ThrustResult
from .size import DEFAULT_DENSITY_SOURCE, sphere_mass_kg
from .thrust_history import ArcResponse, History, Misfit, joint, law_history, settle

Floats = NDArray[np.float64]
POSSIBLE, STRAINED, EXCLUDED, UNTESTABLE = "possible", "strained", "excluded", "not testable"
ORDER = (POSSIBLE, STRAINED, EXCLUDED, UNTESTABLE)
SHALLOWEST, STEEPEST = -2.0, 30.0
"""Exponents n of r^-n that are tried."""
N_DRAWS = 4000
FINER_ROUNDS = 4
FINE_ENOUGH = 9
"""A scan is made finer about its best value, so many times at most, until so many values fit."""


def percent(share: float) -> str:
    """A share as a percentage, in words where it is next to none."""
    if share > 0.995:
        return "nearly all"
    return "under 0.01 %" if share < 1e-4 else f"{100 * share:.2g} %"


def chance_text(probability: float) -> str:
    """A probability; those beyond the floating-point range as a bound."""
    return "under 1e-300" if probability < 1e-300 else number_text(probability, 2)


@dataclass(frozen=True)
class Range:
    """A published range, a wider one that is at least conceivable, source and status."""

    low: float
    high: float
    low_edge: float
    high_edge: float
    source: str
    status: str

    def verdict(self, values: Floats) -> str:
        """Of the values that would reconcile: does one lie in the range, or at its edges?"""
        if not values.size:
            return EXCLUDED
        if np.any((values >= self.low) & (values <= self.high)):
            return POSSIBLE
        if np.any((values >= self.low_edge) & (values <= self.high_edge)):
            return STRAINED
        return EXCLUDED

    def __str__(self) -> str:
        return (
            f"published {number_text(self.low)} to {number_text(self.high)}, conceivable "
            f"{number_text(self.low_edge)} to {number_text(self.high_edge)}"
        )

    @property
    def ground(self) -> str:
        """Source and status."""
        if self.status in self.source:
            return self.source
        return f"{self.source} ({self.status})"

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {
            "published": [self.low, self.high],
            "conceivable": [self.low_edge, self.high_edge],
            "source": self.source,
            "status": self.status,
        }


EXPONENTS = Range(
    1.0,
    6.0,
    0.0,
    25.0,
    "slopes of production rates with distance, mean near 2.7: M. F. A'Hearn et al. 1995, Icarus "
    "118, 223; the water law of B. G. Marsden et al. 1973 steepens from 2.15 to above 20",
    "from memory",
)
ONSETS_AU = Range(
    1.0,
    25.0,
    0.3,
    40.0,
    "water ice from about 3 au inwards (B. G. Marsden et al. 1973, r0 = 2.808 au); activity seen "
    "out to 24 au (D. Jewitt et al. 2017, ApJ 847, L19)",
    "from memory",
)
PRODUCTION_FACTORS = Range(
    1 / 3,
    3.0,
    0.1,
    10.0,
    "asymmetry of production about perihelion: M. F. A'Hearn et al. 1995, Icarus 118, 223",
    "from memory",
)
COLLIMATIONS = Range(
    0.2 / 0.7,
    0.7 / 0.2,
    0.1,
    10.0,
    f"ratio of two values between 0.2 and 0.7: {DEFAULT_COLLIMATION_SOURCE}",
    "from memory",
)
DENSITIES = Range(200.0, 800.0, 50.0, 3500.0, DEFAULT_DENSITY_SOURCE, "read in abstracts")
DUST_TO_GAS = (0.0, 6.0)
"""Dust-to-gas mass ratio where no dust was measured: 4 +- 2 for 67P (A. Rotundi et al. 2015,
Science 347, aaa3905; from memory), down to none."""


@dataclass(frozen=True)
class Explanation:
    """One way to make the results agree.

    Attributes
    ----------
    key, title : str
    verdict : str
        One of `ORDER`.
    sentence : str
        With the value needed and its plausibility.
    needed : mapping
        JSON-able numbers: what would have to be true.
    chi2, dof, probability : float or None
        Of the best case of this explanation.
    """

    key: str
    title: str
    verdict: str
    sentence: str
    needed: Mapping[str, Any] = field(default_factory=dict)
    chi2: float | None = None
    dof: int | None = None
    probability: float | None = None
    plausible: Range | None = None

    def __str__(self) -> str:
        text = f"{self.verdict:12s} {self.title}: {self.sentence}"
        if self.probability is None:
            return text
        return f"{text} [best case: p = {chance_text(self.probability)}]"

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {
            "key": self.key,
            "title": self.title,
            "verdict": self.verdict,
            "sentence": self.sentence,
            "needed": dict(self.needed),
            "chi2": self.chi2,
            "dof": self.dof,
            "probability": self.probability,
            "plausible": None if self.plausible is None else self.plausible.to_dict(),
        }


@dataclass(frozen=True)
class Pair:
    """The two results that agree least: ``quiet`` shows the smaller thrust, ``active`` the larger.

    ``level`` is the confidence of every interval, ``dof`` the number of axes both measured.
    """

    quiet: ThrustResult
    active: ThrustResult
    level: float
    dof: int
    rng: np.random.Generator

    def fitting(self, grid: Floats, values: Floats) -> Floats:
        """Values of a grid at which a thrust fits both: within ``level``, or, if there are none,
        within three sigma."""
        for tail in (1.0 - self.level, THREE_SIGMA):
            good = grid[values <= float(chi2.isf(tail, self.dof))]
            if good.size:
                return good
        return grid[:0]

    @property
    def size_au_d2(self) -> float:
        """Size of the larger thrust, au/d2 at g = 1."""
        return float(np.linalg.norm(self.active.amounts_au_d2))

    @property
    def quiet_is_earlier(self) -> bool | None:
        """None without dates."""
        mid = [0.5 * (r.response.first_d + r.response.last_d) for r in (self.quiet, self.active)]
        return None if not all(map(math.isfinite, mid)) else mid[0] < mid[1]

    def chi2(self, quiet: History | None = None, active: History | None = None) -> float:
        """Lowest chi2 of one thrust in both, under given histories (default: their own)."""
        responses = [self.quiet.response, self.active.response]
        return joint(
            responses, [quiet or self.quiet.response.own, active or self.active.response.own]
        )[0]

    def probability(self, value: float, dof: int | None = None) -> float:
        """Chance of at least so large a chi2."""
        return float(chi2.sf(max(value, 0.0), dof or self.dof))


def _scan(
    pair: Pair, grid: Floats, chi2_of: Callable[[float], float]
) -> tuple[Floats, Floats, Floats]:
    """chi2 on a grid, made finer about its minimum while few of its values fit; the grid, the chi2
    and the values that fit."""
    values = np.array([chi2_of(float(x)) for x in grid])
    for _ in range(FINER_ROUNDS):
        if not grid.size or pair.fitting(grid, values).size >= FINE_ENOUGH:
            break
        best = int(np.argmin(values))
        low, high = grid[max(best - 1, 0)], grid[min(best + 1, grid.size - 1)]
        more = np.linspace(low, high, FINE_ENOUGH + 2)[1:-1]
        grid = np.concatenate([grid, more])
        values = np.concatenate([values, [chi2_of(float(x)) for x in more]])
        order = np.argsort(grid, kind="stable")
        grid, values = grid[order], values[order]
    return grid, values, pair.fitting(grid, values)


def _interval(values: Any, unit: str = "", text: Callable[[float], str] = number_text) -> str:
    low, high = text(float(values.min())), text(float(values.max()))
    unit = f" {unit}" if unit else ""
    return f"{low}{unit}" if low == high else f"{low} to {high}{unit}"


def law(pair: Pair) -> Explanation:
    """Another fall-off of the thrust with distance, the same for both."""
    title = "another thrust law"
    grid = np.arange(SHALLOWEST, STEEPEST + 0.01, 0.25)

    def power(n: float) -> History:
        return History(f"r^-{n:g}", lambda r: r**-n)

    grid, values, good = _scan(pair, grid, lambda n: pair.chi2(power(n), power(n)))
    named = {}
    for name, form in LAWS.items():
        history = law_history(LawThrust(form))
        named[name] = pair.chi2(history, history)
    names = np.array(list(named))
    agreeing = [str(name) for name in pair.fitting(names, np.array(list(named.values())))]
    best = min(float(values.min()), min(named.values()))
    verdict = EXPONENTS.verdict(good)
    if agreeing and verdict != POSSIBLE:
        verdict = POSSIBLE
    needed: dict[str, Any] = {
        "best_exponent": float(grid[np.argmin(values)]),
        "exponents": [float(good.min()), float(good.max())] if good.size else None,
        "named_laws": agreeing,
    }
    if good.size:
        low, high = float(good.min()), float(good.max())
        wanted = _interval(good)
        if high >= STEEPEST:
            wanted = f"{number_text(low)} or more"
        elif low <= SHALLOWEST:
            wanted = f"{number_text(high)} or less"
        sentence = f"a fall-off as r^-n with n of {wanted} would fit both"
    else:
        sentence = "no power of r between r^2 and r^-30 makes one thrust fit both"
    told = [name for name in agreeing if not name.startswith("power-")]
    if told:
        sentence += f", and so would {', '.join(told)}"
    return Explanation(
        "law",
        title,
        verdict,
        f"{sentence}; {EXPONENTS}",
        needed,
        best,
        pair.dof,
        pair.probability(best),
        EXPONENTS,
    )


def onset_distance(pair: Pair) -> Explanation:
    """A thrust that acts only within some distance of the Sun."""
    title = "an onset distance"
    low = min(r.response.r_au[0] for r in (pair.quiet, pair.active))
    high = max(r.response.r_au[1] for r in (pair.quiet, pair.active))
    grid = np.geomspace(low, high, 161)[1:-1] if high > 1.001 * low else np.zeros(0)

    def within(result: ThrustResult, r_au: float) -> History:
        own = result.response.own
        return History(f"{own.words} within {r_au:.3g} au", own.g, within_au=r_au)

    grid, values, good = _scan(
        pair, grid, lambda r: pair.chi2(within(pair.quiet, r), within(pair.active, r))
    )
    seen = _measured_beyond(pair.quiet.outgassing, good)
    if seen is not None:
        good = good[good > seen]
    verdict = ONSETS_AU.verdict(good)
    if good.size:
        sentence = f"a thrust that sets in within {_interval(good, 'au')} would fit both"
        needed: dict[str, Any] = {"onset_au": [float(good.min()), float(good.max())]}
    else:
        sentence, needed = "no onset distance makes one thrust fit both", {"onset_au": None}
        if seen is not None:
            sentence = f"gas was measured at {seen:g} au, where there should be none yet"
        elif not grid.size:
            sentence += ": both arcs lie at the same distance"
    best = float(values.min()) if values.size else pair.chi2()
    return Explanation(
        "onset-distance",
        title,
        verdict,
        f"{sentence}; {ONSETS_AU}",
        needed,
        best,
        pair.dof,
        pair.probability(best),
        ONSETS_AU,
    )


def _measured_beyond(budget: Outgassing | None, onsets_au: Floats) -> float | None:
    """Farthest distance of a measured rate that contradicts every onset distance given."""
    if budget is None or not onsets_au.size:
        return None
    found = [e.at_au for e in budget.emissions if not isinstance(e.rate, AtMost)]
    far = max(found, default=0.0)
    return far if far > float(onsets_au.max()) else None


def date(pair: Pair) -> Explanation:
    """A thrust that begins, or ends, at some date."""
    title = "a date of onset" if pair.quiet_is_earlier in (True, None) else "a date of ending"
    if pair.quiet_is_earlier is None:
        return Explanation("date", title, UNTESTABLE, "a result has no dates")
    first = min(r.response.first_d for r in (pair.quiet, pair.active))
    last = max(r.response.last_d for r in (pair.quiet, pair.active))
    grid = np.linspace(first, last, 152)[1:-1]

    def cut(result: ThrustResult, when: float) -> History:
        own = result.response.own
        if pair.quiet_is_earlier:
            return History(f"{own.words} from then", own.g, from_d=when)
        return History(f"{own.words} until then", own.g, until_d=when)

    grid, values, good = _scan(
        pair, grid, lambda t: pair.chi2(cut(pair.quiet, t), cut(pair.active, t))
    )
    best = float(values.min())
    what = "begins" if pair.quiet_is_earlier else "ends"
    if not good.size:
        sentence = f"no date at which the thrust {what} makes one thrust fit both"
        return Explanation(
            "date",
            title,
            EXCLUDED,
            sentence,
            {"dates": None},
            best,
            pair.dof,
            pair.probability(best),
        )
    ends = [str(tdb_d_to_iso(float(d)))[:10] for d in (good.min(), good.max())]
    sentence = f"a thrust that {what} between {ends[0]} and {ends[1]} would fit both"
    verdict = POSSIBLE
    budget = pair.quiet.outgassing
    if budget is not None and any(not isinstance(e.rate, AtMost) for e in budget.emissions):
        verdict = STRAINED
        sentence += f", but gas was measured at the epoch of {pair.quiet.name}"
    return Explanation(
        "date", title, verdict, sentence, {"dates": ends}, best, pair.dof, pair.probability(best)
    )


def _sphere(n: int = 3000) -> Floats:
    """Nearly even directions (n, 3): the golden spiral."""
    z = 1.0 - (2.0 * np.arange(n) + 1.0) / n
    angle = np.pi * (1.0 + math.sqrt(5.0)) * np.arange(n)
    ring = np.sqrt(1.0 - z**2)
    return np.stack([ring * np.cos(angle), ring * np.sin(angle), z], axis=1)


def missed_fraction(found: Misfit, size_au_d2: float, outward: bool = False) -> float:
    """Chance that a thrust of a given size in a random direction is not seen at 3 sigma.

    Mean of P[chi2_k(lambda) < critical], lambda = A^2 n' F n, over the sphere, or over its outward
    half (first axis positive).
    """
    directions = _sphere()
    if outward:
        directions = directions[directions[:, 0] > 0]
    rank = max(found.rank, 1)
    strength = size_au_d2**2 * np.einsum("ni,ij,nj->n", directions, found.matrix, directions)
    critical = float(chi2.isf(THREE_SIGMA, rank))
    return float(np.mean(ncx2.cdf(critical, rank, np.maximum(strength, 1e-12))))


def rotated(pair: Pair) -> Explanation:
    """The same thrust in another direction relative to Sun and orbit."""
    title = "a thrust of the same size in another direction"
    centre = max(pair.size_au_d2, 1e-300)
    guesses = [pair.quiet.amounts_au_d2, pair.active.amounts_au_d2]
    rank = sum(r.response.misfit(r.response.own).rank for r in (pair.quiet, pair.active))
    dof = max(rank - 5, 1)

    responses = [pair.quiet.response, pair.active.response]
    asked = [response.ask(response.own) for response in responses]

    def at(size: float) -> tuple[float, list[Floats]]:
        value, where = 0.0, []
        for response, near, guess in zip(responses, asked, guesses, strict=True):
            low, point = near(guess).lowest_on_sphere(size)
            if response.allowed_sigma:
                low, point = near(point).lowest_on_sphere(size)
            value += low
            where.append(point)
        return value, where

    sizes = np.log(centre) + np.linspace(math.log(0.03), math.log(3.0), 61)
    values = [at(math.exp(x))[0] for x in sizes]
    best = int(np.argmin(values))
    around = (float(sizes[max(best - 1, 0)]), float(sizes[min(best + 1, 60)]))
    found = minimize_scalar(
        lambda x: at(math.exp(x))[0], bounds=around, method="bounded", options={"xatol": 1e-6}
    )
    size = math.exp(float(found.x))
    low, points = at(size)
    probability = pair.probability(low, dof)
    cosine = float(points[0] @ points[1]) / size**2
    turn = math.degrees(math.acos(max(-1.0, min(1.0, cosine))))
    own = pair.quiet.response.misfit(pair.quiet.response.own)
    fraction = missed_fraction(own, size)
    needed: dict[str, Any] = {
        "size_au_d2": size,
        "direction_quiet_RTN": (points[0] / size).tolist(),
        "direction_active_RTN": (points[1] / size).tolist(),
        "turn_deg": turn,
        "missed_fraction": fraction,
        "missed_fraction_outward": missed_fraction(own, size, outward=True),
        "missed_fraction_space_fixed": None,
    }
    hidden = (
        f"{percent(fraction)} of the directions that follow the Sun "
        f"({percent(needed['missed_fraction_outward'])} of the outward ones) would have escaped "
        f"{pair.quiet.name}"
    )
    if isinstance(pair.quiet.response, ArcResponse):
        spin = History("fixed in space", pair.quiet.response.own.g, frame="inertial")
        averaged = missed_fraction(pair.quiet.response.misfit(spin), size)
        needed["missed_fraction_space_fixed"] = averaged
        hidden += (
            f"; of the spin axes fixed in space, along which rotation leaves the mean thrust, "
            f"{percent(averaged)}"
        )
    if probability < THREE_SIGMA:
        verdict = EXCLUDED
        sentence = "no turn of the thrust makes its size the same in both"
    elif pair.quiet.is_detection:
        verdict = POSSIBLE
        sentence = (
            f"a thrust of {number_text(size)} au/d2 turned by about {turn:.0f} degrees between the "
            "two fits both"
        )
    else:
        verdict = POSSIBLE if fraction >= 0.05 else STRAINED if fraction >= 0.003 else EXCLUDED
        sentence = f"a thrust of {number_text(size)} au/d2 could hide in some directions"
    inward = points[0][0] < 0 <= points[1][0]
    if inward and verdict != EXCLUDED:
        sentence += f"; it would point towards the Sun at {pair.quiet.name}"
    return Explanation(
        "rotated", title, verdict, f"{sentence}; {hidden}", needed, low, dof, probability
    )


def space_fixed(pair: Pair) -> Explanation:
    """One thrust along a direction fixed in space (a spin axis), g(r) as quoted."""
    title = "a thrust along an axis fixed in space"
    responses = [pair.quiet.response, pair.active.response]
    if not all(isinstance(response, ArcResponse) for response in responses):
        return Explanation(
            "space-fixed", title, UNTESTABLE, "this needs the arcs, not only quoted numbers"
        )
    histories = [
        History("fixed in space", response.own.g, frame="inertial") for response in responses
    ]
    value, amounts = joint(responses, histories)
    probability = pair.probability(value)
    verdict = POSSIBLE if probability >= THREE_SIGMA else EXCLUDED
    size = float(np.linalg.norm(amounts))
    ra = math.degrees(math.atan2(amounts[1], amounts[0])) % 360.0
    dec = math.degrees(math.asin(amounts[2] / size)) if size > 0 else 0.0
    sentence = (
        f"{number_text(size)} au/d2 along RA {ra:.0f}, Dec {dec:.0f} degrees fits best, with the "
        f"probability {chance_text(probability)}"
    )
    return Explanation(
        "space-fixed",
        title,
        verdict,
        sentence,
        {"size_au_d2": size, "ra_deg": ra, "dec_deg": dec},
        value,
        pair.dof,
        probability,
    )


def amplitude_ratios(pair: Pair) -> tuple[Floats, float, float]:
    """Ratios quiet / active of one thrust, direction kept, that fit both; the best; its chi2."""
    grid = np.concatenate([[0.0], np.geomspace(1e-3, 10.0, 241)])
    responses = [pair.quiet.response, pair.active.response]
    asked = [response.ask(response.own) for response in responses]
    censored = any(response.allowed_sigma for response in responses)
    grid, values, good = _scan(pair, grid, lambda s: settle(asked, [s, 1.0], censored)[0])
    return good, float(grid[np.argmin(values)]), float(values.min())


def _loss_per_impulse(result: ThrustResult, rng: np.random.Generator) -> tuple[Floats, str]:
    """Mass lost per unit of momentum given to the nucleus, s/m: draws, and what they rest on."""
    r_au = float(np.mean(result.response.r_au))
    if result.outgassing is not None:
        draws = result.outgassing.draw(rng, N_DRAWS, "limit")
        force = draws.force_n.sum(axis=0)
        if np.all(force > 0):
            return draws.mass_loss_kg_s.sum(axis=0) / force, "the measured outgassing"
    default = Outgassing("1e26 molecules/s", at=r_au).draw(rng, N_DRAWS)
    ratio = default.mass_loss_kg_s[0] / default.force_n[0]
    dust = rng.uniform(*DUST_TO_GAS, N_DRAWS)
    return ratio * (1.0 + dust), "default speed and collimation, and 0 to 6 times as much dust"


def mass_change(pair: Pair, ratios: Floats, best: float, value: float) -> Explanation:
    """A change of mass between the two epochs at the same force."""
    title = "a change of mass"
    probability = pair.probability(value)
    base: dict[str, Any] = {"best_ratio": best}
    if not ratios.size:
        return Explanation(
            "mass",
            title,
            EXCLUDED,
            "no ratio of the two thrusts, direction kept, fits both",
            base,
            value,
            pair.dof,
            probability,
        )
    top = float(ratios.max())
    base["thrust_ratio"] = [float(ratios.min()), top]
    if pair.quiet_is_earlier is False:
        return Explanation(
            "mass",
            title,
            EXCLUDED,
            f"the thrust fell to {_interval(ratios)} of what it was, so the mass would have had to "
            "grow",
            base,
            value,
            pair.dof,
            probability,
        )
    loss = max(1.0 - top, 0.0)
    lost = f"the object would have had to lose at least {100 * loss:.0f} % of its mass"
    if pair.quiet_is_earlier is None:
        return Explanation(
            "mass",
            title,
            UNTESTABLE,
            f"{lost}; without dates the loss cannot be counted",
            base,
            value,
            pair.dof,
            probability,
        )
    active = pair.active.response
    days = abs(
        0.5 * (active.first_d + active.last_d)
        - 0.5 * (pair.quiet.response.first_d + pair.quiet.response.last_d)
    )
    g = 0.5 * (pair.quiet.response.mean_g + active.mean_g)
    speed = pair.size_au_d2 * g * AU_D2_TO_M_S2 * DAY_S * days
    per_impulse, ground = _loss_per_impulse(pair.active, pair.rng)
    can = float(np.quantile(speed * per_impulse, pair.level))
    masses = pair.active.mass
    if masses is not None and pair.active.outgassing is not None:
        draws = pair.active.outgassing.draw(pair.rng, N_DRAWS, "limit").mass_loss_kg_s
        share = _per_species(pair.active, draws) * g
        # the mass quoted is what is left: the ratio before to after is 1 + loss / rest
        lost_part = share * DAY_S * days / masses.draw(pair.rng, N_DRAWS)
        can = float(np.quantile(np.log1p(lost_part), pair.level))
        ground = "the measured outgassing and the quoted mass"
    must = max(-math.log(top), 0.0) if top > 0 else math.inf
    verdict = POSSIBLE if can >= must else STRAINED if 10 * can >= must else EXCLUDED
    base |= {
        "log_mass_ratio_needed": must if math.isfinite(must) else None,
        "log_mass_ratio_available": can,
        "days": days,
        "ground": ground,
    }
    sentence = (
        f"{lost} in {days:.0f} d; steady loss ({ground}, at the mean g of the two arcs) removes up "
        f"to {percent(1 - math.exp(-can))}"
    )
    if verdict != POSSIBLE:
        sentence += "; only a splitting could"
    return Explanation("mass", title, verdict, sentence, base, value, pair.dof, probability)


def production(pair: Pair, ratios: Floats, best: float, value: float) -> Explanation:
    """A production that differs between the epochs from what the law predicts."""
    title = "a production that differs by epoch"
    probability = pair.probability(value)
    needed: dict[str, Any] = {"best_ratio": best}
    if not ratios.size:
        return Explanation(
            "production",
            title,
            EXCLUDED,
            "no ratio of the two thrusts, direction kept, fits both",
            needed,
            value,
            pair.dof,
            probability,
        )
    needed["ratio"] = [float(ratios.min()), float(ratios.max())]
    sentence = (
        f"the force at {pair.quiet.name}, referred to the same law, would have to be "
        f"{_interval(ratios)} of that at {pair.active.name}"
    )
    measured = _measured_ratio(pair)
    if measured is not None:
        low, high = (
            float(x) for x in np.quantile(measured, [0.5 - pair.level / 2, 0.5 + pair.level / 2])
        )
        needed["measured_ratio"] = [low, high]
        inside = (ratios >= low) & (ratios <= high)
        near = (ratios >= low / 2) & (ratios <= high * 2)
        crossing = ratios.min() <= low and ratios.max() >= high
        verdict = POSSIBLE if inside.any() or crossing else STRAINED if near.any() else EXCLUDED
        sentence += (
            f"; the measured rates give {number_text(low)} to {number_text(high)} at "
            f"{100 * pair.level:g} %"
        )
        return Explanation(
            "production", title, verdict, sentence, needed, value, pair.dof, probability
        )
    verdict = PRODUCTION_FACTORS.verdict(ratios)
    return Explanation(
        "production",
        title,
        verdict,
        f"{sentence}; {PRODUCTION_FACTORS}",
        needed,
        value,
        pair.dof,
        probability,
        PRODUCTION_FACTORS,
    )


def _measured_ratio(pair: Pair) -> Floats | None:
    """Draws of the force over g at the quiet epoch, over that at the active one.

    A law of the speed or a prior of the collimation that both share cancels: only what was
    measured at each epoch counts as different.
    """
    budgets = [pair.quiet.outgassing, pair.active.outgassing]
    if any(budget is None for budget in budgets):
        return None
    both = Outgassing([e for b in budgets if b is not None for e in b.emissions])
    draws = both.draw(pair.rng, N_DRAWS, "uniform").force_n
    count = len(budgets[0].emissions) if budgets[0] else 0
    sums = []
    for result, rows in ((pair.quiet, draws[:count]), (pair.active, draws[count:])):
        sums.append(_per_species(result, rows))
    if not np.all(sums[1] > 0):
        return None
    return sums[0] / sums[1]


def _per_species(result: ThrustResult, rows: Floats) -> Floats:
    """Rates or forces (emissions, draws) referred to g = 1: the mean over the distances at which a
    species was measured, summed over the species."""
    emissions = result.outgassing.emissions if result.outgassing else ()
    g = result.response.own.g(np.array([e.at_au for e in emissions]))
    names = [e.species for e in emissions]
    often = np.array([names.count(name) for name in names], dtype=float)
    return (rows / (g * often)[:, None]).sum(axis=0)


def collimation(pair: Pair, ratios: Floats, best: float, value: float) -> Explanation:
    """A collimation that differs between the epochs, all else equal."""
    verdict = COLLIMATIONS.verdict(ratios)
    needed = {
        "best_ratio": best,
        "ratio": [float(ratios.min()), float(ratios.max())] if ratios.size else None,
    }
    sentence = (
        f"it would have to be {_interval(ratios)} of that at {pair.active.name}"
        if ratios.size
        else "no ratio of the two thrusts, direction kept, fits both"
    )
    return Explanation(
        "collimation",
        "a collimation that differs by epoch",
        verdict,
        f"{sentence}; {COLLIMATIONS}",
        needed,
        value,
        pair.dof,
        pair.probability(value),
        COLLIMATIONS,
    )


def density(
    results: tuple[ThrustResult, ...], rng: np.random.Generator, level: float
) -> Explanation:
    """The bulk density at which the masses and the diameters of the results agree."""
    title = "a density that makes masses and sizes agree"
    masses = [
        (r, draws)
        for r in results
        if (draws := r.mass_draws_kg(rng, N_DRAWS)) is not None and np.all(draws > 0)
    ]
    sizes = [r for r in results if r.diameter is not None]
    if not masses or not sizes:
        return Explanation(
            "density",
            title,
            UNTESTABLE,
            "no result gives a mass (or a production and a thrust) and none a diameter"
            if not masses and not sizes
            else "there is no mass"
            if not masses
            else "there is no diameter",
        )
    low, high = 0.0, math.inf
    told = []
    for owner, draws in masses:
        for other in sizes:
            assert other.diameter is not None
            needed = draws / sphere_mass_kg(other.diameter.draw(rng, N_DRAWS), 1.0)
            edges = np.quantile(needed, [0.5 - level / 2, 0.5 + level / 2])
            open_ended = owner.mass is None and not owner.is_detection
            low, high = max(low, float(edges[0])), min(high, np.inf if open_ended else edges[1])
            told.append(
                f"mass of {owner.name} and diameter of {other.name} need "
                f"{'above ' if open_ended else ''}{number_text(float(edges[0]))}"
                + ("" if open_ended else f" to {number_text(float(edges[1]))}")
                + " kg/m3"
            )
    grid = np.geomspace(DENSITIES.low_edge / 10, DENSITIES.high_edge * 10, 600)
    good = grid[(grid >= low) & (grid <= high)]
    if high >= low and not good.size:
        good = np.array([math.sqrt(low * high)])
    return Explanation(
        "density",
        title,
        DENSITIES.verdict(good),
        f"{'; '.join(told)}; {DENSITIES}",
        {"density_kg_m3": [low, high if math.isfinite(high) else None]},
        plausible=DENSITIES,
    )
