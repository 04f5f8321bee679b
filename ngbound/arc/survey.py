"""What is in an arc at a glance, before any orbit; imports this room.

`survey` counts records by kind, station, catalogue and mode, gives span, nights and gaps, says how
large the errors are that observers state, that digits imply and that the error model assigns, and
lists the findings of the vetting.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ngbound.arc.errors_model import ErrorModel, station_nights
from ngbound.arc.observations import Arc, iso_day
from ngbound.arc.vetting import Finding, vet
from ngbound.rounding import counted

LONG_GAP_D = 30.0
"""Gaps of at least this many days are told."""
MOST_GAPS = 5
MOST_LINES = 8


@dataclass(frozen=True)
class Gap:
    """A stretch without usable observations: UTC dates of the records at its ends, and days."""

    after: str
    before: str
    days: float


@dataclass(frozen=True)
class Range:
    """How large something is: number of values, smallest, median, largest, in ``unit``."""

    n: int
    least: float
    median: float
    most: float
    unit: str

    def __str__(self) -> str:
        return (
            f"{self.median:.3g} {self.unit} ({self.least:.3g} to {self.most:.3g}, "
            f"{counted(self.n, 'value')})"
        )


@dataclass(frozen=True)
class Survey:
    """The contents of an arc.

    Counts are of records by their code (the receiver's for radar); ``set_aside`` counts those that
    no fit uses by the reason, and ``set_aside_lines`` names their lines; ``errors`` holds a `Range`
    per kind of error: "stated RA", "stated Dec", "stated time", "stated clock", "digits RA",
    "digits Dec", "digits time", "assigned RA", "assigned Dec" (those that occur). ``gaps`` are the
    longest of the ``n_gaps`` gaps of 30 days or more.
    """

    name: str
    source: str
    n_records: int
    n_usable: int
    kinds: dict[str, int]
    stations: dict[str, int]
    catalogues: dict[str, int]
    modes: dict[str, int]
    set_aside: dict[str, int]
    set_aside_lines: dict[str, tuple[int, ...]]
    first_day: str
    last_day: str
    span_d: float
    n_nights: int
    n_gaps: int
    gaps: tuple[Gap, ...]
    errors: dict[str, Range]
    magnitude: Range | None
    findings: tuple[Finding, ...]

    def to_dict(self) -> dict[str, Any]:
        """JSON-able content."""
        told = dict(self.__dict__)
        told["gaps"] = [vars(g) for g in self.gaps]
        told["errors"] = {k: vars(r) for k, r in self.errors.items()}
        told["magnitude"] = vars(self.magnitude) if self.magnitude else None
        told["findings"] = [f.to_dict() for f in self.findings]
        return told

    def __str__(self) -> str:
        lines = [
            f"{self.name}: {counted(self.n_records, 'record')} from {self.source}, {self.n_usable} "
            "usable",
            f"  {self.first_day} to {self.last_day}: {self.span_d:.1f} d, "
            f"{counted(self.n_nights, 'station-night')}",
        ]
        for title, counts in (
            ("kinds", self.kinds),
            ("stations", self.stations),
            ("catalogues", self.catalogues),
            ("modes", self.modes),
        ):
            if counts:
                listed = [f"{k} {v}" for k, v in list(counts.items())[:12]]
                more = f", and {len(counts) - 12} more" if len(counts) > 12 else ""
                lines.append(f"  {title:11s} {', '.join(listed)}{more}")
        for reason, count in self.set_aside.items():
            named = self.set_aside_lines[reason]
            some = ", ".join(str(line) for line in named[:MOST_LINES])
            more = f" and {len(named) - MOST_LINES} more" if len(named) > MOST_LINES else ""
            word = "line" if len(named) == 1 else "lines"
            lines.append(
                f"  set aside   {counted(count, 'record')} ({word} {some}{more}): {reason}"
            )
        if self.n_gaps > len(self.gaps):
            lines.append(f"  the longest of {self.n_gaps} gaps of {LONG_GAP_D:.0f} d or more:")
        for gap in self.gaps:
            lines.append(f"  gap         {gap.after} to {gap.before}: {gap.days:.0f} d")
        lines += [f"  {title:14s} {span}" for title, span in self.errors.items()]
        if self.magnitude:
            lines.append(f"  {'magnitude':14s} {self.magnitude}")
        count = len(self.findings)
        lines.append(f"  {counted(count, 'finding')}" if count else "  nothing doubtful found")
        lines += [f"  - {finding}" for finding in self.findings]
        return "\n".join(lines)


def survey(arc: Arc) -> Survey:
    """Take stock of an arc; gaps, nights and errors are those of its usable records."""
    told = arc.to_dict()
    used = arc.used
    table = used.table
    time_d = table["utc_day"].to_numpy() + table["utc_sec"].to_numpy() / 86400.0
    errors: dict[str, Range] = {}
    for title, column, unit in (
        ("stated RA", "rmsRA", "arcsec"),
        ("stated Dec", "rmsDec", "arcsec"),
        ("stated time", "rmsTime", "s"),
        ("digits RA", "digits_ra_arcsec", "arcsec"),
        ("digits Dec", "digits_dec_arcsec", "arcsec"),
        ("digits time", "digits_time_s", "s"),
    ):
        _put(errors, title, table[column].to_numpy(dtype=float), unit)
    for title, column, unit in (
        ("stated delay", "rmsDelay", "microseconds"),
        ("stated Doppler", "rmsDoppler", "Hz"),
        ("stated clock", "uncTime", "s"),
    ):
        if column in table:
            _put(errors, title, table[column].to_numpy(dtype=float), unit)
    if len(used):
        noise = ErrorModel().apply(used)
        _put(errors, "assigned RA", noise.sigma_ra_arcsec[noise.optical], "arcsec")
        _put(errors, "assigned Dec", noise.sigma_dec_arcsec[noise.optical], "arcsec")
    magnitude: dict[str, Range] = {}
    _put(magnitude, "mag", table["mag"].to_numpy(dtype=float), "mag", positive=False)
    return Survey(
        name=told["name"],
        source=arc.source,
        n_records=told["n_records"],
        n_usable=told["n_usable"],
        kinds=told["kinds"],
        stations=_stations(arc),
        catalogues=told["catalogues"],
        modes=told["modes"],
        set_aside=told["set_aside"],
        set_aside_lines={
            reason: tuple(int(n) for n in arc.table["line"][arc.table["why_not"] == reason])
            for reason in told["set_aside"]
        },
        first_day=told["first_day"] or "",
        last_day=told["last_day"] or "",
        span_d=arc.span_d,
        n_nights=len(np.unique(station_nights(used))) if len(used) else 0,
        n_gaps=int((np.diff(time_d) >= LONG_GAP_D).sum()),
        gaps=_gaps(time_d),
        errors=errors,
        magnitude=magnitude.get("mag"),
        findings=tuple(vet(arc)),
    )


def _stations(arc: Arc) -> dict[str, int]:
    """Records by station, those of radar by the receiver's, the most frequent first."""
    codes = arc.table["stn"]
    if "rcv" in arc.table:
        codes = codes.where(codes != "", arc.table["rcv"])
    return {str(code): int(n) for code, n in codes.value_counts().items() if code}


def _put(
    into: dict[str, Range], title: str, values: NDArray[Any], unit: str, positive: bool = True
) -> None:
    known = values[np.isfinite(values) & ((values > 0.0) | (not positive))]
    if len(known):
        into[title] = Range(
            len(known), float(known.min()), float(np.median(known)), float(known.max()), unit
        )


def _gaps(time_d: NDArray[np.float64]) -> tuple[Gap, ...]:
    step = np.diff(time_d)
    longest = [i for i in np.argsort(-step, kind="stable")[:MOST_GAPS] if step[i] >= LONG_GAP_D]
    return tuple(
        Gap(iso_day(int(time_d[i])), iso_day(int(time_d[i + 1])), float(step[i]))
        for i in sorted(longest)
    )
