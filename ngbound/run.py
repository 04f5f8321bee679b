"""The whole job, from a case file to the record, written to be read from the top down.

`run_case` does all of it; `inspect_case`, `fit_case`, `limit_case`, `mass_case` and `fan_case` stop
earlier and hand back what they have, which prints itself.  May import every room to its left and
ngbound.case; never cli.
"""

import html
import os
import secrets
import sys
import time
import warnings
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import matplotlib
import numpy as np
import pandas as pd
from matplotlib.figure import Figure
from tqdm import tqdm

from ngbound.arc import Arc, Noise, Survey, read_arc, survey, treatment_text, vet
from ngbound.case import Case, ReachTable, case_for
from ngbound.errors import CaseError, FitError, LimitError, MassError, NgboundWarning
from ngbound.fit import (
    Comparison,
    Diagnostics,
    Fit,
    MinimaScan,
    Variation,
    compare_fits,
    diagnose,
    fit_orbit,
    scan_minima,
    vary,
)
from ngbound.limits import (
    DetectionThreshold,
    Forecast,
    Posterior,
    PowerCurve,
    UpperLimit,
    Verdict,
    detection_threshold,
    forecast,
    orbit_degeneracy,
    power_curve,
    sample_posterior,
    upper_limit,
    verdict,
)
from ngbound.mass import (
    DEFAULT_SPECIES,
    ActiveArea,
    AreaToMass,
    LawDeparture,
    MassBound,
    MassCeiling,
    Outgassing,
    Reach,
    active_areas,
    law_departures,
    mass_bound,
    mass_ceiling,
    radiation_bound,
    reach,
)
from ngbound.motion import Thrust, compile_notice
from ngbound.report import (
    Record,
    SmallTable,
    budget_words,
    catalogue_table,
    direction_map,
    echo_table,
    mass_figure,
    posterior_figure,
    prior_name,
    provenance,
    reach_figure,
    render_mass,
    render_report,
    residual_by_station,
    residual_fan,
    residual_suspicions,
    residuals_csv,
    station_table,
    the_sentence,
)
from ngbound.rounding import up
from ngbound.sky import load_ephemeris, reduce_offsets

MOST_SCANS = 3
"""Scans that may each lead to a better orbit."""
FIGURE_ENDINGS = (".png", ".pdf", ".svg")


def run_case(
    path: str | Path,
    *,
    checkpoint: str | Path | None = None,
    progress: bool = False,
    **choices: Any,
) -> Record:
    """Do the whole job and write report, figures and record into the output folder.

    Parameters
    ----------
    path : path
        A case file (TOML), or an arc, for which every choice then has its default.
    checkpoint : path, optional
        Keeps the chain of the sampler; a run that was interrupted goes on from it to the same
        numbers.
    progress : bool
        Show the steps on stderr.
    **choices
        Choices that override those of the case file: law, components, seed, object_name, output.

    Returns
    -------
    Record
        As it was written; nothing is written unless everything succeeded.

    Raises
    ------
    InputError
        The case or the arc cannot be read or is wrong.
    AnalysisError
        The analysis cannot be done on this arc.
    """
    with hear_warnings() as heard:
        case, step = case_for(path, **choices), Steps(progress)
        check_the_output(case)
        arc = read_the_arc(case, step)
        fits = fit_both(case, arc, step)
        bounds = bound_the_thrust(fits, step, case.detection.vary_errors, checkpoint)
        weighed = weigh(bounds, step)
        with step("draw the figures"):
            figures = draw_figures(bounds, weighed)
    tables: list[SmallTable | str] = [
        station_table(fits.null),
        station_table(fits.push),
        catalogue_table(fits.null),
        catalogue_table(fits.push),
        *([echo_table(fits.null), echo_table(fits.push)] if fits.push.echo_summary else []),
        *([variant_table(bounds)] if bounds.variation else []),
        *(str(scan) for scan in fits.minima),
        fits.push.error_report,
        str(bounds.diagnostics),
    ]
    record = compose_record(Path(path), bounds, weighed, heard, step.seconds)
    with step("write the results"):
        write_results(case, record, fits, tables, figures)
    return record


def inspect_case(path: str | Path, *, progress: bool = False, **choices: Any) -> "Inspection":
    """What is in an arc at a glance, before any orbit."""
    case = case_for(path, **choices)
    model = case.errors.error_model()
    arc = reduce_offsets(model.usable(read_the_arc(case, Steps(progress))), load_ephemeris())
    used = model.corrected(arc.used)
    return Inspection(survey(arc), model.apply(used), model.catalogue_treatments(used))


def fit_case(path: str | Path, *, progress: bool = False, **choices: Any) -> "Fits":
    """The orbit by gravity alone and with thrust, and the comparison of the two."""
    case, step = case_for(path, **choices), Steps(progress)
    return fit_both(case, read_the_arc(case, step), step)


def limit_case(
    path: str | Path,
    *,
    vary_errors: bool = False,
    checkpoint: str | Path | None = None,
    progress: bool = False,
    **choices: Any,
) -> "Bounds":
    """Detection threshold, posterior, upper limit and verdict.

    With ``vary_errors`` also threshold and limit under other defensible error models. With
    ``checkpoint`` the chain is kept there, and a run that was interrupted goes on from it to the
    same numbers.
    """
    case, step = case_for(path, **choices), Steps(progress)
    fits = fit_both(case, read_the_arc(case, step), step)
    return bound_the_thrust(fits, step, vary_errors, checkpoint)


def mass_case(path: str | Path, *, progress: bool = False, **choices: Any) -> "Weighed":
    """The mass and the diameter that the limit demands, and what outgassing the arc would reveal.

    Raises
    ------
    CaseError
        The case holds neither an outgassing budget nor a [reach] table.
    """
    case, step = case_for(path, **choices), Steps(progress)
    if not case.outgassing and case.reach is None:
        raise CaseError(
            f"{path} holds no outgassing budget, without which no mass follows from a limit; add "
            "an [[outgassing]] table with rate and at, or a [reach] table to ask which rate the "
            "arc would have revealed."
        )
    return weigh(bound_the_thrust(fit_both(case, read_the_arc(case, step), step), step), step)


def inject_case(
    path: str | Path,
    *,
    checkpoint: str | Path | None = None,
    progress: bool = False,
    **choices: Any,
) -> "Injected":
    """Try the arc's own detection test with invented thrusts: false alarms, power, bias, coverage.

    With ``checkpoint`` the counts are kept lot by lot in files of that name, and a run that was
    interrupted goes on from them to the same numbers.
    """
    case, step = case_for(path, **choices), Steps(progress)
    fits, chosen = fit_both(case, read_the_arc(case, step), step), case.injection
    with step("inject and recover") as bar:
        curve = power_curve(
            fits.push,
            chosen.direction if isinstance(chosen.direction, str) else list(chosen.direction),
            n=chosen.arcs,
            seed=case.sampling.seed,
            shares=chosen.shares,
            noise=chosen.noise,
            reject=chosen.reject,
            false_alarm=case.detection.false_alarm,
            power=case.detection.power,
            progress=bar.report,
            checkpoint=checkpoint,
        )
    return Injected(fits, curve)


def forecast_case(
    path: str | Path,
    *,
    acceleration_au_d2: float | None = None,
    progress: bool = False,
    **choices: Any,
) -> "Foreseen":
    """What the planned nights of the case would do to the detection threshold.

    With ``acceleration_au_d2`` also from when on a thrust of that size would be detected.

    Raises
    ------
    CaseError
        The case plans no night.
    """
    case, step = case_for(path, **choices), Steps(progress)
    if not case.planned:
        raise CaseError(
            f"{path} plans no night, so that nothing can be foreseen; add [[planned]] tables with "
            "utc and station."
        )
    fits = fit_both(case, read_the_arc(case, step), step)
    with step("forecast"):
        found = forecast(
            fits.push,
            [table.night() for table in case.planned],
            false_alarm=case.detection.false_alarm,
            power=case.detection.power,
        )
    return Foreseen(fits, found, acceleration_au_d2)


def fan_case(
    path: str | Path, *, output: str | Path, progress: bool = False, **choices: Any
) -> "Drawing":
    """Draw the residual fan into a file.

    Raises
    ------
    CaseError
        The ending of the file is no format of a figure, or its folder does not exist.
    """
    target = Path(output)
    if target.suffix not in FIGURE_ENDINGS:
        raise CaseError(
            f"The figure {target} must end in {', '.join(FIGURE_ENDINGS)}, which tells its format."
        )
    if not target.parent.is_dir():
        raise CaseError(
            f"The figure {target} cannot be written, because there is no folder {target.parent}; "
            "choose a folder that exists."
        )
    case, step = case_for(path, **choices), Steps(progress)
    fits = fit_both(case, read_the_arc(case, step), step)
    threshold = threshold_of(fits)
    fan = residual_fan(fits.null, fits.push, threshold=threshold, comparison=fits.comparison)
    save_whole(fan, target)
    return Drawing(target, fits, threshold)


# ---------------------------------------------------------------------------------- the steps


def check_the_output(case: Case) -> None:
    """See that the output folder can be made, before hours of work.

    Raises
    ------
    CaseError
        A file stands in its way, or its place cannot be written.
    """
    folder = case.output.folder
    assert folder is not None
    place = next(path for path in (folder, *folder.parents) if path.exists())
    if not place.is_dir() or not os.access(place, os.W_OK):
        why = "cannot be written" if place.is_dir() else "is a file"
        raise CaseError(
            f"The output folder {folder} cannot be made, because {place} {why}; choose another "
            "with [output] folder or --output."
        )


def read_the_arc(case: Case, step: "Steps") -> Arc:
    """The arc that the case names, own stations included."""
    with step("read the arc"):
        return read_arc(case.arc.file, object=case.object.name, stations=case.own_stations())


def fit_both(case: Case, arc: Arc, step: "Steps") -> "Fits":
    """Fit by gravity alone from the start the case gives, then with thrust from there."""
    if case.notice:
        warnings.warn(case.notice, NgboundWarning, stacklevel=2)
    if notice := compile_notice():
        step.tell(notice)
    start = case.orbit.orbit(forces=case.forces.force_model()) if case.orbit else None
    common = how_to_fit(case)
    with step("fit by gravity alone") as bar:
        null = fit_orbit(arc, initial=start, progress=bar.say, **common)
    with step("look for other orbits") as bar:
        null, null_scan = lowest(null, bar, common)
    with step("fit with thrust") as bar:
        push = fit_orbit(
            arc, thrust=case.thrust.thrust(), initial=null.orbit, progress=bar.say, **common
        )
    with step("look for other orbits with thrust") as bar:
        push, push_scan = lowest(push, bar, common)
    with step("compare the fits"):
        comparison = compare_fits(null, push)
    for scan in (null_scan, push_scan):
        if scan.warning:
            warnings.warn(scan.warning, NgboundWarning, stacklevel=2)
    return Fits(case, arc, null, push, comparison, (null_scan, push_scan))


def lowest(fit: Fit, bar: "StepBar", common: dict[str, Any]) -> tuple[Fit, MinimaScan]:
    """The fit of the lowest minimum of chi2, and the scan that looked for others."""
    scan = scan_minima(fit, progress=bar.say)
    for _ in range(MOST_SCANS):
        if scan.fit_is_best:
            break
        better = scan.orbit(scan.best)
        try:
            fit = fit_orbit(fit.arc, thrust=fit.thrust, initial=better, keep=fit.keep, **common)
        except FitError as error:
            warnings.warn(
                f"A better orbit was found, with chi2 {scan.best.chi2:.1f} instead of "
                f"{fit.chi2:.1f}, but no fit settles there: {error}",
                NgboundWarning,
                stacklevel=2,
            )
            break
        scan = scan_minima(fit, progress=bar.say)
    return fit, scan


def how_to_fit(case: Case) -> dict[str, Any]:
    """What every fit of a case has in common, as `fit_orbit` takes it."""
    return {
        "error_model": case.errors.error_model(),
        "forces": case.forces.force_model(),
        "reject": case.fit.reject,
    }


def bound_the_thrust(
    fits: "Fits",
    step: "Steps",
    vary_errors: bool = False,
    checkpoint: str | Path | None = None,
) -> "Bounds":
    """Threshold of the arc, posterior of the exact model, upper limit, verdict."""
    case = fits.case
    with step("detection threshold"):
        threshold = threshold_of(fits)
    with step("sample the posterior") as bar:
        posterior = sample_posterior(
            fits.push,
            seed=case.sampling.seed,
            prior=case.sampling.prior,
            n_walkers=case.sampling.walkers,
            max_steps=case.sampling.max_steps,
            target_ess=case.sampling.effective_samples,
            progress=bar.report,
            checkpoint=checkpoint,
        )
    with step("upper limit"):
        limit = upper_limit(posterior, confidence=case.detection.confidence)
    with step("diagnose the residuals"):
        diagnostics = diagnose(fits.push)
    suspicions = tuple(residual_suspicions(fits.push))
    if not diagnostics.trusted:
        suspicions += (diagnostics.why,)
    suspicions += diagnostics.remarks
    variation = None
    if vary_errors:
        with step("vary the error model") as bar:
            variation = vary(fits.push, progress=bar.say)
    judged = verdict(
        fits.null,
        fits.push,
        threshold,
        limit,
        noise_trusted=not suspicions,
        why="; ".join(text.rstrip(".") for text in suspicions),
        other_p_values=None if variation is None else p_values(variation),
        comparison=fits.comparison,
    )
    return Bounds(fits, threshold, posterior, limit, judged, suspicions, diagnostics, variation)


def p_values(variation: Variation) -> dict[str, float]:
    """The p-value of the fitted thrust under each defensible error model (Wald test)."""
    return {
        variant.name: fit.p_value
        for variant, fit in zip(variation.variants, variation.fits, strict=True)
        if fit is not None and variant.defensible
    }


def variant_table(bounds: "Bounds") -> SmallTable:
    """Threshold and limit under each error model, in linear theory."""
    chosen = bounds.fits.case.detection
    assert bounds.variation is not None
    rows = []
    for variant, fit in zip(bounds.variation.variants, bounds.variation.fits, strict=True):
        if fit is None:
            continue
        threshold = detection_threshold(fit, false_alarm=chosen.false_alarm, power=chosen.power)
        limit = upper_limit(fit, confidence=chosen.confidence)
        rows.append(
            {
                "error model": variant.name + ("" if variant.defensible else " (warning only)"),
                "out": fit.n_rejected,
                "chi2/dof": f"{fit.reduced_chi2:.2f}",
                "A_det worst": up(threshold.worst.value),
                "A_det best": up(threshold.best.value),
                "|A| below": up(limit.magnitude.value),
                "p of thrust": f"{fit.p_value:.2g}",
            }
        )
    spread = ", ".join(f"{name} {ratio:.1f}" for name, ratio in bounds.variation.spread().items())
    return SmallTable(
        "Threshold and limit under other error models (au/d2, linear theory; rounded up)",
        pd.DataFrame(rows),
        {},
        {},
        f"largest over smallest standard error under the defensible models: {spread}",
    )


def threshold_of(fits: "Fits") -> DetectionThreshold:
    """The detection threshold at the false-alarm rate and power of the case."""
    chosen = fits.case.detection
    return detection_threshold(fits.push, false_alarm=chosen.false_alarm, power=chosen.power)


def weigh(bounds: "Bounds", step: "Steps") -> "Weighed":
    """All that the thrust says of the body; what does not follow is said instead of found."""
    case, remarks = bounds.fits.case, list[str]()
    budget, size, g = case.budget(), case.nucleus.size(), law_in_window(case.thrust.thrust())
    bound = other = ceiling = found = light = None
    active: tuple[ActiveArea, ...] = ()
    departures: tuple[LawDeparture, ...] = ()
    if budget is not None:
        common: dict[str, Any] = {
            "g_at": g,
            "density": case.nucleus.density,
            "confidence": case.detection.confidence,
            "seed": case.sampling.seed,
            "photometry": size,
        }
        with step("mass bound"):
            with said_instead(remarks, "No lower bound on the mass"):
                bound = mass_bound(
                    bounds.posterior,
                    budget,
                    threshold=bounds.threshold,
                    **common,
                )
                with warnings.catch_warnings():
                    warnings.simplefilter("ignore", NgboundWarning)  # the same as just above
                    other = mass_bound(
                        bounds.limit.alternative_magnitude,
                        budget,
                        limit_confidence=bounds.limit.confidence,
                        **common,
                    )
            if bounds.judged.kind == "detection":
                with said_instead(remarks, "No upper bound on the mass"):
                    ceiling = mass_ceiling(bounds.posterior, budget, **common)
        with step("active areas"):
            for emission in budget.emissions:
                with said_instead(remarks, "No active area"):
                    active += active_areas(
                        Outgassing([emission]), diameter=size, seed=case.sampling.seed
                    )
            with said_instead(remarks, "Thrust law and sublimation were not compared"):
                departures = law_departures(budget, g, bounds.fits.r_au)
    with step("reach of the arc"), said_instead(remarks, "Reach of the arc"):
        found = reach_of(bounds, budget, g)
    with step("radiation pressure"), said_instead(remarks, "No bound from radiation pressure"):
        light = push_of_sunlight(bounds)
    return Weighed(bounds, bound, other, ceiling, found, light, active, departures, tuple(remarks))


def law_in_window(thrust: Thrust) -> Callable[[float], float]:
    """g(r) of a thrust, zero outside an activity window that goes by distance."""

    def g(r_au: float) -> float:
        window = thrust.window
        if window is not None and window.by == "distance":
            if not window.start <= r_au <= window.end:
                return 0.0
        return float(thrust.g(r_au))

    return g


def reach_of(bounds: "Bounds", budget: Outgassing | None, g: Callable[[float], float]) -> Reach:
    """Which production rates the arc would have revealed, as the case asks it."""
    case, asked = bounds.fits.case, bounds.fits.case.reach or ReachTable()
    options: dict[str, Any] = {
        "g_at": g,
        "size": asked.size() or case.nucleus.size(),
        "density": case.nucleus.density if asked.density is None else asked.density,
        "diameters_m": asked.diameters_m,
        "seed": case.sampling.seed,
    }
    if budget is not None and not asked.asks_beyond():
        return reach(bounds.threshold, outgassing=budget, **options)
    known = {} if budget is None else {e.species: e for e in budget.emissions}
    species = asked.species or tuple(known) or DEFAULT_SPECIES
    r_au = bounds.fits.r_au
    strongest = float(r_au[np.argmax([g(float(r)) for r in r_au])])
    at = asked.at or next((e.at_au for e in known.values()), strongest)
    shared = {name: known[name] for name in species if name in known}
    return reach(
        bounds.threshold,
        species=species,
        at=at,
        speed=asked.speed or {name: e.speed for name, e in shared.items()} or None,
        collimation=asked.collimation
        or {name: e.collimation for name, e in shared.items()}
        or None,
        **options,
    )


def push_of_sunlight(bounds: "Bounds") -> AreaToMass:
    """What the limit on a radial thrust says if sunlight pushes.

    Radiation pressure falls as r^-2: under another law, a lag or a window the arc is fitted once
    more with an inverse-square thrust of the same components, and limited in linear theory.

    Raises
    ------
    MassError
        R is not among the components, or the arc cannot be fitted so.
    """
    fits, limit, origin = bounds.fits, bounds.limit, ""
    thrust = fits.case.thrust.thrust()
    if "R" not in thrust.components:
        raise MassError(
            "The thrust looked for has no radial component; free R among the [thrust] components."
        )
    r_au = np.array([0.5, 1.0, 2.0, 5.0])
    plain = np.allclose(thrust.g(r_au) * r_au**2, 1.0, rtol=1e-9)
    if not plain or thrust.window is not None or float(thrust.lag.value) != 0.0:
        origin = f"from a fit with an inverse-square thrust instead of the law {thrust.law.name}"
        try:
            fit = fit_orbit(
                fits.arc,
                thrust=Thrust("inverse-square", components=thrust.components),
                initial=fits.null.orbit,
                **how_to_fit(fits.case),
            )
            limit = upper_limit(fit, confidence=fits.case.detection.confidence)
        except (FitError, LimitError) as error:
            raise MassError(
                "Radiation pressure falls as r^-2, and the arc could not be fitted with such a "
                f"thrust beside the law {thrust.law.name}: {error}"
            ) from error
    return radiation_bound(
        limit,
        coefficient=fits.case.nucleus.radiation_coefficient,
        density=fits.case.nucleus.density,
        origin=origin,
        size=fits.case.nucleus.size(),
    )


@contextmanager
def said_instead(remarks: list[str], what: str) -> Iterator[None]:
    """A result that does not follow is said in the report, and costs nothing else."""
    try:
        yield
    except MassError as error:
        remarks.append(f"{what}: {error}")


def draw_figures(bounds: "Bounds", weighed: "Weighed") -> dict[str, Figure]:
    """All figures of the report, by file name without ending."""
    fits = bounds.fits
    with matplotlib.rc_context({"backend": "Agg"}):
        figures = {
            "residual_fan": residual_fan(
                fits.null, fits.push, threshold=bounds.threshold, comparison=fits.comparison
            ),
            "residuals_by_station": residual_by_station(fits.push),
            "posterior": posterior_figure(bounds.posterior, bounds.limit, name=fits.arc.name),
        }
        if len(fits.push.components) > 1:
            figures["direction_map"] = direction_map(bounds.threshold, name=fits.arc.name)
        if weighed.bound is not None:
            figures["mass"] = mass_figure(weighed.bound, weighed.ceiling, name=fits.arc.name)
        if weighed.reach is not None:
            figures["reach"] = reach_figure(weighed.reach, name=fits.arc.name)
    return figures


def compose_record(
    path: Path,
    bounds: "Bounds",
    weighed: "Weighed",
    heard: list[str],
    seconds: dict[str, float],
) -> Record:
    """Everything found and chosen, with what produced it."""
    fits, case = bounds.fits, bounds.fits.case
    inputs = {"arc": case.arc.file} | ({"case": path} if path != case.arc.file else {})
    if case.errors.debiasing is not None:
        inputs["debiasing"] = Path(case.errors.debiasing)
    data = {
        "object": fits.arc.name,
        "law": case.thrust.law,
        "arc": summary_of(fits),
        "fits": {"null": fits.null, "push": fits.push},
        "comparison": fits.comparison,
        "minima": list(fits.minima),
        "threshold": bounds.threshold,
        "posterior": bounds.posterior,
        "limit": bounds.limit,
        "verdict": bounds.judged,
        **weighed.found(),
        "suspicions": bounds.suspicions,
        "degeneracies": list(orbit_degeneracy(bounds.fits.push).sentences),
        "diagnostics": bounds.diagnostics,
        "error_variants": bounds.variation,
        "findings": vet(fits.arc),
        "warnings": heard,
        "choices": case,
        "seeds": {"sampling": case.sampling.seed, "mass": case.sampling.seed},
        "provenance": provenance(inputs),
        "timings_s": seconds,
    }
    return Record({"sentence": bounds.sentence(weighed.bound, weighed.ceiling), **data})


def write_results(
    case: Case,
    record: Record,
    fits: "Fits",
    tables: Sequence[SmallTable | str],
    figures: dict[str, Figure],
) -> None:
    """Write texts, figures and record into the output folder, all of them or none."""
    ending = case.output.figures
    report = render_report(record.data, tables, [f"{name}.{ending}" for name in figures])
    texts = {"report.txt": report, "residuals.csv": residuals_csv(fits.null)}
    assert case.output.folder is not None
    record.write(case.output.folder, figures, texts, formats=(ending,))


def summary_of(fits: "Fits") -> dict[str, Any]:
    """The arc in numbers: what was used, when, and from how far away."""
    arc, seen = fits.arc, fits.null.residuals
    told = arc.to_dict()
    return {
        "n_records": told["n_records"],
        "n_obs": len(seen),
        "span_d": fits.null.used.span_d,
        "first_utc": str(seen["utc"].iloc[0]),
        "last_utc": str(seen["utc"].iloc[-1]),
        "r_min_au": float(seen["r_au"].min()),
        "r_max_au": float(seen["r_au"].max()),
        "delta_min_au": float(seen["delta_au"].min()),
        "delta_max_au": float(seen["delta_au"].max()),
        "n_nights": len(np.unique(fits.null.noise.night)),
        "n_stations": len(told["stations"]),
        "stations": told["stations"],
        "catalogues": told["catalogues"],
        "set_aside": told["set_aside"],
    }


# ------------------------------------------------------------------------ what the steps hand on


@dataclass(frozen=True, eq=False)
class Inspection:
    """An arc before any orbit: what is in it, its errors, and what is doubtful."""

    survey: Survey
    noise: Noise
    catalogue_treatments: dict[str, int]

    def __str__(self) -> str:
        return f"{self.survey}\n{self.noise}\n{treatment_text(self.catalogue_treatments)}"

    def to_dict(self) -> dict[str, Any]:
        """The survey, and the errors that the case's error model assigns."""
        return {
            **self.survey.to_dict(),
            "assigned_errors": self.noise.to_dict(),
            "catalogue_treatments": self.catalogue_treatments,
        }


@dataclass(frozen=True, eq=False)
class Fits:
    """The same arc fitted by gravity alone and with thrust."""

    case: Case = field(repr=False)
    arc: Arc = field(repr=False)
    null: Fit
    push: Fit
    comparison: Comparison
    minima: tuple[MinimaScan, ...] = ()

    @property
    def r_au(self) -> np.ndarray:
        """Heliocentric distances (n,) of the observations, au."""
        return self.null.residuals["r_au"].to_numpy(dtype=float)

    def __str__(self) -> str:
        return "\n\n".join(
            [
                str(self.arc),
                f"Gravity alone\n{self.null}",
                f"With thrust\n{self.push}",
                str(self.comparison),
                *(str(scan) for scan in self.minima),
                str(station_table(self.push)),
                str(catalogue_table(self.push)),
                *([str(echo_table(self.push))] if self.push.echo_summary else []),
            ]
        )

    def to_dict(self) -> dict[str, Any]:
        """Both fits and their comparison."""
        return {
            "object": self.arc.name,
            "null": self.null.to_dict(),
            "push": self.push.to_dict(),
            "comparison": self.comparison.to_dict(),
            "minima": [scan.to_dict() for scan in self.minima],
        }


@dataclass(frozen=True, eq=False)
class Bounds:
    """What thrust the arc would have shown, and what its data allow."""

    fits: Fits = field(repr=False)
    threshold: DetectionThreshold
    posterior: Posterior = field(repr=False)
    limit: UpperLimit
    judged: Verdict
    suspicions: tuple[str, ...]
    diagnostics: Diagnostics = field(repr=False)
    variation: Variation | None = field(default=None, repr=False)

    def __str__(self) -> str:
        parts = [self.sentence(), str(self.judged), str(self.threshold), str(self.limit)]
        if self.variation is not None:
            parts.append(str(variant_table(self)))
        return "\n\n".join([*parts, str(self.diagnostics), *self.suspicions])

    def to_dict(self) -> dict[str, Any]:
        """Threshold, limit, posterior (without its samples) and verdict."""
        return {
            "object": self.fits.arc.name,
            "sentence": self.sentence(),
            "threshold": self.threshold.to_dict(),
            "posterior": self.posterior.to_dict(),
            "limit": self.limit.to_dict(),
            "verdict": self.judged.to_dict(),
            "suspicions": list(self.suspicions),
            "diagnostics": self.diagnostics.to_dict(),
            "error_variants": None if self.variation is None else self.variation.to_dict(),
        }

    def sentence(self, mass: MassBound | None = None, ceiling: MassCeiling | None = None) -> str:
        """The sentence the program exists to write."""
        arc = summary_of(self.fits)
        judged, threshold, limit = self.judged, self.threshold.to_dict(), self.limit.to_dict()
        return the_sentence(
            name=self.fits.arc.name,
            n_obs=self.fits.null.n_obs,
            span_d=arc["span_d"],
            r_min_au=arc["r_min_au"],
            r_max_au=arc["r_max_au"],
            law=self.fits.case.thrust.law,
            verdict=judged.kind,
            significance_sigma=threshold["significance_sigma"],
            false_alarm=threshold["false_alarm"],
            power=threshold["power"],
            threshold_au_d2=threshold["worst_au_d2"],
            best_threshold_au_d2=threshold["best_au_d2"],
            confidence=limit["confidence"],
            limit_au_d2=limit["magnitude_au_d2"],
            limit_prior=prior_name(limit["prior"]),
            other_limit_au_d2=limit["alternative_magnitude_au_d2"],
            other_limit_prior=prior_name(limit["alternative_prior"]),
            estimate_au_d2=float(judged.estimate.value),
            estimate_sigma_au_d2=float(judged.estimate_sigma.value),
            found_sigma=judged.significance_sigma,
            reasons=judged.reasons,
            budget="" if mass is None else budget_words(mass.to_dict()),
            mass_kg=None if mass is None else float(mass.mass.value),
            diameter_m=None if mass is None else float(mass.diameter.value),
            mass_confidence=None if mass is None else mass.confidence,
            mass_below_kg=None if ceiling is None else float(ceiling.mass.value),
            diameter_below_m=None if ceiling is None else float(ceiling.diameter.value),
        )


@dataclass(frozen=True, eq=False)
class Weighed:
    """What the thrust says of the body: mass, reach, sunlight, active surface.

    Attributes
    ----------
    bound : MassBound or None
        None without a budget, or where no lower bound follows.
    other : MassBound or None
        The same with |A| held at its limit under the other prior.
    ceiling : MassCeiling or None
        Only where the thrust was detected.
    reach : Reach or None
    radiation : AreaToMass or None
    active : tuple of ActiveArea
    departures : tuple of LawDeparture
        The thrust law beside the sublimation of the species, over the arc.
    remarks : tuple of str
        Why something of this does not follow.
    """

    bounds: Bounds = field(repr=False)
    bound: MassBound | None
    other: MassBound | None
    ceiling: MassCeiling | None
    reach: Reach | None
    radiation: AreaToMass | None
    active: tuple[ActiveArea, ...]
    departures: tuple[LawDeparture, ...]
    remarks: tuple[str, ...]

    def found(self) -> dict[str, Any]:
        """The results under the keys of the record, JSON-able."""
        single = {
            "mass": self.bound,
            "mass_other_prior": self.other,
            "mass_ceiling": self.ceiling,
            "reach": self.reach,
            "radiation": self.radiation,
        }
        limit = self.bounds.limit
        return {
            **{key: None if one is None else one.to_dict() for key, one in single.items()},
            "mass_priors": [prior_name(limit.prior), prior_name(limit.alternative_prior)],
            "active_areas": [one.to_dict() for one in self.active],
            "law_departures": [one.to_dict() for one in self.departures],
            "mass_remarks": list(self.remarks),
        }

    def to_dict(self) -> dict[str, Any]:
        """Object and results; those of the mass bound stand at the top."""
        whole = {"object": self.bounds.fits.arc.name, **self.found()}
        return {**(whole.pop("mass") or {}), **whole}

    def __str__(self) -> str:
        return render_mass(self.found())

    def _repr_html_(self) -> str:
        parts = (self.bound, self.ceiling, self.reach, self.radiation, *self.active)
        shown = [one._repr_html_() for one in (*parts, *self.departures) if one is not None]
        return "".join([*shown, *(f"<p>{html.escape(text)}</p>" for text in self.remarks)])


@dataclass(frozen=True, eq=False)
class Injected:
    """How often thrusts of several sizes are found on this very arc."""

    fits: Fits = field(repr=False)
    curve: PowerCurve

    def __str__(self) -> str:
        return f"{self.fits.arc.name}, {self.fits.push.n_obs} observations\n{self.curve}"

    def to_dict(self) -> dict[str, Any]:
        """Object and counts."""
        return {"object": self.fits.arc.name, **self.curve.to_dict()}


@dataclass(frozen=True, eq=False)
class Foreseen:
    """What planned nights would do to the threshold."""

    fits: Fits = field(repr=False)
    forecast: Forecast
    acceleration_au_d2: float | None = None

    def __str__(self) -> str:
        text = f"{self.fits.arc.name}, {self.fits.push.n_obs} observations\n{self.forecast}"
        if self.acceleration_au_d2 is None:
            return text
        return f"{text}\n{self.forecast.detectable_sentence(self.acceleration_au_d2)}"

    def to_dict(self) -> dict[str, Any]:
        """Object and forecast."""
        told = {"object": self.fits.arc.name, **self.forecast.to_dict()}
        if self.acceleration_au_d2 is not None:
            told["acceleration_au_d2"] = self.acceleration_au_d2
            told["detectable_from"] = self.forecast.detectable(self.acceleration_au_d2)
        return told


@dataclass(frozen=True, eq=False)
class Drawing:
    """A figure in a file, and what it shows."""

    path: Path
    fits: Fits = field(repr=False)
    threshold: DetectionThreshold

    def __str__(self) -> str:
        return (
            f"The residual fan of {self.fits.arc.name} ({self.fits.null.n_obs} observations) was "
            f"drawn into {self.path}."
        )

    def to_dict(self) -> dict[str, Any]:
        """Path, object and threshold."""
        return {
            "path": str(self.path),
            "object": self.fits.arc.name,
            "n_obs": self.fits.null.n_obs,
            "threshold": self.threshold.to_dict(),
        }


# --------------------------------------------------------------------------- progress and files


class Steps:
    """Tells the steps on stderr as they are taken, and remembers how long each took."""

    def __init__(self, show: bool) -> None:
        self.show = show
        self.seconds: dict[str, float] = {}

    def tell(self, sentence: str) -> None:
        """Say what the user should know at once, on stderr."""
        tqdm.write(f"ngbound: {sentence}", file=sys.stderr)

    @contextmanager
    def __call__(self, what: str) -> Iterator["StepBar"]:
        begin = time.perf_counter()
        with tqdm(total=1, desc=what, file=sys.stderr, disable=not self.show, leave=True) as bar:
            yield StepBar(bar)
            bar.n = bar.total
            bar.refresh()
        self.seconds[what] = time.perf_counter() - begin


@dataclass(frozen=True)
class StepBar:
    """The progress bar of one step."""

    bar: "tqdm[Any]"

    def say(self, message: str) -> None:
        """Show what is being done."""
        self.bar.set_postfix_str(message)

    def report(self, done: int, total: int, message: str) -> None:
        """Show how far a long step has come."""
        self.bar.total, self.bar.n = max(total, 1), min(done, total)
        self.bar.set_postfix_str(message)


@contextmanager
def hear_warnings() -> Iterator[list[str]]:
    """Collect the warnings of ngbound while they are shown as ever."""
    heard: list[str] = []
    with warnings.catch_warnings():
        show = warnings.showwarning

        def hear(message: Any, category: Any, *place: Any, **more: Any) -> None:
            if issubclass(category, NgboundWarning) and str(message) not in heard:
                heard.append(str(message))
            show(message, category, *place, **more)

        warnings.showwarning = hear
        yield heard


def save_whole(figure: Figure, path: Path) -> None:
    """Save a figure so that the file is never seen half-written."""
    part = path.with_name(f".{path.stem}.{secrets.token_hex(4)}{path.suffix}")
    try:
        figure.savefig(part, dpi=200)
        os.replace(part, path)
    finally:
        part.unlink(missing_ok=True)
