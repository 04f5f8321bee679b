"""A small named set of error models that a careful dynamicist could defend; imports pandas, errors,
arc and this room.

A threshold or a limit that holds under all of them does not hang on one choice. What each changes
is said beside it; all else is as in the error model given.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import pandas as pd

from ngbound.arc import ErrorModel
from ngbound.blas import on_one_thread
from ngbound.errors import NgboundError
from ngbound.fit.solution import Fit, fit_orbit
from ngbound.rounding import with_error

SMALL, LARGE = 0.5, 2.0


@dataclass(frozen=True)
class ErrorVariant:
    """A named error model and what it changes.

    Attributes
    ----------
    name, what : str
    model : ErrorModel
    defensible : bool
        False for the one that is shown as a warning only.
    """

    name: str
    what: str
    model: ErrorModel
    defensible: bool = True

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        return {
            "name": self.name,
            "what": self.what,
            "model": self.model.to_dict(),
            "defensible": self.defensible,
        }

    def __str__(self) -> str:
        return f"{self.name}: {self.what}"


def error_variants(base: ErrorModel | None = None) -> tuple[ErrorVariant, ...]:
    """The base model first, then the variants, last the naive one.

    Parameters
    ----------
    base : ErrorModel, optional
        The default error model when absent.
    """
    base = base or ErrorModel()
    station = base.station_offset_arcsec
    raw = ErrorVariant(
        "not debiased",
        "positions left as observed, offsets of the catalogues of the published size",
        replace(base, debiasing=None),
    )
    return (
        ErrorVariant("base", "the error model of the analysis", base),
        ErrorVariant(
            "table sigmas",
            "errors of stations left as in the published table or as stated, not rescaled",
            replace(base, rescale_stations=False),
        ),
        ErrorVariant(
            "all rescaled",
            "stated errors rescaled too, where a station has enough records",
            replace(base, rescale_stations=True),
        ),
        ErrorVariant(
            "sqrt(N) nights",
            "crowded nights tamed by sigma times sqrt(N/4), not by a common error",
            replace(base, over_observing="sqrt"),
        ),
        ErrorVariant(
            "small catalogue offsets",
            "priors of the catalogue offsets halved",
            replace(base, catalogue_scale=SMALL * base.catalogue_scale),
        ),
        ErrorVariant(
            "large catalogue offsets",
            "priors of the catalogue offsets doubled",
            replace(base, catalogue_scale=LARGE * base.catalogue_scale),
        ),
        *([] if base.debiasing is None else [raw]),
        ErrorVariant(
            "no station offsets",
            "stations have no offsets of their own",
            replace(base, station_offset_arcsec=0.0),
        ),
        ErrorVariant(
            "large station offsets",
            "an offset of 0.2 arcsec for every station",
            replace(base, station_offset_arcsec=max(0.2, LARGE * (station or 0.0))),
        ),
        ErrorVariant(
            "clocks",
            "a clock error of 1 s for every station",
            replace(base, clock_s=max(1.0, base.clock_s)),
        ),
        ErrorVariant(
            "naive",
            "no offsets, no rescaling, no common error of a night: shown as a warning",
            replace(
                base,
                catalogue_offsets=False,
                station_offset_arcsec=0.0,
                clock_s=0.0,
                over_observing="none",
                night_common_arcsec=0.0,
                rescale_stations=False,
            ),
            defensible=False,
        ),
    )


@dataclass(frozen=True, eq=False)
class Variation:
    """Fits of one arc under several error models.

    Attributes
    ----------
    variants : tuple of ErrorVariant
    fits : tuple of Fit or None
        None where the fit failed; ``failed`` then says why.
    failed : mapping of variant name to sentence
    """

    variants: tuple[ErrorVariant, ...]
    fits: tuple[Fit | None, ...] = field(repr=False)
    failed: dict[str, str]

    @property
    def table(self) -> pd.DataFrame:
        """One row a variant: name, defensible, n_obs, n_rejected, chi2_per_dof, then of each
        component of A value, standard error and value in standard errors."""
        rows = []
        for variant, fit in zip(self.variants, self.fits, strict=True):
            if fit is None:
                continue
            row: dict[str, Any] = {
                "name": variant.name,
                "defensible": variant.defensible,
                "n_obs": fit.n_obs,
                "n_rejected": fit.n_rejected,
                "chi2_per_dof": fit.reduced_chi2,
            }
            sigma = np.sqrt(np.diag(fit.theta_cov)[fit.n_state :])
            for name, a, s in zip(
                fit.names[fit.n_state :], fit.theta[fit.n_state :], sigma, strict=True
            ):
                row |= {name: a, f"{name}_sigma": s, f"{name}_pull": a / s}
            rows.append(row)
        return pd.DataFrame(rows)

    def spread(self) -> dict[str, float]:
        """Largest over smallest standard error of each component under the defensible models: the
        factor by which thresholds hang on the choice."""
        table = self.table
        table = table[table["defensible"]]
        return {
            name.removesuffix("_sigma"): float(table[name].max() / table[name].min())
            for name in table.columns
            if name.endswith("_sigma")
        }

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        return {
            "variants": [variant.to_dict() for variant in self.variants],
            "table": self.table.to_dict("records"),
            "spread": self.spread(),
            "failed": dict(self.failed),
        }

    def __str__(self) -> str:
        lines = []
        for record in self.table.to_dict("records"):
            row = {str(key): value for key, value in record.items()}
            parts = [
                f"{name} {with_error(row[name], row[name + '_sigma'])}"
                for name in row
                if name + "_sigma" in row
            ]
            mark = "" if row["defensible"] else " (a warning, not a choice)"
            lines.append(
                f"  {row['name']:24s} chi2/dof {row['chi2_per_dof']:5.2f}, {row['n_rejected']:3d} "
                f"rejected, {', '.join(parts)}{mark}"
            )
        lines += [f"  {name:24s} failed: {why}" for name, why in self.failed.items()]
        return "\n".join(lines)


@on_one_thread
def vary(
    push: Fit,
    variants: Sequence[ErrorVariant] | None = None,
    progress: Callable[[str], None] | None = None,
) -> Variation:
    """Repeat a fit under every variant of its error model.

    Parameters
    ----------
    push : Fit
        The fit to repeat, with its thrust.
    variants : sequence of ErrorVariant, optional
        Those of ``error_variants(push.error_model)`` when absent.
    """
    chosen = tuple(variants or error_variants(push.error_model))
    fits: list[Fit | None] = []
    failed = {}
    for variant in chosen:
        if progress is not None:
            progress(str(variant))
        if variant.model == push.error_model:
            fits.append(push)
            continue
        try:
            fits.append(fit_orbit(push.arc, push.thrust, variant.model, initial=push))
        except NgboundError as error:
            fits.append(None)
            failed[variant.name] = str(error)
    return Variation(chosen, tuple(fits), failed)
