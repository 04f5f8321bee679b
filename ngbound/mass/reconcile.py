"""What would have to be true for two or more results about one object to hold together?

May import: errors, fit, and from its own room explanations, frames, notebook,
quoted, results and thrust_history.
"""

import itertools
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from scipy.stats import chi2

from ngbound.errors import CaseError, MassError
from ngbound.fit import Fit

from . import explanations as why
from .distributions import number_text
from .explanations import EXCLUDED, ORDER, POSSIBLE, STRAINED, Explanation, Pair
from .frames import text_rows
from .notebook import as_html
from .quoted import Results, placed, read_table
from .results import THREE_SIGMA, ThrustResult
from .thrust_history import freedom, joint

__all__ = ["Reconciliation", "reconcile"]


@dataclass(frozen=True)
class Reconciliation:
    """Results set beside one another.

    Attributes
    ----------
    results : tuple of ThrustResult
    chi2, dof, probability : float
        Of one and the same thrust, each result under the law it was quoted with: the simplest
        hypothesis, and the chance of at least this tension under it.
    thrust_au_d2 : (3,) the thrust that fits all best
    pair : (str, str)
        Names of the quiet and the active one of the two results that agree least, which the
        explanations are about.
    explanations : tuple of Explanation
        Possible ones first.
    level : float
        Confidence of every interval.
    """

    results: tuple[ThrustResult, ...]
    chi2: float
    dof: int
    probability: float
    thrust_au_d2: tuple[float, float, float]
    pair: tuple[str, str]
    explanations: tuple[Explanation, ...]
    level: float

    def verdict(self, key: str) -> str:
        """Verdict on one explanation, by its key."""
        return self[key].verdict

    def __getitem__(self, key: str) -> Explanation:
        for found in self.explanations:
            if found.key == key:
                return found
        known = ", ".join(e.key for e in self.explanations)
        raise CaseError(f"There is no explanation {key!r}; there are {known}.", key=key)

    def _with(self, verdict: str) -> tuple[str, ...]:
        return tuple(e.key for e in self.explanations if e.verdict == verdict)

    @property
    def possible(self) -> tuple[str, ...]:
        """Keys of the possible explanations."""
        return self._with(POSSIBLE)

    @property
    def strained(self) -> tuple[str, ...]:
        """Keys of those that need a value outside the published range."""
        return self._with(STRAINED)

    @property
    def excluded(self) -> tuple[str, ...]:
        """Keys of those that these results rule out."""
        return self._with(EXCLUDED)

    @property
    def headline(self) -> str:
        """The simplest hypothesis in a sentence."""
        chance = why.chance_text(self.probability)
        text = (
            f"One and the same thrust in all results gives chi2 = {number_text(self.chi2)} for "
            f"{self.dof} degree{'s' * (self.dof > 1)} of freedom; a tension at least this large "
            f"has the probability {chance}"
        )
        if self.probability >= 1.0 - self.level:
            return text + ": the results agree, and nothing needs explaining."
        return (
            f"{text}: it must be explained. {self.pair[0]!r} shows less thrust than "
            f"{self.pair[1]!r}."
        )

    @property
    def tied(self) -> tuple[str, ...]:
        """Keys of the possible explanations that fit as well as the best of them: within the chi2
        that chance moves at the chosen level. These results cannot tell them apart."""
        fits = {
            e.key: e.chi2 for e in self.explanations if e.verdict == POSSIBLE and e.chi2 is not None
        }
        edge = min(fits.values(), default=0.0) + float(chi2.isf(1.0 - self.level, 1))
        return tuple(e.key for e in self.explanations if fits.get(e.key, np.inf) <= edge)

    def __str__(self) -> str:
        lines = [self.headline, *(f"  {result}." for result in self.results), "Explanations:"]
        lines += [f"  {found}." for found in self.explanations]
        return "\n".join([*lines, *self._notes()])

    def _notes(self) -> list[str]:
        notes = []
        if len(self.tied) > 1:
            titles = [self[key].title for key in self.tied]
            notes.append(
                f"These fit about equally well and cannot be told apart by the results: "
                f"{'; '.join(titles)}."
            )
        grounds = [f"{e.title}: {e.plausible.ground}." for e in self.explanations if e.plausible]
        notes += ["Where the published ranges come from:", *(f"  {ground}" for ground in grounds)]
        assumed = [text for result in self.results for text in result.assumed]
        if assumed:
            notes.append("Assumed: " + "; ".join(assumed) + ".")
        return notes

    def to_frame(self) -> pd.DataFrame:
        """The explanations as a table: verdict, best probability and sentence, by key."""
        rows = {
            e.key: {
                "explanation": e.title,
                "verdict": e.verdict,
                "probability": e.probability,
                "sentence": e.sentence,
            }
            for e in self.explanations
        }
        return pd.DataFrame.from_dict(rows, orient="index")

    def _repr_html_(self) -> str:
        results = as_html([self.headline], (), [f"{result}." for result in self.results])
        return results + as_html((), text_rows(self.to_frame()), self._notes())

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        return {
            "headline": self.headline,
            "results": [result.to_dict() for result in self.results],
            "chi2": self.chi2,
            "dof": self.dof,
            "probability": self.probability,
            "thrust_au_d2": list(self.thrust_au_d2),
            "pair": list(self.pair),
            "level": self.level,
            "tied": list(self.tied),
            "explanations": [found.to_dict() for found in self.explanations],
        }


def reconcile(
    *results: ThrustResult | Fit | Mapping[str, Any] | str | Path,
    level: float = 0.95,
    seed: int = 1,
    progress: Callable[[str], None] | None = None,
) -> Reconciliation:
    """Set two or more results beside one another and rank what could reconcile them.

    Parameters
    ----------
    *results
        `ThrustResult` objects, fits, or tables of quoted numbers (keys of `QuotedResult`); or one
        path of a TOML file with two or more ``[[result]]`` tables.
    level : float
        Confidence of every interval.
    seed : int
        Of the draws of outgassing budgets.
    progress : callable, optional
        Is given a sentence before each fit.

    Raises
    ------
    CaseError
        Input that cannot be understood.
    MassError
        No two results measure an axis in common.
    """
    found: list[ThrustResult] = []
    if len(results) == 1 and isinstance(results[0], str | Path):
        table, folder = read_table(results[0], Results)
        level, seed = table.level, table.seed
        for quoted in table.result:
            with placed(f"{results[0]}, [[result]] {quoted.name!r}"):
                found.append(ThrustResult.from_quoted(quoted, folder, progress))
    else:
        for number, one in enumerate(results, 1):
            if isinstance(one, ThrustResult):
                found.append(one)
            elif isinstance(one, Fit):
                found.append(ThrustResult.from_fit(one, f"arc {number}"))
            elif isinstance(one, Mapping):
                found.append(ThrustResult.from_quoted(one, progress=progress))
            else:
                raise CaseError(
                    f"Result {number} is {one!r}; give fits, ThrustResult objects or tables, or "
                    "one TOML file alone."
                )
    if len(found) < 2:
        raise CaseError("Reconciling needs at least two results.")
    if not 0 < level < 1:
        raise CaseError(f"level = {level!r} must be between 0 and 1.")
    responses = [result.response for result in found]
    dof = freedom(responses)
    if dof == 0:
        raise MassError(
            "No two of the results measure the thrust along a common axis, so there is nothing to "
            "reconcile; give the component of each quoted number."
        )
    value, thrust = joint(responses, [response.own for response in responses])
    value = max(value, 0.0)
    probability = float(chi2.sf(value, dof))
    pair = _worst_pair(tuple(found), level, np.random.default_rng(seed), dof)
    chance = Explanation(
        "chance",
        "chance alone",
        POSSIBLE
        if probability >= 1 - level
        else STRAINED
        if probability >= THREE_SIGMA
        else EXCLUDED,
        "one and the same thrust in all results, under the laws quoted",
        {"thrust_au_d2": thrust.tolist()},
        value,
        dof,
        probability,
    )
    ratios = why.amplitude_ratios(pair)
    told = [
        chance,
        why.law(pair),
        why.onset_distance(pair),
        why.date(pair),
        why.rotated(pair),
        why.space_fixed(pair),
        why.mass_change(pair, ratios),
        why.production(pair, ratios),
        why.collimation(pair, ratios),
        why.density(tuple(found), pair.rng, level),
    ]
    told = why.compared(told)
    told.sort(key=lambda e: (ORDER.index(e.verdict), -(e.probability or 0.0)))
    return Reconciliation(
        tuple(found),
        value,
        dof,
        probability,
        (float(thrust[0]), float(thrust[1]), float(thrust[2])),
        (pair.quiet.name, pair.active.name),
        tuple(told),
        level,
    )


def _worst_pair(
    found: tuple[ThrustResult, ...], level: float, rng: np.random.Generator, dof_all: int
) -> Pair:
    worst: tuple[float, Pair] | None = None
    for one, other in itertools.combinations(found, 2):
        responses = [one.response, other.response]
        dof = freedom(responses)
        if dof == 0:
            continue
        value, _ = joint(responses, [response.own for response in responses])
        probability = float(chi2.logsf(max(value, 0.0), dof))
        sizes = [float(np.linalg.norm(r.amounts_au_d2)) for r in (one, other)]
        quiet, active = (one, other) if sizes[0] <= sizes[1] else (other, one)
        if one.is_detection != other.is_detection:
            quiet, active = (other, one) if one.is_detection else (one, other)
        if worst is None or probability < worst[0]:
            worst = probability, Pair(quiet, active, level, dof, rng, found, dof_all)
    if worst is None:
        raise MassError("No two of the results measure the thrust along a common axis.")
    return worst[1]
