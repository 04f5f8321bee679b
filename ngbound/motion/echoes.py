"""Radar echoes among the records of an arc; imports numpy, constants, arc and radar of this room.

A fit keeps one pair of numbers a record, in radians on the sky. An echo has its pair too: the first
number is its delay, the second its Doppler shift, each as (observed - computed) over its stated
standard deviation, where ONE ARCSECOND STANDS FOR ONE STATED STANDARD DEVIATION. The number that a
record does not have is zero, with partials of zero. So the noise of an echo is 1 arcsec
(`ngbound.arc.Noise`), and all that weighs pairs of residuals weighs echoes too.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ngbound.arc import Arc, Station
from ngbound.constants import ARCSEC_RAD
from ngbound.motion.partials import Partials
from ngbound.motion.propagate import Track
from ngbound.motion.radar import EchoPath, echo_path, path_partials

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Echoes:
    """The echoes of an arc, k of its n records.

    Attributes
    ----------
    rows : (k,) places among the records, ascending
    transmitter, receiver : (k,) station codes
    frequency_mhz : (k,) transmitted
    delay_s, doppler_hz : (k,) observed; nan where a record has none
    sigma_delay_s, sigma_doppler_hz : (k,) as stated
    own_stations : mapping of str to Station
    """

    rows: Ints
    transmitter: NDArray[np.object_]
    receiver: NDArray[np.object_]
    frequency_mhz: Floats
    delay_s: Floats
    doppler_hz: Floats
    sigma_delay_s: Floats
    sigma_doppler_hz: Floats
    own_stations: Mapping[str, Station] = field(default_factory=dict, repr=False)

    @classmethod
    def of(cls, used: Arc) -> "Echoes | None":
        """Those of the usable records of an arc; None when there are none."""
        table = used.table
        rows = np.flatnonzero((table["kind"] == "radar").to_numpy(dtype=bool))
        if not rows.size:
            return None

        def numbers(column: str) -> Floats:
            return _column(table, column, rows)

        return cls(
            rows,
            table["trx"].to_numpy(dtype=object)[rows],
            table["rcv"].to_numpy(dtype=object)[rows],
            numbers("frq"),
            numbers("delay"),
            numbers("doppler"),
            numbers("rmsDelay") * 1e-6,
            numbers("rmsDoppler"),
            used.stations,
        )

    def __len__(self) -> int:
        return self.rows.size

    def subset(self, keep: NDArray[Any] | slice, n: int) -> "Echoes | None":
        """Those among some of the n records (a mask, positions or a slice)."""
        place = np.full(n, -1, dtype=np.int64)
        place[self.rows] = np.arange(len(self))
        chosen = place[keep]
        rows = np.flatnonzero(chosen >= 0)
        if not rows.size:
            return None
        mine = chosen[rows]
        parts = {name: getattr(self, name)[mine] for name in _ARRAYS}
        return replace(self, rows=rows, **parts)

    @property
    def per_unit(self) -> Floats:
        """(k, 2) radians in a record's pair for a second of delay and a hertz of Doppler shift; 0
        where the record has no such number.
        """
        sigma = np.stack([self.sigma_delay_s, self.sigma_doppler_hz], axis=1)
        there = np.isfinite(np.stack([self.delay_s, self.doppler_hz], axis=1))
        return np.where(there, ARCSEC_RAD / np.where(there, sigma, 1.0), 0.0)

    def path(self, track: Track, tdb_d: Floats) -> EchoPath:
        """Both legs of every echo, received at ``tdb_d`` (k,)."""
        pairs = [f"{t}>{r}" for t, r in zip(self.transmitter, self.receiver, strict=True)]
        names, group = np.unique(pairs, return_inverse=True)
        rows = [np.flatnonzero(group == g) for g in range(len(names))]
        parts = [
            echo_path(
                track,
                tdb_d[mine],
                str(self.transmitter[mine[0]]),
                str(self.receiver[mine[0]]),
                self.own_stations,
            )
            for mine in rows
        ]
        return EchoPath.merged(parts, rows)

    def missed(self, path: EchoPath) -> Floats:
        """Observed minus computed, (k, 2) seconds and hertz; nan where the record has none."""
        hertz = self.frequency_mhz * 1e6
        return np.stack([self.delay_s - path.delay_s, self.doppler_hz + path.rate * hertz], axis=1)

    def pairs(self, path: EchoPath) -> Floats:
        """The same as pairs of residuals, (k, 2) radians."""
        return np.where(self.per_unit > 0.0, self.missed(path), 0.0) * self.per_unit

    def design(self, path: EchoPath, partials: Partials) -> Floats:
        """Partials of the computed pair, (k, 2, p) radians per unit of each parameter."""
        delay, rate = path_partials(path, partials)
        doppler = -rate * self.frequency_mhz[:, None] * 1e6
        return np.stack([delay, doppler], axis=1) * self.per_unit[:, :, None]


_ARRAYS = (
    "transmitter",
    "receiver",
    "frequency_mhz",
    "delay_s",
    "doppler_hz",
    "sigma_delay_s",
    "sigma_doppler_hz",
)


def _column(table: pd.DataFrame, column: str, rows: Ints) -> Floats:
    if column not in table:
        return np.full(rows.size, np.nan)
    return table[column].to_numpy(dtype=float)[rows]
