"""Small tables that tell: stations, catalogues, thresholds, residuals; as text, LaTeX and CSV.

May import constants, errors and the public names of the rooms to the left of report.
"""

import csv
import io
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from astropy import units as u
from scipy.stats import norm

from ngbound.constants import ARCSEC_RAD
from ngbound.rounding import counted, is_number, percent, up

SUSPICIOUS_SIGMA = 3.0
SUSPICIOUS_LEAST_RECORDS = 10

AU_D2 = u.au / u.d**2


@dataclass(frozen=True)
class SmallTable:
    """A table for people, with the numbers behind it.

    Attributes
    ----------
    title : str
    frame : DataFrame
        The numbers, one column each, unrounded.
    formats : mapping
        Of a column: a format such as ".2f", or a function that writes a number; columns not named
        are shown as they are.
    headings : mapping
        Of a column: what stands above it; its name where none is given.
    note : str
        One line beneath.
    """

    title: str
    frame: pd.DataFrame
    formats: Mapping[str, str | Callable[[float], str]]
    headings: Mapping[str, str]
    note: str = ""

    def cells(self) -> list[list[str]]:
        """Headings and rows as text; missing numbers are a dash."""
        columns = [str(c) for c in self.frame.columns]
        rows = [[self.headings.get(c, c) for c in columns]]
        for record in self.frame.itertuples(index=False):
            rows.append([self._cell(c, value) for c, value in zip(columns, record, strict=True)])
        return rows

    def _cell(self, column: str, value: Any) -> str:
        if isinstance(value, (float, np.floating)) and not np.isfinite(value):
            return "-"
        write = self.formats.get(column, str)
        return format(value, write) if isinstance(write, str) else write(value)

    def to_text(self) -> str:
        """Aligned plain text, numbers to the right."""
        cells = self.cells()
        if len(cells) == 1:
            return f"{self.title}\n  (nothing to show)"
        left = [not pd.api.types.is_numeric_dtype(self.frame[c]) for c in self.frame.columns]
        widths = [max(len(row[j]) for row in cells) for j in range(len(cells[0]))]
        lines = [self.title]
        for i, row in enumerate(cells):
            parts = [
                text.ljust(w) if flush else text.rjust(w)
                for text, w, flush in zip(row, widths, left, strict=True)
            ]
            lines.append(("  " + "  ".join(parts)).rstrip())
            if i == 0:
                lines.append("  " + "  ".join("-" * w for w in widths))
        if self.note:
            lines.append(f"  {self.note}")
        return "\n".join(lines)

    def to_latex(self) -> str:
        """A tabular with booktabs rules."""
        cells = self.cells()
        kinds = "".join(
            "r" if pd.api.types.is_numeric_dtype(self.frame[c]) else "l" for c in self.frame.columns
        )
        body = [" & ".join(_latex(text) for text in row) + r" \\" for row in cells]
        lines = [
            f"% {self.title}",
            rf"\begin{{tabular}}{{{kinds}}}",
            r"\toprule",
            body[0],
            r"\midrule",
            *body[1:],
            r"\bottomrule",
            r"\end{tabular}",
        ]
        if self.note:
            lines.append(f"% {self.note}")
        return "\n".join(lines)

    def to_csv(self) -> str:
        """The unrounded numbers."""
        page = io.StringIO()
        self.frame.to_csv(page, index=False, lineterminator="\n")
        return page.getvalue()

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record, one list a column."""
        return {
            "title": self.title,
            "columns": {str(c): [_plain(x) for x in self.frame[c]] for c in self.frame.columns},
            "note": self.note,
        }

    def __str__(self) -> str:
        return self.to_text()


def _plain(value: Any) -> Any:
    if isinstance(value, np.generic):
        value = value.item()
    return None if isinstance(value, float) and not np.isfinite(value) else value


def _latex(text: str) -> str:
    for plain, escaped in (
        ("\\", r"\textbackslash{}"),
        ("&", r"\&"),
        ("%", r"\%"),
        ("_", r"\_"),
        ("#", r"\#"),
        ("+-", r"$\pm$"),
        ("^", r"\^{}"),
        ("~", r"\~{}"),
        ("$\\pm$", r"$\pm$"),
    ):
        text = text.replace(plain, escaped)
    return re.sub(r"(?<![\w.])(\d+(?:\.\d+)?)e(-?\d+)", r"$\1\\times10^{\2}$", text)


def group_means(fit: Any, labels: Sequence[Any]) -> pd.DataFrame:
    """Mean residual of each group of observations, with an error that knows of common errors.

    The mean of a group is the generalised least-squares mean of its kept residuals under the
    group's own covariance (independent part, and the part common to a station-night), after
    A. C. Aitken 1935, Proc. R. Soc. Edinb. 55, 42. That the orbit was fitted to the same residuals
    is not allowed for: it makes true offsets look smaller, never larger.

    Parameters
    ----------
    fit : Fit
    labels : (n,) sequence
        Group of each observation; radar echoes are passed over.

    Returns
    -------
    DataFrame
        One row a group, most observations first: group, n, n_rejected, nights, first, last (UTC
        dates), mean_ra_arcsec, mean_ra_error_arcsec, mean_dec_arcsec, mean_dec_error_arcsec,
        rms_ra_arcsec, rms_dec_arcsec, chi2_per_n (chi2 over two numbers an observation),
        ra_sigma, dec_sigma (mean over error).
    """
    table = fit.residuals
    names = np.asarray([str(x) if str(x).strip() else "(none)" for x in labels])
    keep = np.asarray(table["keep"], dtype=bool)
    residual = table[["ra_arcsec", "dec_arcsec"]].to_numpy(dtype=float)
    seen = np.isfinite(residual).all(axis=1)
    utc = table["utc"].astype(str).to_numpy()
    night = np.asarray(fit.noise.night)
    rows = []
    for name in pd.unique(names[seen]):
        here = (names == name) & seen
        used = here & keep
        row: dict[str, Any] = {
            "group": name,
            "n": int(used.sum()),
            "n_rejected": int((here & ~keep).sum()),
            "nights": len(np.unique(night[used])),
            "first": min(utc[here])[:10],
            "last": max(utc[here])[:10],
        }
        row.update(_mean_of(fit.noise, used, residual) if used.any() else _NO_MEAN)
        rows.append(row)
    frame = pd.DataFrame(rows, columns=["group", *_COUNTS, *_NO_MEAN])
    order = np.lexsort((frame["group"].to_numpy(), -frame["n"].to_numpy()))
    return frame.iloc[order].reset_index(drop=True)


_COUNTS = ("n", "n_rejected", "nights", "first", "last")
_NO_MEAN = {
    name: float("nan")
    for name in (
        "mean_ra_arcsec",
        "mean_ra_error_arcsec",
        "mean_dec_arcsec",
        "mean_dec_error_arcsec",
        "rms_ra_arcsec",
        "rms_dec_arcsec",
        "chi2_per_n",
        "ra_sigma",
        "dec_sigma",
    )
}


def _mean_of(noise: Any, used: np.ndarray, residual: np.ndarray) -> dict[str, float]:
    here = residual[used] * ARCSEC_RAD
    n = len(here)
    columns = np.column_stack([np.tile([1.0, 0.0], n), np.tile([0.0, 1.0], n), here.ravel()])
    white = noise.mask(used).whiten(columns)
    normal = white[:, :2].T @ white[:, :2]
    covariance = np.linalg.inv(normal)
    mean = covariance @ (white[:, :2].T @ white[:, 2]) / ARCSEC_RAD
    error = np.sqrt(np.diag(covariance)) / ARCSEC_RAD
    rms = np.sqrt(np.mean(residual[used] ** 2, axis=0))
    return {
        "mean_ra_arcsec": float(mean[0]),
        "mean_ra_error_arcsec": float(error[0]),
        "mean_dec_arcsec": float(mean[1]),
        "mean_dec_error_arcsec": float(error[1]),
        "rms_ra_arcsec": float(rms[0]),
        "rms_dec_arcsec": float(rms[1]),
        "chi2_per_n": float(white[:, 2] @ white[:, 2]) / (2 * n),
        "ra_sigma": float(mean[0] / error[0]),
        "dec_sigma": float(mean[1] / error[1]),
    }


def station_table(fit: Any) -> SmallTable:
    """Mean residual, scatter and chi2 of each station; offsets beyond 3 sigma carry a star."""
    return _means_table(fit, "stn", "station", "Residuals by station (observed - computed, arcsec)")


def echo_table(fit: Any) -> SmallTable:
    """Every radar echo with its residual, observed - computed; those not kept carry a star."""
    table = fit.residuals
    echoes = table[table["kind"] == "radar"]
    frame = pd.DataFrame(
        {
            "utc": [str(utc)[:19] for utc in echoes["utc"]],
            "receiver": echoes["stn"].to_numpy(),
            "delay_us": echoes["delay_us"].to_numpy(),
            "sigma_delay_us": echoes["sigma_delay_us"].to_numpy(),
            "doppler_hz": echoes["doppler_hz"].to_numpy(),
            "sigma_doppler_hz": echoes["sigma_doppler_hz"].to_numpy(),
            "flag": np.where(echoes["keep"], "", "*"),
        }
    )
    free = getattr(fit, "components", "")
    return SmallTable(
        "Radar echoes (observed - computed), "
        + (f"fit with {free} thrust" if free else "gravity alone"),
        frame,
        {
            "delay_us": "+.3f",
            "sigma_delay_us": ".3f",
            "doppler_hz": "+.4f",
            "sigma_doppler_hz": ".4f",
        },
        {
            "delay_us": "delay (us)",
            "sigma_delay_us": "+-",
            "doppler_hz": "Doppler (Hz)",
            "sigma_doppler_hz": "+-",
            "flag": "",
        },
        "* rejected",
    )


def catalogue_table(fit: Any) -> SmallTable:
    """Mean residual, scatter and chi2 of each star catalogue; offsets beyond 3 sigma starred."""
    return _means_table(
        fit, "astCat", "catalogue", "Residuals by star catalogue (observed - computed, arcsec)"
    )


def _means_table(fit: Any, column: str, name: str, title: str) -> SmallTable:
    means = group_means(fit, fit.residuals[column].to_numpy())
    free = getattr(fit, "components", "")
    title = f"{title}, {'fit with ' + free + ' thrust' if free else 'gravity alone'}"
    starred_ra = np.where(np.abs(means["ra_sigma"]) > SUSPICIOUS_SIGMA, "*", "")
    starred_dec = np.where(np.abs(means["dec_sigma"]) > SUSPICIOUS_SIGMA, "*", "")
    frame = pd.DataFrame(
        {
            name: means["group"],
            "n": means["n"],
            "n_rejected": means["n_rejected"],
            "nights": means["nights"],
            "first": means["first"],
            "last": means["last"],
            "mean_ra_arcsec": means["mean_ra_arcsec"],
            "mean_ra_error_arcsec": means["mean_ra_error_arcsec"],
            "flag_ra": starred_ra,
            "mean_dec_arcsec": means["mean_dec_arcsec"],
            "mean_dec_error_arcsec": means["mean_dec_error_arcsec"],
            "flag_dec": starred_dec,
            "rms_ra_arcsec": means["rms_ra_arcsec"],
            "rms_dec_arcsec": means["rms_dec_arcsec"],
            "chi2_per_n": means["chi2_per_n"],
        }
    )
    arcsec = {
        c: "+.3f" if c.startswith("mean") and "error" not in c else ".3f"
        for c in frame.columns
        if c.endswith("arcsec")
    }
    return SmallTable(
        title,
        frame,
        {**arcsec, "chi2_per_n": ".2f"},
        {
            "n_rejected": "out",
            "mean_ra_arcsec": "RA cos(dec)",
            "mean_ra_error_arcsec": "+-",
            "flag_ra": "",
            "mean_dec_arcsec": "Dec",
            "mean_dec_error_arcsec": "+-",
            "flag_dec": "",
            "rms_ra_arcsec": "rms RA",
            "rms_dec_arcsec": "rms Dec",
            "chi2_per_n": "chi2/n",
        },
        f"* mean residual beyond {SUSPICIOUS_SIGMA:g} sigma, common errors of a night allowed for",
    )


def residual_suspicions(fit: Any) -> list[str]:
    """Sentences about stations and catalogues whose mean residual cannot be chance.

    A group of at least 10 kept records is named if its mean residual, in RA or Dec, is further
    from zero than 3 sigma, or than a chance of 0.27 % over all groups and both coordinates
    together where there are many groups (Sidak's correction).

    Parameters
    ----------
    fit : Fit
        Best the one with thrust: a true thrust leaves offsets in the gravity-only residuals of
        stations that observed only part of the time, and these say nothing against the noise.

    Returns
    -------
    list of str
        Empty if the residuals give no reason to mistrust the noise model in this respect.
    """
    sentences = []
    for column, noun in (("astCat", "star catalogue"), ("stn", "station")):
        means = group_means(fit, fit.residuals[column].to_numpy())
        means = means[means["n"] >= SUSPICIOUS_LEAST_RECORDS]
        if means.empty:
            continue
        each = -np.expm1(np.log1p(-2.0 * norm.sf(SUSPICIOUS_SIGMA)) / (2 * len(means)))
        bound = max(SUSPICIOUS_SIGMA, float(norm.isf(0.5 * each)))
        for row in means.to_dict(orient="records"):
            told = [
                f"{row[f'mean_{axis}_arcsec']:+.3f} +- {row[f'mean_{axis}_error_arcsec']:.3f} "
                f"arcsec in {words} ({abs(row[f'{axis}_sigma']):.1f} sigma)"
                for axis, words in (("ra", "RA"), ("dec", "Dec"))
                if abs(row[f"{axis}_sigma"]) > bound
            ]
            if told:
                sentences.append(
                    f"The {counted(int(row['n']), 'record')} of {noun} {row['group']} "
                    f"({row['first']} to {row['last']}) have a mean residual of "
                    f"{' and '.join(told)}, common errors of a night allowed for: the noise is "
                    "not what the error model assumes."
                )
    return sentences


def threshold_table(threshold: Any) -> SmallTable:
    """Detection thresholds by component and by direction, au/d2, each with its definition."""
    rows: list[dict[str, Any]] = []
    for definition, values in (
        ("component alone, others held at zero", threshold.held),
        ("component alone, others free", threshold.free),
        ("all components together", threshold.direction_free),
    ):
        for letter, value in zip(threshold.components, values, strict=True):
            rows.append(
                {"direction": letter, "test": definition, "value": float(value.to_value(AU_D2))}
            )
    for name, value in (
        ("best", threshold.best),
        ("worst", threshold.worst),
        ("mean over the sphere", threshold.isotropic_mean),
    ):
        rows.append(
            {
                "direction": name,
                "test": "all components together",
                "value": float(value.to_value(AU_D2)),
            }
        )
    return SmallTable(
        "Detection thresholds",
        pd.DataFrame(rows),
        {"value": up},
        {"value": "A_det (au/d2)"},
        f"false-alarm rate {percent(threshold.false_alarm)}, power {percent(threshold.power)}",
    )


def residuals_csv(fit: Any) -> str:
    """The residual table of a fit as CSV: times to 1 microsecond of a day, angles to 0.01 mas."""
    page = io.StringIO()
    writer = csv.writer(page, lineterminator="\n")
    table = fit.residuals
    writer.writerow(table.columns)
    formats = [_column_format(str(c)) for c in table.columns]
    for record in table.itertuples(index=False):
        writer.writerow(
            [
                ("" if not is_number(float(x)) else format(float(x), f)) if f else x
                for x, f in zip(record, formats, strict=True)
            ]
        )
    return page.getvalue()


def _column_format(column: str) -> str:
    if column == "tdb_d":
        return ".9f"
    if column.endswith(("_arcsec", "_arcsec_h")):
        return ".5f"
    if column.endswith("_au"):
        return ".8f"
    return ".4f" if column == "chi" else ""
