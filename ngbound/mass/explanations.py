"""What could reconcile two results about one object: one function an explanation.

May import: constants, errors, motion, rounding, sky, and from its own room distributions,
outgassing, size, results and thrust_history.

Each function scans one free quantity, keeps the values at which one thrust fits the results (chi2
above their own best fits within the chosen quantile, else within three sigma; the free quantity
takes one degree of freedom where there are two or more), and compares these with the published
range. Excluded means: no value fits within three sigma, or none that was ever published or could be
conceived. Strained means: only values outside the published range fit, or so small a share of those
that were tried that it would be a coincidence.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar
from scipy.stats import chi2, ncx2, norm

from ngbound.constants import AU_D2_TO_M_S2, DAY_S
from ngbound.motion import LAWS
from ngbound.motion import Thrust as LawThrust
from ngbound.rounding import up
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
FINELY_TUNED = 0.05
"""An onset for which less than this share of the range tried fits is a coincidence, unless ..."""
PREFERRED = 16.0
"""... the arcs themselves prefer it to the steady thrust by so much in chi2 (4 sigma). By as much,
an explanation that fits better makes another one strained."""
NEAREST = 1e-3
"""Weight in chi2 of (ln size)^2 where many sizes of a turned thrust fit equally well."""
RATE_ERROR = 0.2
"""Relative error of a measured rate that was quoted without one."""


def percent(share: float, text: Callable[[float], str] = "{:.2g}".format) -> str:
    """A share as a percentage, in words where it is next to none or all."""
    if share > 0.995:
        return "nearly all"
    return "under 0.01 %" if share < 1e-4 else f"{text(100 * share)} %"


def short(value: float) -> str:
    """Two digits, no zeros behind the point."""
    return f"{float(f'{value:.2g}'):g}"


def chance_text(probability: float) -> str:
    """A probability; those beyond the floating-point range as a bound."""
    return "under 1e-300" if probability < 1e-300 else number_text(probability, 2)


@dataclass(frozen=True)
class Range:
    """A published range, a wider one that is at least conceivable, source and status."""

    what: str
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
            f"published {self.what}: {short(self.low)} to {short(self.high)}, conceivable "
            f"{short(self.low_edge)} to {short(self.high_edge)}"
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
    "values of n",
    1.0,
    6.0,
    0.0,
    25.0,
    "slopes of production rates with distance, mean near 2.7: M. F. A'Hearn et al. 1995, Icarus "
    "118, 223; the water law of B. G. Marsden et al. 1973 steepens from 2.15 to above 20",
    "from memory",
)
ONSETS_AU = Range(
    "onsets in au",
    1.0,
    25.0,
    0.3,
    40.0,
    "water ice from about 3 au inwards (B. G. Marsden et al. 1973, r0 = 2.808 au); activity seen "
    "out to 24 au (D. Jewitt et al. 2017, ApJ 847, L19)",
    "from memory",
)
PRODUCTION_FACTORS = Range(
    "ratios",
    1 / 3,
    3.0,
    0.1,
    10.0,
    "asymmetry of production about perihelion: M. F. A'Hearn et al. 1995, Icarus 118, 223",
    "from memory",
)
COLLIMATIONS = Range(
    "ratios",
    0.2 / 0.7,
    0.7 / 0.2,
    0.1,
    10.0,
    f"ratio of two values between 0.2 and 0.7: {DEFAULT_COLLIMATION_SOURCE}",
    "from memory",
)
DENSITIES = Range(
    "densities in kg/m3", 200.0, 800.0, 50.0, 3500.0, DEFAULT_DENSITY_SOURCE, "read in abstracts"
)
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
        return f"{text} [p of the best fit: {chance_text(self.probability)}]"

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


def compared(told: list[Explanation]) -> list[Explanation]:
    """The same; those that fit far worse than the best possible one are strained at most."""
    fits = [(e.chi2, e.title) for e in told if e.verdict == POSSIBLE and e.chi2 is not None]
    best, title = min(fits, default=(math.inf, ""))
    out = []
    for found in told:
        if found.verdict == POSSIBLE and found.chi2 is not None:
            worse = found.chi2 - best
            if worse > PREFERRED:
                found = replace(
                    found,
                    verdict=STRAINED,
                    sentence=f"{found.sentence}; {title} fits better, by {short(worse)} in chi2",
                )
        out.append(found)
    return out


@dataclass(frozen=True)
class Pair:
    """The two results that agree least: ``quiet`` shows the smaller thrust, ``active`` the larger.

    ``level`` is the confidence of every interval, ``dof`` the number of axes both measured;
    ``results`` are all there are, and ``dof_all`` their degrees of freedom.
    """

    quiet: ThrustResult
    active: ThrustResult
    level: float
    dof: int
    rng: np.random.Generator
    results: tuple[ThrustResult, ...]
    dof_all: int

    @property
    def size_au_d2(self) -> float:
        """Size of the larger thrust, au/d2 at g = 1."""
        return float(np.linalg.norm(self.active.amounts_au_d2))

    @property
    def quiet_is_earlier(self) -> bool | None:
        """None without dates."""
        mid = [0.5 * (r.response.first_d + r.response.last_d) for r in (self.quiet, self.active)]
        return None if not all(map(math.isfinite, mid)) else mid[0] < mid[1]

    @property
    def all_words(self) -> str:
        """ "both", or "all three" and so on."""
        return "both" if len(self.results) == 2 else f"all {len(self.results)}"

    def chi2(self, history: History | Callable[[ThrustResult], History]) -> float:
        """Lowest chi2 of one thrust in all results, under one history or one for each."""
        responses = [result.response for result in self.results]
        histories = [history if isinstance(history, History) else history(r) for r in self.results]
        return joint(responses, histories)[0]

    def likelihood(self, value: float, dof: int | None = None) -> float:
        """Chance of at least so large a chi2."""
        return float(chi2.sf(max(value, 0.0), dof or self.dof))


@dataclass(frozen=True, eq=False)
class Scan:
    """chi2 over the values of one quantity; ``good`` are those that fit.

    ``share`` of the range tried that fits, in the scale of the grid (``log``: its logarithm).
    """

    grid: Floats
    values: Floats
    good: Floats
    dof: int
    share: float

    @property
    def lowest(self) -> float:
        """Smallest chi2; infinite for an empty grid."""
        return float(self.values.min()) if self.values.size else math.inf

    @property
    def best(self) -> float:
        """Where that is."""
        return float(self.grid[np.argmin(self.values)])


def fitting(grid: Floats, values: Floats, level: float, dof: int) -> Floats:
    """Values of a grid at which a thrust fits: within ``level``, or, if there are none, within
    three sigma. Where an arc prefers some value to the law it was fitted with, chi2 is negative
    there and counts from its lowest."""
    floor = min(float(values.min(initial=0.0)), 0.0)
    for tail in (1.0 - level, THREE_SIGMA):
        good = grid[values - floor <= float(chi2.isf(tail, dof))]
        if good.size:
            return good
    return grid[:0]


def _scan(
    grid: Floats, chi2_of: Callable[[float], float], level: float, dof: int, log: bool = False
) -> Scan:
    """chi2 on a grid, made finer about its minimum while few of its values fit."""
    dof = max(dof - 1, 1)
    values = np.array([chi2_of(float(x)) for x in grid])
    for _ in range(FINER_ROUNDS):
        if not grid.size or fitting(grid, values, level, dof).size >= FINE_ENOUGH:
            break
        best = int(np.argmin(values))
        low, high = grid[max(best - 1, 0)], grid[min(best + 1, grid.size - 1)]
        more = np.linspace(low, high, FINE_ENOUGH + 2)[1:-1]
        grid = np.concatenate([grid, more])
        values = np.concatenate([values, [chi2_of(float(x)) for x in more]])
        order = np.argsort(grid, kind="stable")
        grid, values = grid[order], values[order]
    good = fitting(grid, values, level, dof)
    share = math.nan
    if grid.size > 1:
        widths = np.gradient(np.log(grid) if log else grid)
        share = float(widths[np.isin(grid, good)].sum() / widths.sum())
    return Scan(grid, values, good, dof, share)


def _tuned(scan: Scan) -> bool:
    """Whether a fit is a coincidence: a small share of the range, which no arc asks for."""
    return scan.share < FINELY_TUNED and scan.lowest > -PREFERRED


def _share_text(scan: Scan, what: str) -> str:
    text = f"{percent(scan.share)} of the {what} tried"
    if _tuned(scan):
        return f"only {text}, which would be a coincidence"
    if scan.share < FINELY_TUNED:
        return f"{text}, and the arcs themselves ask for it"
    return text


def _interval(values: Any, unit: str = "", text: Callable[[float], str] = number_text) -> str:
    low, high = text(float(values.min())), text(float(values.max()))
    unit = f" {unit}" if unit else ""
    return f"{low}{unit}" if low == high else f"{low} to {high}{unit}"


def law(pair: Pair) -> Explanation:
    """Another fall-off of the thrust with distance, the same for all; rates measured at several
    distances, upper limits among them, have a say."""
    title = "another thrust law"
    gas = _rates(pair.results)

    def power(n: float) -> History:
        return History(f"r^-{n:g}", lambda r: r**-n)

    def gas_misfit(g: Callable[[Floats], Floats]) -> float:
        return sum(_rate_misfit(rows, g) for rows in gas)

    grid = np.arange(SHALLOWEST, STEEPEST + 0.01, 0.25)
    gas_alone = np.array([gas_misfit(power(n).g) for n in grid])
    floor = float(gas_alone.min())
    dof = pair.dof_all + bool(gas)
    scan = _scan(
        grid,
        lambda n: pair.chi2(power(n)) + gas_misfit(power(n).g) - floor,
        pair.level,
        dof,
    )
    named = {}
    for name, form in LAWS.items():
        history = law_history(LawThrust(form))
        named[name] = pair.chi2(history) + gas_misfit(history.g) - floor
    names, good = np.array(list(named)), scan.good
    found = fitting(names, np.array(list(named.values())), pair.level, scan.dof)
    agreeing = [str(name) for name in found]
    best = min(scan.lowest, min(named.values()))
    verdict = EXPONENTS.verdict(good)
    if agreeing and verdict != POSSIBLE:
        verdict = POSSIBLE
    needed: dict[str, Any] = {
        "best_exponent": scan.best,
        "exponents": [float(good.min()), float(good.max())] if good.size else None,
        "named_laws": agreeing,
        "exponents_of_rates": None,
    }
    if good.size:
        sentence = f"a fall-off as r^-n with n of {_exponents(good)} would fit {pair.all_words}"
    else:
        sentence = (
            f"no power of r between r^2 and r^-30 makes one thrust fit {pair.all_words}"
            f"{' and the rates' if gas else ''}"
        )
    told = [name for name in agreeing if not name.startswith("power-")]
    if told:
        sentence += f", and so would {', '.join(told)}"
    if gas:
        allowed = grid[gas_alone - floor <= float(chi2.isf(1.0 - pair.level, 1))]
        needed["exponents_of_rates"] = [float(allowed.min()), float(allowed.max())]
        limits = sum(row.limit for rows in gas for row in rows)
        among = f", {limits} of them upper limit{'s' * (limits > 1)}," if limits else ""
        sentence += f"; the rates{among} by themselves ask for n of {_exponents(allowed)}"
    return Explanation(
        "law",
        title,
        verdict,
        f"{sentence}; {EXPONENTS}",
        needed,
        best,
        scan.dof,
        pair.likelihood(best, scan.dof),
        EXPONENTS,
    )


def _exponents(good: Floats) -> str:
    low, high = float(good.min()), float(good.max())
    if low <= SHALLOWEST and high >= STEEPEST:
        return "any size"
    if high >= STEEPEST:
        return f"{number_text(low)} or more"
    if low <= SHALLOWEST:
        return f"{number_text(high)} or less"
    return _interval(good)


@dataclass(frozen=True)
class _Rate:
    """Force of one emission, up to a factor common to its species: ln of it with its error, or of
    its upper limit, which is so many sigma."""

    r_au: float
    log: float
    sigma: float
    limit: bool


def _rates(results: tuple[ThrustResult, ...]) -> list[list[_Rate]]:
    """Rates times speeds, by species, where several distances constrain the law: at least one
    measured."""
    found: dict[str, list[_Rate]] = {}
    for result in results:
        for one in result.outgassing.emissions if result.outgassing else ():
            rate = one.rate
            scale = math.log(one.kg_per_count * one.median_speed_m_s)
            if isinstance(rate, AtMost):
                sigmas = float(norm.isf(1.0 - (rate.confidence or 0.95)))
                row = _Rate(one.at_au, scale + math.log(rate.limit), sigmas, True)
            else:
                low, middle, high = np.log(rate.ppf(np.array([0.16, 0.5, 0.84])))
                error = 0.5 * float(high - low) or RATE_ERROR
                row = _Rate(one.at_au, scale + float(middle), error, False)
            found.setdefault(one.species, []).append(row)
    return [
        rows
        for rows in found.values()
        if len({row.r_au for row in rows}) > 1 and any(not row.limit for row in rows)
    ]


def _rate_misfit(rows: list[_Rate], g: Callable[[Floats], Floats]) -> float:
    """chi2 of the rates of one species under a law, its amount free.

    A measured rate is Gaussian in its logarithm; an upper limit at so many sigma stands for an
    estimate of zero, so that it speaks against large rates only.
    """
    law = np.log(np.maximum(g(np.array([row.r_au for row in rows])), 1e-300))
    logs, sigmas = (np.array([getattr(row, k) for row in rows]) for k in ("log", "sigma"))
    limit = np.array([row.limit for row in rows])
    offsets = (logs - law)[~limit]

    def at(amount: float) -> float:
        off = (logs - law - amount) / np.where(limit, 1.0, sigmas)
        above = sigmas * np.exp(np.minimum(-off, 50.0))
        return float(np.sum(np.where(limit, above, off) ** 2))

    # between the least that the limits allow and the most that the measured rates ask for
    low = float(offsets.min() - 10.0 * sigmas[~limit].max() - 1.0)
    found = minimize_scalar(at, bounds=(low, float(offsets.max()) + 1.0), method="bounded")
    return float(found.fun)


def onset_distance(pair: Pair) -> Explanation:
    """A thrust that acts only within some distance of the Sun."""
    title = "an onset distance"
    low = min(r.response.r_au[0] for r in pair.results)
    high = max(r.response.r_au[1] for r in pair.results)
    grid = np.geomspace(low, high, 161)[1:-1] if high > 1.001 * low else np.zeros(0)

    def within(result: ThrustResult, r_au: float) -> History:
        own = result.response.own
        return History(f"{own.words} within {r_au:.3g} au", own.g, within_au=r_au)

    scan = _scan(
        grid,
        lambda r: pair.chi2(lambda result: within(result, r)),
        pair.level,
        pair.dof_all,
        log=True,
    )
    good = scan.good
    seen = _measured_beyond(pair.quiet.outgassing, good)
    if seen is not None:
        good = good[good > seen]
    verdict = ONSETS_AU.verdict(good)
    needed: dict[str, Any] = {"onset_au": None, "share_of_range": None}
    if good.size:
        sentence = (
            f"a thrust that sets in within {_interval(good, 'au')} would fit {pair.all_words} "
            f"({_share_text(scan, 'distances')})"
        )
        needed = {"onset_au": [float(good.min()), float(good.max())], "share_of_range": scan.share}
        if _tuned(scan) and verdict == POSSIBLE:
            verdict = STRAINED
    else:
        sentence = f"no onset distance makes one thrust fit {pair.all_words}"
        if seen is not None:
            sentence = f"gas was measured at {seen:g} au, where there should be none yet"
        elif not grid.size:
            sentence += ": the arcs lie at the same distance"
    best = scan.lowest if grid.size else pair.chi2(lambda result: result.response.own)
    return Explanation(
        "onset-distance",
        title,
        verdict,
        f"{sentence}; {ONSETS_AU}",
        needed,
        best,
        scan.dof,
        pair.likelihood(best, scan.dof),
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
    spans = [(r.response.first_d, r.response.last_d) for r in pair.results]
    if not np.all(np.isfinite(spans)):
        return Explanation("date", title, UNTESTABLE, "a result has no dates")
    grid = np.linspace(float(np.min(spans)), float(np.max(spans)), 152)[1:-1]

    def cut(result: ThrustResult, when: float) -> History:
        own = result.response.own
        if pair.quiet_is_earlier:
            return History(f"{own.words} from then", own.g, from_d=when)
        return History(f"{own.words} until then", own.g, until_d=when)

    scan = _scan(grid, lambda t: pair.chi2(lambda result: cut(result, t)), pair.level, pair.dof_all)
    found: dict[str, Any] = {
        "chi2": scan.lowest,
        "dof": scan.dof,
        "probability": pair.likelihood(scan.lowest, scan.dof),
    }
    what = "begins" if pair.quiet_is_earlier else "ends"
    if not scan.good.size:
        sentence = f"no date at which the thrust {what} makes one thrust fit {pair.all_words}"
        needed: dict[str, Any] = {"dates": None, "share_of_range": None}
        return Explanation("date", title, EXCLUDED, sentence, needed, **found)
    ends = [str(tdb_d_to_iso(float(d)))[:10] for d in (scan.good.min(), scan.good.max())]
    sentence = (
        f"a thrust that {what} between {ends[0]} and {ends[1]} would fit {pair.all_words} "
        f"({_share_text(scan, 'dates')})"
    )
    verdict = STRAINED if _tuned(scan) else POSSIBLE
    budget = pair.quiet.outgassing
    if budget is not None and any(not isinstance(e.rate, AtMost) for e in budget.emissions):
        verdict = STRAINED
        sentence += f", but gas was measured at the epoch of {pair.quiet.name!r}"
    needed = {"dates": ends, "share_of_range": scan.share}
    return Explanation("date", title, verdict, sentence, needed, **found)


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

    def cost(log_size: float) -> float:
        # of sizes that fit as well, the one nearest to what the active result shows
        return at(math.exp(log_size))[0] + NEAREST * (log_size - math.log(centre)) ** 2

    sizes = np.log(centre) + np.linspace(math.log(0.03), math.log(3.0), 61)
    best = int(np.argmin([cost(float(x)) for x in sizes]))
    around = (float(sizes[max(best - 1, 0)]), float(sizes[min(best + 1, 60)]))
    found = minimize_scalar(cost, bounds=around, method="bounded", options={"xatol": 1e-6})
    size = math.exp(float(found.x))
    low, points = at(size)
    probability = pair.likelihood(low, dof)
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
        f"of all directions that are fixed with respect to Sun and orbit, {percent(fraction)} "
        f"({percent(needed['missed_fraction_outward'])} of those with an outward part) would have "
        f"escaped {pair.quiet.name!r} at 3 sigma"
    )
    if isinstance(pair.quiet.response, ArcResponse):
        spin = History("fixed in space", pair.quiet.response.own.g, frame="inertial")
        averaged = missed_fraction(pair.quiet.response.misfit(spin), size)
        needed["missed_fraction_space_fixed"] = averaged
        hidden += (
            f"; of the spin axes fixed in space, along which rotation leaves the mean thrust, "
            f"{percent(averaged)} would have"
        )
    if probability < THREE_SIGMA:
        verdict = EXCLUDED
        sentence = "no turn of the thrust makes its size the same in both"
    elif pair.quiet.is_detection:
        verdict = POSSIBLE
        sentence = (
            f"a thrust of {number_text(size)} au/d2, turned by about {turn:.0f} degrees between "
            "the two, fits both"
        )
    else:
        verdict = POSSIBLE if fraction >= 0.05 else STRAINED if fraction >= 0.003 else EXCLUDED
        sentence = f"a thrust of {number_text(size)} au/d2 could have hidden: {hidden}"
        if verdict == EXCLUDED:
            sentence = f"a thrust of {number_text(size)} au/d2 could hardly have hidden: {hidden}"
    inward = points[0][0] < 0 <= points[1][0]
    if inward and verdict != EXCLUDED:
        sentence += f"; it would point towards the Sun at {pair.quiet.name!r}"
    return Explanation("rotated", title, verdict, sentence, needed, low, dof, probability)


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
    probability = pair.likelihood(value)
    verdict = POSSIBLE if probability >= THREE_SIGMA else EXCLUDED
    size = float(np.linalg.norm(amounts))
    ra = math.degrees(math.atan2(amounts[1], amounts[0])) % 360.0
    dec = math.degrees(math.asin(amounts[2] / size)) if size > 0 else 0.0
    sentence = f"{number_text(size)} au/d2 along RA {ra:.0f}, Dec {dec:.0f} degrees fits best"
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


def amplitude_ratios(pair: Pair) -> Scan:
    """chi2 of ratios quiet / active of one thrust, direction kept."""
    grid = np.concatenate([[0.0], np.geomspace(1e-3, 10.0, 241)])
    responses = [pair.quiet.response, pair.active.response]
    asked = [response.ask(response.own) for response in responses]
    censored = any(response.allowed_sigma for response in responses)
    return _scan(grid, lambda s: settle(asked, [s, 1.0], censored)[0], pair.level, pair.dof)


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


def mass_change(pair: Pair, scan: Scan) -> Explanation:
    """A change of mass between the two epochs at the same force."""
    title = "a change of mass"
    probability = pair.likelihood(scan.lowest, scan.dof)
    base: dict[str, Any] = {"best_ratio": scan.best}
    if not scan.good.size:
        return Explanation(
            "mass",
            title,
            EXCLUDED,
            "no ratio of the two thrusts, direction kept, fits both",
            base,
            scan.lowest,
            scan.dof,
            probability,
        )
    top = float(scan.good.max())
    base["thrust_ratio"] = [float(scan.good.min()), top]
    if pair.quiet_is_earlier is False:
        return Explanation(
            "mass",
            title,
            EXCLUDED,
            f"the thrust fell to {_interval(scan.good)} of what it was, so the mass would have had "
            "to grow",
            base,
            scan.lowest,
            scan.dof,
            probability,
        )
    loss = max(1.0 - top, 0.0)
    least = math.floor(100 * loss + 1e-9)
    lost = f"the object would have had to lose at least {least} % of its mass"
    if pair.quiet_is_earlier is None:
        return Explanation(
            "mass",
            title,
            UNTESTABLE,
            f"{lost}; whether it could is not to be said without dates",
            base,
            scan.lowest,
            scan.dof,
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
    # an upper bound on the mass tells nothing of how little of it was lost
    if masses is not None and pair.active.mass_bound >= 0 and pair.active.outgassing is not None:
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
        f"to {percent(-math.expm1(-can), up)}"
    )
    if verdict != POSSIBLE:
        sentence += "; only a splitting could"
    return Explanation("mass", title, verdict, sentence, base, scan.lowest, scan.dof, probability)


def production(pair: Pair, scan: Scan) -> Explanation:
    """A production that differs between the epochs from what the law predicts."""
    title = "a production that differs by epoch"
    probability = pair.likelihood(scan.lowest, scan.dof)
    needed: dict[str, Any] = {"best_ratio": scan.best}
    if not scan.good.size:
        return Explanation(
            "production",
            title,
            EXCLUDED,
            "no ratio of the two thrusts, direction kept, fits both",
            needed,
            scan.lowest,
            scan.dof,
            probability,
        )
    needed["ratio"] = [float(scan.good.min()), float(scan.good.max())]
    sentence = (
        f"the force at {pair.quiet.name!r}, referred to the same law, would have to be "
        f"{_interval(scan.good)} times that at {pair.active.name!r}"
    )
    measured = _measured_ratio(pair)
    if measured is not None:
        low, high = (
            float(x) for x in np.quantile(measured, [0.5 - pair.level / 2, 0.5 + pair.level / 2])
        )
        needed["measured_ratio"] = [low, high]
        inside = (scan.good >= low) & (scan.good <= high)
        near = (scan.good >= low / 2) & (scan.good <= high * 2)
        crossing = scan.good.min() <= low and scan.good.max() >= high
        verdict = POSSIBLE if inside.any() or crossing else STRAINED if near.any() else EXCLUDED
        sentence += (
            f"; the measured rates give {number_text(low)} to {number_text(high)} at "
            f"{100 * pair.level:g} %"
        )
        return Explanation(
            "production", title, verdict, sentence, needed, scan.lowest, scan.dof, probability
        )
    verdict = PRODUCTION_FACTORS.verdict(scan.good)
    return Explanation(
        "production",
        title,
        verdict,
        f"{sentence}; {PRODUCTION_FACTORS}",
        needed,
        scan.lowest,
        scan.dof,
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


def collimation(pair: Pair, scan: Scan) -> Explanation:
    """A collimation that differs between the epochs, all else equal."""
    verdict = COLLIMATIONS.verdict(scan.good)
    needed = {
        "best_ratio": scan.best,
        "ratio": [float(scan.good.min()), float(scan.good.max())] if scan.good.size else None,
    }
    sentence = (
        f"at {pair.quiet.name!r} it would have to be {_interval(scan.good)} times that at "
        f"{pair.active.name!r}"
        if scan.good.size
        else "no ratio of the two thrusts, direction kept, fits both"
    )
    return Explanation(
        "collimation",
        "a collimation that differs by epoch",
        verdict,
        f"{sentence}; {COLLIMATIONS}",
        needed,
        scan.lowest,
        scan.dof,
        pair.likelihood(scan.lowest, scan.dof),
        COLLIMATIONS,
    )


def _density_text(bottom: float, top: float) -> str:
    if bottom > 0 and math.isfinite(top):
        return f"need {number_text(bottom)} to {number_text(top)} kg/m3"
    if bottom > 0:
        return f"need above {number_text(bottom)} kg/m3"
    if math.isfinite(top):
        return f"need below {number_text(top)} kg/m3"
    return "are bounds that leave it open"


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
            undetected = owner.mass is None and not owner.is_detection
            no_top = undetected or owner.mass_bound > 0 or other.diameter_bound < 0
            no_bottom = owner.mass_bound < 0 or other.diameter_bound > 0
            bottom = 0.0 if no_bottom else float(edges[0])
            top = math.inf if no_top else float(edges[1])
            low, high = max(low, bottom), min(high, top)
            told.append(
                f"the mass of {owner.name!r} and the diameter of {other.name!r} "
                f"{_density_text(bottom, top)}"
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
