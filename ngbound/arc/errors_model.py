"""Sigma, correlation and common error of each observation, and the whitening that follows; imports
errors and this room.

The covariance of a station-night with m observations is 2m x 2m (RA times cos dec and Dec of each
observation):

    C = blockdiag(independent part of each observation) + c c' for RA + c c' for Dec,

where the independent part holds the random error (stated rms and correlation, or the table), and
the timing error times the motion, and c is the common error of the night (catalogue zone,
refraction, clock: what averaging over a night does not reduce). Where sigma is implied by the
table, the common part is taken out of it, so that one observation alone keeps the sigma of the
table.

Table: P. Veres et al. 2017, Icarus 296, 139; its values stand in data/station_weights.csv and are
from memory. Their rule for many observations in a night, sigma times sqrt(N/4), is the choice
``over_observing="sqrt"``; a common error of half of sigma has the same limit for large N (sigma/2
for the mean of the night) and is the default.
"""

import csv
from dataclasses import asdict, dataclass, replace
from functools import cached_property, lru_cache
from importlib.resources import files
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.arc.ades_rules import RADAR
from ngbound.arc.catalogue_offsets import catalogue_offsets, catalogue_treatment
from ngbound.arc.debiasing import debiased
from ngbound.arc.fields import civil_day
from ngbound.arc.instrument_offsets import photocentre_offset, station_clocks, station_offsets
from ngbound.arc.observations import Arc, observers_of
from ngbound.arc.radar_centre import RADIUS_FRACTION, radius_error, referred_to_centre
from ngbound.arc.shared_errors import Modes, SharedErrors, joined
from ngbound.constants import ARCSEC_RAD
from ngbound.errors import ArcError, CaseError
from ngbound.rounding import counted

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

SCHEMES = ("stated-then-table", "uniform")
OVER_OBSERVING = ("common", "sqrt", "none")
NIGHT_GAP_D = 0.5
"""A gap of this many days or more ends a station-night."""
NIGHT_LONGEST_D = 1.0
"""A station-night ends a day after its first observation, which bounds the blocks of spacecraft and
polar sites."""
COMMON_FRACTION = 0.5
"""Common part of the night as a fraction of an implied sigma."""
STATION_FRACTION = 0.2
"""Offset of a station over the whole arc as a fraction of an implied sigma: a choice, see
`ngbound.arc.instrument_offsets`."""
OPTIONAL = (
    "uniform_before_1996_arcsec",
    "night_common_arcsec",
    "station_offset_arcsec",
    "radius_km",
    "radius_sigma_km",
)
TOO_MANY = 4
"""Observations of a station-night from which the sqrt(N/4) rule counts (Veres et al. 2017, from
memory)."""
RADAR_SOURCE = "radar, stated"
JANUARY_1996 = 50083
"""MJD of 1996-01-01."""


@dataclass(frozen=True)
class WeightRow:
    """One row of the table of default sigmas; dates as MJD, ``catalogues`` and ``modes`` as lists
    of ADES codes."""

    kind: str
    station: str
    program: str
    catalogues: tuple[str, ...]
    modes: tuple[str, ...]
    from_day: int
    to_day: int
    sigma_arcsec: float
    source: str
    status: str
    confidence: str
    note: str

    @property
    def label(self) -> str:
        """What the row is about, with its status."""
        what = f"station {self.station}" if self.station else self.note
        if self.program:
            what += f" programme {self.program}"
        if self.station and self.catalogues not in (("*",), ("UNK",)):
            what += f" with {'/'.join(self.catalogues)}"
        return f"table: {what} ({self.status})"


@lru_cache(maxsize=1)
def weight_table() -> tuple[WeightRow, ...]:
    """The table of default sigmas; a later row wins over an earlier one."""
    text = files("ngbound").joinpath("data/station_weights.csv").read_text(encoding="utf-8")
    lines = [line for line in text.splitlines() if not line.startswith("#")]
    return tuple(
        WeightRow(
            kind=row["kind"],
            station=row["station"],
            program=row["program"],
            catalogues=tuple(row["catalogues"].split(";")),
            modes=tuple(row["modes"].split(";")),
            from_day=_mjd(row["from_date"], -(10**6)),
            to_day=_mjd(row["to_date"], 10**6),
            sigma_arcsec=float(row["sigma_arcsec"]),
            source=row["source"],
            status=row["status"],
            confidence=row["confidence"],
            note=row["note"],
        )
        for row in csv.DictReader(lines)
    )


def _mjd(date: str, absent: int) -> int:
    if not date:
        return absent
    year, month, day = (np.array([int(p)], dtype=np.int64) for p in date.split("-"))
    return int(civil_day(year, month, day)[0][0])


@dataclass(frozen=True)
class Factors:
    """Inverse Cholesky factors of all station-night blocks, flat, for kernels.

    ``order`` (n,): the observations sorted so that blocks are contiguous. Block b holds the sorted
    observations ``start[b]:start[b+1]``; its L^-1, with L L' = C in rad^2, is lower-triangular,
    row-major, of side 2m, at ``flat[flat_start[b]:flat_start[b+1]]``. With r the residuals (RA cos
    dec and Dec interleaved, radians) of the block, whitened = L^-1 r and chi2 = |whitened|^2.
    """

    order: IntArray
    start: IntArray
    flat: FloatArray
    flat_start: IntArray


@dataclass(frozen=True, eq=False)
class Noise:
    """The error of each of n observations, with correlations inside an observation and inside a
    station-night.

    Parameters
    ----------
    sigma_ra_arcsec, sigma_dec_arcsec : ndarray (n,)
        Whole standard deviation in RA times cos dec and in Dec: random, timing and common part
        together.
    corr : ndarray (n,)
        Correlation of the two inside one observation.
    night_common_arcsec : ndarray (n,)
        The part of sigma that all observations of the station-night share, in RA and,
        independently, in Dec.
    night : ndarray (n,) of int
        Station-night of each observation, counted from 0.
    source : ndarray (n,) of str
        Where each sigma came from.
    shared : SharedErrors, optional
        Errors that observations of many nights share; not in the sigmas above, but in the
        whitening.
    there : ndarray (n, 2) of bool, optional
        Which of its two numbers an observation has; both when absent. A radar echo has one, in the
        unit of `ngbound.motion.echoes`: its sigma is 1 arcsec.
    """

    sigma_ra_arcsec: FloatArray
    sigma_dec_arcsec: FloatArray
    corr: FloatArray
    night_common_arcsec: FloatArray
    night: IntArray
    source: NDArray[np.object_]
    shared: SharedErrors | None = None
    there: NDArray[np.bool_] | None = None

    def __len__(self) -> int:
        return len(self.sigma_ra_arcsec)

    @property
    def given(self) -> NDArray[np.bool_]:
        """(n, 2) which numbers there are."""
        return np.ones((len(self), 2), dtype=bool) if self.there is None else self.there

    @property
    def count(self) -> IntArray:
        """Numbers (n,) of each observation: 2, of a radar echo 1."""
        return np.asarray(self.given.sum(axis=1))

    @property
    def optical(self) -> NDArray[np.bool_]:
        """(n,) where the observation is a direction, not an echo."""
        return np.asarray(self.given.all(axis=1))

    def with_echoes(
        self, optical: NDArray[np.bool_], there: NDArray[np.bool_], night: IntArray, scale: float
    ) -> "Noise":
        """This noise of the directions and that of radar echoes among them, which share no error.

        Parameters
        ----------
        optical : (n,) bool
            Which of n observations are those of this noise.
        there : (n - m, 2) bool
            Which number each echo has.
        night : (n - m,) int
            Of the echoes, counted from 0.
        scale : float
            Standard deviation of an echo in stated ones.
        """
        n = len(optical)

        def spread(values: NDArray[Any], rest: Any) -> NDArray[Any]:
            out = np.full(n, rest, dtype=values.dtype)
            out[optical] = values
            return out

        nights = spread(self.night, 0)
        nights[~optical] = night + self.night.max(initial=-1) + 1
        given = np.ones((n, 2), dtype=bool)
        given[~optical] = there
        shared = self.shared
        if shared is not None:
            matrix = np.zeros((n, 2, len(shared)))
            matrix[optical] = shared.matrix.reshape(-1, 2, len(shared))
            shared = replace(shared, matrix=matrix.reshape(2 * n, len(shared)))
        return Noise(
            spread(self.sigma_ra_arcsec, scale),
            spread(self.sigma_dec_arcsec, scale),
            spread(self.corr, 0.0),
            spread(self.night_common_arcsec, 0.0),
            nights,
            spread(self.source, RADAR_SOURCE),
            shared,
            given,
        )

    def covariance_rad2(self, rows: IntArray) -> FloatArray:
        """Dense covariance (..., 2m, 2m) in rad^2 of some observations (..., m), interleaved; zero
        between different nights, shared errors left out."""
        rows = np.asarray(rows)
        m = rows.shape[-1]
        ra, dec = self.sigma_ra_arcsec[rows], self.sigma_dec_arcsec[rows]
        common, night = self.night_common_arcsec[rows], self.night[rows]
        shared = common[..., :, None] * common[..., None, :]
        shared[night[..., :, None] != night[..., None, :]] = 0.0
        cov = np.zeros((*rows.shape[:-1], 2 * m, 2 * m))
        cov[..., 0::2, 0::2] = shared
        cov[..., 1::2, 1::2] = shared
        i = np.arange(m)
        cov[..., 2 * i, 2 * i] = ra**2
        cov[..., 2 * i + 1, 2 * i + 1] = dec**2
        between = self.corr[rows] * ra * dec
        cov[..., 2 * i, 2 * i + 1] = between
        cov[..., 2 * i + 1, 2 * i] = between
        return cov * ARCSEC_RAD**2

    @cached_property
    def _factors(self) -> Factors:
        order = np.argsort(self.night, kind="stable").astype(np.int64)
        night = self.night[order]
        edges = np.flatnonzero(np.diff(night)) + 1 if len(night) else np.zeros(0, dtype=np.int64)
        start = (
            np.concatenate([[0], edges, [len(night)]]).astype(np.int64)
            if len(night)
            else np.zeros(1, dtype=np.int64)
        )
        size = np.diff(start)
        sides = 2 * size
        flat_start = np.concatenate([[0], np.cumsum(sides**2)]).astype(np.int64)
        flat = np.zeros(int(flat_start[-1]))
        for m in np.unique(size):
            blocks = np.flatnonzero(size == m)
            cov = self.covariance_rad2(order[start[blocks][:, None] + np.arange(m)])
            scale = np.sqrt(np.einsum("bii->bi", cov))
            try:
                lower = np.linalg.cholesky(cov / (scale[:, :, None] * scale[:, None, :]))
            except np.linalg.LinAlgError as error:
                rows = np.concatenate([order[start[b] : start[b + 1]] for b in blocks])
                raise ArcError(
                    f"The covariance of a station-night with {int(m)} observations is not positive "
                    "definite: the common error of the night must stay below sigma, and |rmsCorr| "
                    "below 1. Lower night_common_arcsec or correct the records.",
                    rows=rows.tolist(),
                ) from error
            inverse = np.tril(np.linalg.inv(lower)) / scale[:, None, :]
            for b, block in zip(blocks, inverse, strict=True):
                flat[flat_start[b] : flat_start[b + 1]] = block.ravel()
        return Factors(order, start, flat, flat_start)

    def factors(self) -> Factors:
        """The inverse Cholesky factors (computed once); shared errors left out, see
        `mode_rows`."""
        return self._factors

    @cached_property
    def _batches(self) -> list[tuple[IntArray, FloatArray]]:
        """Blocks of one size together: their rows (nb, 2m) and factors (nb, 2m, 2m)."""
        f = self._factors
        size = np.diff(f.start)
        batches = []
        for m in np.unique(size):
            blocks = np.flatnonzero(size == m)
            members = f.order[f.start[blocks][:, None] + np.arange(m)]
            rows = np.stack([2 * members, 2 * members + 1], axis=-1).reshape(len(blocks), 2 * m)
            pieces = f.flat[f.flat_start[blocks][:, None] + np.arange(4 * m * m)]
            batches.append((rows, pieces.reshape(len(blocks), 2 * m, 2 * m)))
        return batches

    def whiten_nights(self, m: ArrayLike) -> FloatArray:
        """As `whiten`, with the shared errors left out: L^-1 m of the station-nights."""
        values = np.asarray(m, dtype=np.float64)
        if values.ndim not in (1, 2) or values.shape[0] != 2 * len(self):
            raise ValueError(
                f"whiten needs 2 x {len(self)} rows (RA and Dec of each observation), not "
                f"{values.shape}"
            )
        table = values.reshape(len(values), -1)
        out = np.empty_like(table)
        for rows, inverse in self._batches:
            out[rows] = inverse @ table[rows]
        return out.reshape(values.shape)

    def whiten(self, m: ArrayLike) -> FloatArray:
        """C^(-1/2) m for m of shape (2n,) or (2n, k), rows RA cos dec and Dec of each observation
        in turn, in radians.

        The result is dimensionless, of the same shape; chi2 of residuals is the sum of its squares.
        The rows keep their places, but inside a station-night they are mixed, and so are all
        observations that share an error.
        """
        white = self.whiten_nights(m)
        return white if self.modes is None else self.modes.shrink(white)

    @cached_property
    def modes(self) -> Modes | None:
        """The singular vectors of the whitened shared errors; None without shared errors."""
        if self.shared is None or not len(self.shared) or not len(self):
            return None
        return Modes.of(self.whiten_nights(self.shared.matrix))

    def mode_rows(self) -> FloatArray | None:
        """(k, 2n) rows M with chi2 = |w|^2 - |M w|^2, where w is ``whiten_nights`` of the residuals
        in the order of the observations; None without shared errors."""
        return None if self.modes is None else self.modes.rows()

    def mask(self, keep: ArrayLike) -> "Noise":
        """The noise of a subset (bool (n,) or positions); sigmas stay as they are, nights are
        counted anew."""
        keep = np.asarray(keep)
        if keep.dtype == bool and len(keep) != len(self):
            raise ValueError(f"the mask has {len(keep)} entries, the noise {len(self)}")
        _, night = np.unique(self.night[keep], return_inverse=True)
        return Noise(
            self.sigma_ra_arcsec[keep],
            self.sigma_dec_arcsec[keep],
            self.corr[keep],
            self.night_common_arcsec[keep],
            night.astype(np.int64),
            self.source[keep],
            None if self.shared is None else self.shared.rows(keep),
            None if self.there is None else self.there[keep],
        )

    def scaled(self, f: ArrayLike) -> "Noise":
        """All errors but the shared ones times ``f`` (a number, or one per observation)."""
        factor = np.broadcast_to(np.asarray(f, dtype=np.float64), (len(self),))
        if not (np.isfinite(factor) & (factor > 0.0)).all():
            raise ValueError("errors can only be scaled by finite, positive factors")
        return Noise(
            self.sigma_ra_arcsec * factor,
            self.sigma_dec_arcsec * factor,
            self.corr,
            self.night_common_arcsec * factor,
            self.night,
            self.source,
            self.shared,
            self.there,
        )

    def with_parts_scaled(self, random: ArrayLike, common: ArrayLike) -> "Noise":
        """The independent part of all errors times ``random`` and the part common to a night times
        ``common`` (numbers, or one per observation)."""
        f = np.broadcast_to(np.asarray(random, dtype=np.float64), (len(self),))
        new_common = self.night_common_arcsec * np.asarray(common, dtype=np.float64)
        shared2, old2 = new_common**2, self.night_common_arcsec**2
        ra = np.sqrt(f**2 * (self.sigma_ra_arcsec**2 - old2) + shared2)
        dec = np.sqrt(f**2 * (self.sigma_dec_arcsec**2 - old2) + shared2)
        corr = self.corr * f**2 * self.sigma_ra_arcsec * self.sigma_dec_arcsec / (ra * dec)
        return Noise(ra, dec, corr, new_common, self.night, self.source, self.shared, self.there)

    def to_dict(self) -> dict[str, Any]:
        """JSON-able summary: counts by source with the median sigma of each, that of echoes in
        units of the stated one."""
        sources = {}
        for label in dict.fromkeys(self.source.tolist()):
            mine = self.source == label
            ra, dec, common = (
                float(np.median(column[mine]))
                for column in (
                    self.sigma_ra_arcsec,
                    self.sigma_dec_arcsec,
                    self.night_common_arcsec,
                )
            )
            sizes = {
                "median_sigma_ra_arcsec": ra,
                "median_sigma_dec_arcsec": dec,
                "median_night_common_arcsec": common,
            }
            if label == RADAR_SOURCE:
                sizes = {"median_stated_sigmas": ra}
            sources[str(label)] = {"n": int(mine.sum()), **sizes}
        return {"n": len(self), "n_nights": len(np.unique(self.night)), "sources": sources}

    def __str__(self) -> str:
        told = self.to_dict()
        lines = [
            f"Errors of {counted(told['n'], 'observation')} in "
            f"{counted(told['n_nights'], 'station-night')}:"
        ]
        for k, v in told["sources"].items():
            size = (
                f"{v['median_stated_sigmas']:.3f} stated sigma"
                if k == RADAR_SOURCE
                else f"{v['median_sigma_ra_arcsec']:.3f} x {v['median_sigma_dec_arcsec']:.3f} "
                f"arcsec, common {v['median_night_common_arcsec']:.3f}"
            )
            lines.append(f"  {v['n']:6d}  {size}  {k}")
        return "\n".join(lines)


@dataclass(frozen=True)
class ErrorModel:
    """The choices from which the error of each observation follows.

    Parameters
    ----------
    scheme : str
        "stated-then-table": the observer's rmsRA, rmsDec where stated, else the table. "uniform":
        one value for all.
    uniform_arcsec : float
        Sigma of the scheme "uniform".
    uniform_before_1996_arcsec : float, optional
        Another one for observations before 1996.
    floor_arcsec : float
        No sigma is taken smaller than this.
    scale : float
        Factor on all errors, at the end; that of radar echoes, otherwise as stated, included.
    night_common_arcsec : float, optional
        Common error of each station-night, added to the rest. None: nothing where sigma is stated
        or uniform, half of sigma (taken out of it) where it is implied by the table and
        ``over_observing`` is "common".
    timing_s : float
        Error of the time where rmsTime is absent; it acts along the motion.
    over_observing : str
        What tames many observations of one night with implied sigmas: "common" (see above), "sqrt"
        (sigma times sqrt(N/4) for N > 4: Veres et al. 2017, Icarus 296, 139) or "none".
    catalogue_offsets : bool, optional
        Whether offsets of the star catalogues, with priors from published sizes
        (`ngbound.arc.catalogue_offsets`), are marginalised. None: yes, but not where the scheme is
        "uniform".
    catalogue_seasons : bool
        Whether each catalogue has an offset for each season besides that of the whole arc.
    catalogue_scale : float
        Factor on the priors of the catalogues.
    debiasing : str, optional
        Path of the user's copy of the published table of catalogue offsets
        (`ngbound.arc.debiasing`); positions are corrected by it, and the priors of the corrected
        ones shrink to what remains.
    station_offset_arcsec : float, optional
        Prior standard deviation of an offset of each station in RA and Dec; 0 for none. None: a
        fifth of sigma where it is implied by the table, nothing where it is stated or uniform.
    clock_s : float
        Prior standard deviation of a clock error of each station where it states none (uncTime);
        0 for none.
    photocentre_arcsec_au : float
        Prior standard deviation of the photocentre's offset along the direction to the Sun, arcsec
        at 1 au; 0 for none.
    radius_km : float, optional
        Radius of the body, by which radar delays to its surface are referred to its centre; None:
        they are set aside.
    radius_sigma_km : float, optional
        Prior standard deviation of its error, which those delays share. None: a fifth of it.
    rescale_stations : bool, optional
        Whether a fit rescales the errors of stations that have enough records. None: those that
        come from the table, but neither stated nor uniform ones; True: all; False: none.
    rescale_least : int
        Records that are enough; where no station has so many, all are rescaled together.
    student : bool
        Whether tests, thresholds and limits allow for how few degrees of freedom rescaled errors
        rest on.
    """

    scheme: str = "stated-then-table"
    uniform_arcsec: float = 1.0
    uniform_before_1996_arcsec: float | None = None
    floor_arcsec: float = 0.0
    scale: float = 1.0
    night_common_arcsec: float | None = None
    timing_s: float = 0.0
    over_observing: str = "common"
    catalogue_offsets: bool | None = None
    catalogue_seasons: bool = True
    catalogue_scale: float = 1.0
    debiasing: str | None = None
    station_offset_arcsec: float | None = None
    clock_s: float = 0.0
    photocentre_arcsec_au: float = 0.0
    radius_km: float | None = None
    radius_sigma_km: float | None = None
    rescale_stations: bool | None = None
    rescale_least: int = 20
    student: bool = True

    def __post_init__(self) -> None:
        for name, allowed in (("scheme", SCHEMES), ("over_observing", OVER_OBSERVING)):
            if getattr(self, name) not in allowed:
                raise CaseError(
                    f"The error model's {name} = {getattr(self, name)!r} is not known; choose "
                    f"{', '.join(allowed)}.",
                    key=name,
                    value=getattr(self, name),
                )
        limits = {
            "uniform_arcsec": (0.0, True),
            "uniform_before_1996_arcsec": (0.0, True),
            "scale": (0.0, True),
            "floor_arcsec": (0.0, False),
            "night_common_arcsec": (0.0, False),
            "timing_s": (0.0, False),
            "catalogue_scale": (0.0, True),
            "station_offset_arcsec": (0.0, False),
            "clock_s": (0.0, False),
            "photocentre_arcsec_au": (0.0, False),
            "radius_km": (0.0, True),
            "radius_sigma_km": (0.0, True),
            "rescale_least": (2, False),
        }
        for name, (low, is_open) in limits.items():
            value = getattr(self, name)
            if value is None and name in OPTIONAL:
                continue
            number = isinstance(value, int | float) and not isinstance(value, bool)
            if not number or not np.isfinite(value) or value < low or (is_open and value == low):
                raise CaseError(
                    f"The error model's {name} = {value!r} is not allowed; it must be a finite "
                    "number "
                    f"{'above' if is_open else 'of at least'} {low:g}.",
                    key=name,
                    value=value,
                )

    def to_dict(self) -> dict[str, Any]:
        """The choices, JSON-able."""
        return asdict(self)

    def __str__(self) -> str:
        return "Error model: " + ", ".join(f"{k} = {v}" for k, v in self.to_dict().items())

    def rescalable(self, noise: Noise) -> NDArray[np.bool_]:
        """Observations (n,) whose errors a fit may rescale."""
        if self.rescale_stations is not None:
            return noise.optical & self.rescale_stations
        return np.array([str(label).startswith("table") for label in noise.source], dtype=bool)

    @property
    def _offsets_wanted(self) -> bool:
        return (
            self.scheme != "uniform" if self.catalogue_offsets is None else self.catalogue_offsets
        )

    def usable(self, arc: Arc) -> Arc:
        """The arc with its radar delays referred to the body's centre, where ``radius_km`` allows
        it."""
        return arc if self.radius_km is None else referred_to_centre(arc, self.radius_km)

    def corrected(self, arc: Arc) -> Arc:
        """The arc with the offsets of its catalogues taken out, where ``debiasing`` names a table.

        Raises
        ------
        CaseError
            The table cannot be read.
        """
        return arc if self.debiasing is None else debiased(arc, self.debiasing)

    def catalogue_treatments(self, arc: Arc) -> dict[str, int]:
        """How many observations of an arc (as `corrected` gave it) got which treatment of their
        catalogue's offset."""
        told = catalogue_treatment(arc, self._offsets_wanted).tolist()
        return {words: told.count(words) for words in sorted(set(told))}

    def _shared(
        self,
        arc: Arc,
        implied_arcsec: FloatArray,
        motion_arcsec_s: FloatArray | None,
        sunward_per_au: FloatArray | None,
    ) -> SharedErrors | None:
        parts = []
        if self._offsets_wanted:
            parts.append(catalogue_offsets(arc, self.catalogue_scale, self.catalogue_seasons))
        if self.station_offset_arcsec is None:
            where = "a fifth of the sigma of the table (no published size found; a choice)"
            parts.append(station_offsets(arc, STATION_FRACTION * implied_arcsec, where))
        elif self.station_offset_arcsec > 0.0:
            parts.append(station_offsets(arc, np.full(len(arc), self.station_offset_arcsec)))
        if motion_arcsec_s is not None:
            parts.append(station_clocks(arc, self.clock_s, motion_arcsec_s))
        if self.photocentre_arcsec_au > 0.0 and sunward_per_au is not None:
            parts.append(photocentre_offset(self.photocentre_arcsec_au, sunward_per_au))
        return joined(parts)

    def apply(
        self,
        arc_used: Arc,
        motion_arcsec_s: ArrayLike | None = None,
        sunward_per_au: ArrayLike | None = None,
    ) -> Noise:
        """The noise of the observations of an arc.

        Parameters
        ----------
        arc_used : Arc
            Usable observations (``arc.used``), n rows.
        motion_arcsec_s : ndarray (n, 2), optional
            Rates in RA times cos dec and Dec, arcsec/s; needed for timing errors, clocks and for
            the resolution of the time to act.
        sunward_per_au : ndarray (n, 2), optional
            Unit vector object to Sun projected on RA cos dec and Dec, over the distance to the
            observer in au; needed for the photocentre.

        Returns
        -------
        Noise
        """
        table = arc_used.table
        n = len(table)
        optical = (table["kind"] != RADAR).to_numpy(dtype=bool)
        if not optical.all():
            return self._with_echoes(
                arc_used,
                optical,
                _pairs(motion_arcsec_s, n, "motion_arcsec_s"),
                _pairs(sunward_per_au, n, "sunward_per_au"),
            )
        night = station_nights(arc_used)
        ra, dec, stated_ra, stated_dec, source = self._sigmas(arc_used)
        implied = ~stated_ra & ~stated_dec & (self.scheme != "uniform")

        if self.over_observing == "sqrt":
            count = np.bincount(night, minlength=1)[night] if n else np.zeros(0)
            swell = np.where(implied & (count > TOO_MANY), np.sqrt(count / TOO_MANY), 1.0)
            ra, dec = ra * swell, dec * swell
            source = _marked(source, swell > 1.0, "times sqrt(N/4)")

        digits_ra = table["digits_ra_arcsec"].to_numpy(dtype=float) / np.sqrt(12.0)
        digits_dec = table["digits_dec_arcsec"].to_numpy(dtype=float) / np.sqrt(12.0)
        low_ra, low_dec = (
            np.fmax(digits_ra, self.floor_arcsec),
            np.fmax(digits_dec, self.floor_arcsec),
        )
        source = _marked(source, (low_ra > ra) | (low_dec > dec), "raised to digits or floor")
        ra, dec = np.fmax(ra, low_ra), np.fmax(dec, low_dec)

        rho = np.where(
            stated_ra & stated_dec, np.nan_to_num(table["rmsCorr"].to_numpy(dtype=float)), 0.0
        )
        rho = np.clip(rho, -0.999, 0.999)
        if self.night_common_arcsec is None:
            use = implied & (self.over_observing == "common")
            common = np.where(use, COMMON_FRACTION * np.minimum(ra, dec), 0.0)
            added = np.zeros(n)
        else:
            common = np.full(n, float(self.night_common_arcsec))
            added = common
        var_ra, var_dec, cov = ra**2 + added**2, dec**2 + added**2, rho * ra * dec
        motion = _pairs(motion_arcsec_s, n, "motion_arcsec_s")
        if motion is not None:
            clock = table["rmsTime"].to_numpy(dtype=float)
            clock2 = np.where(np.isfinite(clock), clock, self.timing_s) ** 2
            clock2 = clock2 + table["digits_time_s"].to_numpy(dtype=float) ** 2 / 12.0
            var_ra = var_ra + clock2 * motion[:, 0] ** 2
            var_dec = var_dec + clock2 * motion[:, 1] ** 2
            cov = cov + clock2 * motion[:, 0] * motion[:, 1]
        s_ra, s_dec = np.sqrt(var_ra), np.sqrt(var_dec)
        return Noise(
            s_ra * self.scale,
            s_dec * self.scale,
            cov / (s_ra * s_dec),
            common * self.scale,
            night,
            source,
            self._shared(
                arc_used,
                np.where(implied, np.minimum(ra, dec), 0.0),
                motion,
                _pairs(sunward_per_au, n, "sunward_per_au"),
            ),
        )

    def _with_echoes(
        self,
        arc: Arc,
        optical: NDArray[np.bool_],
        motion_arcsec_s: FloatArray | None,
        sunward_per_au: FloatArray | None,
    ) -> Noise:
        """The noise of the directions as if alone, and that of the echoes beside it."""
        motion, sunward = (
            None if pairs is None else pairs[optical] for pairs in (motion_arcsec_s, sunward_per_au)
        )
        echoes = arc.select(~optical)
        there = np.stack(
            [
                np.isfinite(echoes.table[name].to_numpy(dtype=float))
                if name in echoes.table
                else np.zeros(len(echoes), dtype=bool)
                for name in ("delay", "doppler")
            ],
            axis=1,
        )
        noise = self.apply(arc.select(optical), motion, sunward).with_echoes(
            optical, there, station_nights(echoes), self.scale
        )
        if self.radius_km is None:
            return noise
        sigma_km = self.radius_sigma_km or RADIUS_FRACTION * self.radius_km
        parts = [part for part in (noise.shared, radius_error(arc, sigma_km)) if part is not None]
        return replace(noise, shared=joined(parts))

    def _sigmas(
        self, arc: Arc
    ) -> tuple[FloatArray, FloatArray, NDArray[np.bool_], NDArray[np.bool_], NDArray[np.object_]]:
        table = arc.table
        n = len(table)
        day = table["utc_day"].to_numpy()
        if self.scheme == "uniform":
            early = day < JANUARY_1996
            before = (
                self.uniform_arcsec
                if self.uniform_before_1996_arcsec is None
                else self.uniform_before_1996_arcsec
            )
            value = np.where(early, before, self.uniform_arcsec).astype(float)
            never = np.zeros(n, dtype=bool)
            return value, value.copy(), never, never, np.full(n, "uniform", dtype=object)
        implied, source = table_sigma(arc)
        rms_ra, rms_dec = (
            table["rmsRA"].to_numpy(dtype=float),
            table["rmsDec"].to_numpy(dtype=float),
        )
        has_ra, has_dec = (
            np.isfinite(rms_ra) & (rms_ra > 0.0),
            np.isfinite(rms_dec) & (rms_dec > 0.0),
        )
        source[has_ra & has_dec] = "stated"
        source = _marked(source, has_ra & ~has_dec, "for Dec, RA stated")
        source = _marked(source, has_dec & ~has_ra, "for RA, Dec stated")
        return (
            np.where(has_ra, rms_ra, implied),
            np.where(has_dec, rms_dec, implied),
            has_ra,
            has_dec,
            source,
        )


def _pairs(values: ArrayLike | None, n: int, name: str) -> FloatArray | None:
    if values is None:
        return None
    pairs = np.asarray(values, dtype=float)
    if pairs.shape != (n, 2):
        raise ValueError(f"{name} must have the shape ({n}, 2), not {pairs.shape}")
    return pairs


def _marked(
    source: NDArray[np.object_], where: NDArray[np.bool_], words: str
) -> NDArray[np.object_]:
    out = source.copy()
    out[where] = [f"{s}, {words}" for s in source[where]]
    return out


def table_sigma(arc: Arc) -> tuple[FloatArray, NDArray[np.object_]]:
    """Sigma (n,) in arcsec that the table gives for each observation, and the label of its row."""
    table = arc.table
    n = len(table)
    stn, cat = table["stn"].to_numpy(dtype=object), table["astCat"].to_numpy(dtype=object)
    cat = np.where(cat == "", "UNK", cat)
    mode, prog = table["mode"].to_numpy(dtype=object), table["prog"].to_numpy(dtype=object)
    day, site = table["utc_day"].to_numpy(), table["site"].to_numpy(dtype=object)
    known_modes = {m for row in weight_table() for m in row.modes}
    mode = np.where(np.isin(mode, list(known_modes)), mode, "UNK")
    sigma = np.full(n, np.nan)
    source = np.full(n, "", dtype=object)
    present = set(stn.tolist())
    for row in weight_table():
        if row.station and row.station not in present:
            continue
        take = (day >= row.from_day) & (day < row.to_day)
        if row.station:
            take &= stn == row.station
        if row.kind == "space":
            take &= site == "space"
        if row.program:
            take &= prog == row.program
        if row.modes != ("*",):
            take &= np.isin(mode, row.modes)
        if row.catalogues != ("*",):
            take &= _any_catalogue(cat, row.catalogues)
        sigma[take], source[take] = row.sigma_arcsec, row.label
    return sigma, source


def _any_catalogue(cat: NDArray[np.object_], wanted: tuple[str, ...]) -> NDArray[np.bool_]:
    found = np.zeros(len(cat), dtype=bool)
    for name in set(cat.tolist()):
        if any(name.startswith(w[:-1]) if w.endswith("*") else name == w for w in wanted):
            found |= cat == name
    return found


def station_nights(arc: Arc) -> IntArray:
    """Station-night (n,) of each observation, counted from 0 in the order of first appearance in
    time.

    A night is a run of observations of one station, each less than half a day after the one before
    it, and at most a day long. Two roving observers under one code are two stations.
    """
    table = arc.table
    n = len(table)
    night = np.zeros(n, dtype=np.int64)
    if n == 0:
        return night
    time = table["utc_day"].to_numpy() + table["utc_sec"].to_numpy() / 86400.0
    stn = observers_of(arc)
    current: dict[str, tuple[float, float, int]] = {}
    count = 0
    for row in np.argsort(time, kind="stable"):
        code, t = stn[row], time[row]
        begun, last, label = current.get(code, (-np.inf, -np.inf, -1))
        if t - last >= NIGHT_GAP_D or t - begun >= NIGHT_LONGEST_D:
            begun, label = t, count
            count += 1
        current[code] = (begun, t, label)
        night[row] = label
    return night
