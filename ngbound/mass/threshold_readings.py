"""What a quoted detection threshold can mean, and which meaning the arc bears out.

May import: errors, arc, fit, limits, and from its own room arithmetic, distributions,
quoted.

A threshold "A at 3 sigma" may be of one component with the others held at zero or free, of all
together along one axis or the worst one; one- or two-sided; with or without a chance of detection
beyond one half. Each reading is one number that follows from the thrust information F_A of the arc.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from scipy.stats import chi2, norm

from ngbound.arc import Arc
from ngbound.errors import LimitError
from ngbound.fit import Fit, fit_orbit
from ngbound.limits import ThrustInformation, noncentrality, thrust_information

from .arithmetic import UNIT_SLIPS, written_rounding
from .distributions import number_text
from .quoted import QuotedThreshold, error_model, read_table, size_au_d2

HOLDS = 0.05
"""Relative disagreement that is always forgiven."""
MATCHES = 0.03
"""The same for a reading that was not claimed."""
_WORDS = {"R": "radial", "T": "transverse", "N": "normal"}


@dataclass(frozen=True)
class Level:
    """How far beyond the noise: ``z`` sigma, false-alarm rate ``alpha`` (two-sided, or of the joint
    test), chance to find it ``power`` (0.5: a plain multiple)."""

    words: str
    z: float
    alpha: float
    power: float

    def one(self) -> float:
        """Non-centrality of a test of one component."""
        return self.z + float(norm.ppf(self.power))

    def joint(self, k: int) -> float:
        """Non-centrality of a test of ``k`` components together; the radius of the joint region
        for a plain multiple."""
        if self.power <= 0.5:
            return math.sqrt(float(chi2.isf(self.alpha, k)))
        return noncentrality(self.alpha, self.power, k)


@dataclass(frozen=True)
class Reading:
    """One meaning of the quoted threshold.

    ``value_au_d2`` is what the arc gives under it, ``ratio`` quoted over that, ``changes`` what
    would differ from what was claimed.
    """

    words: str
    value_au_d2: float
    ratio: float
    changes: tuple[str, ...]

    def __str__(self) -> str:
        return (
            f"{self.words}: {number_text(self.value_au_d2)} au/d2, quoted / recomputed = "
            f"{number_text(self.ratio)}"
        )

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {
            "words": self.words,
            "value_au_d2": self.value_au_d2,
            "ratio": self.ratio,
            "changes": list(self.changes),
        }


def claimed_level(quoted: QuotedThreshold) -> Level:
    """The level a quoted threshold claims; 3 sigma where it says nothing."""
    return _level(quoted, quoted.sided, quoted.power)


def _level(quoted: QuotedThreshold, sided: int, power: float) -> Level:
    chance = "" if power == 0.5 else f", found with probability {power:g}"
    if quoted.confidence is not None or quoted.false_alarm is not None:
        rate = quoted.false_alarm
        if quoted.confidence is not None:
            rate, words = 1.0 - quoted.confidence, f"{100 * quoted.confidence:g} %"
        else:
            words = f"false-alarm rate {rate:g}"
        assert rate is not None
        side = "one-sided" if sided == 1 else "two-sided"
        return Level(f"{side} {words}{chance}", float(norm.isf(rate / sided)), rate, power)
    z = quoted.sigma or 3.0
    return Level(f"{z:g} sigma{chance}", z, 2.0 * float(norm.sf(z)), power)


def _levels(quoted: QuotedThreshold) -> list[tuple[Level, tuple[str, ...]]]:
    """The claimed level and its usual confusions, each with what changed."""
    claimed = claimed_level(quoted)
    listed: list[tuple[Level, tuple[str, ...]]] = [(claimed, ())]
    if quoted.confidence is not None or quoted.false_alarm is not None:
        other = 1 if quoted.sided == 2 else 2
        names = {1: "one-sided", 2: "two-sided"}
        change = f"{names[other]} instead of {names[quoted.sided]}"
        listed.append((_level(quoted, other, quoted.power), (change,)))
    for power in (0.5, 0.95):
        if power != quoted.power:
            word = (
                "a plain multiple of sigma, without a chance of detection"
                if power == 0.5
                else "with a 95 % chance of detection added"
            )
            listed.append((_level(quoted, quoted.sided, power), (word,)))
    for z in (1.0, 2.0, 3.0, 5.0):
        if abs(z - claimed.z) > 0.02 or quoted.power != 0.5:
            level = Level(f"{z:g} sigma", z, 2.0 * float(norm.sf(z)), 0.5)
            listed.append((level, (f"{z:g} sigma instead of the claimed level",)))
    return listed


def readings(
    information: ThrustInformation, quoted: QuotedThreshold, size: float
) -> tuple[Reading, ...]:
    """Every reading of a threshold of ``size`` au/d2, the claimed one first."""
    k = information.k
    out: list[Reading] = []
    letters = list(information.components)
    if quoted.component != "any":
        if quoted.component not in letters:
            raise LimitError(
                f"The quoted threshold is of the component {quoted.component}, which was not "
                f"fitted ({', '.join(letters)}); fit it."
            )
        letters.sort(key=lambda c: c != quoted.component)
    for level, changed in _levels(quoted):
        one, together = level.one(), level.joint(k)
        axes: list[tuple[str, float, tuple[str, ...]]] = []
        for letter in letters:
            held = float(information.sigma_held(letter).value)
            free = float(information.sigma_free(letter).value)
            apart: tuple[str, ...] = ()
            if quoted.component == "any":
                apart = (f"the {_WORDS[letter]} component alone instead of any direction",)
            elif letter != quoted.component:
                apart = (f"the {_WORDS[letter]} component instead of the {quoted.component}",)
            for treatment, value in (("held", one * held), ("free", one * free)):
                wrong = treatment != quoted.others and quoted.component != "any"
                axes.append(
                    (
                        f"{_WORDS[letter]} component, others {treatment}",
                        value,
                        (*apart, *((f"the other components {treatment}",) if wrong else ())),
                    )
                )
            if k > 1:
                axes.append(
                    (
                        f"{_WORDS[letter]} thrust, all components tested together",
                        together * held,
                        (*apart, "all components tested together"),
                    )
                )
        if k > 1:
            values = information.eigenvalues
            mean = mean_sigma(information)
            fit_any = quoted.component == "any"
            for words, value, claim in (
                ("worst direction", together * float(values[0]) ** -0.5, True),
                ("best direction", together * float(values[-1]) ** -0.5, False),
                ("mean over directions", together * mean, False),
            ):
                change = () if fit_any and claim else (f"{words} of all",)
                axes.append((f"{words}, all components tested together", value, change))
        out += [
            Reading(f"{words}, {level.words}", value, size / value, (*change, *changed))
            for words, value, change in axes
        ]
    out.sort(key=lambda reading: len(reading.changes))
    return tuple(out)


def mean_sigma(information: ThrustInformation) -> float:
    """Mean over directions of (n' F_A n)^-1/2, au/d2."""
    values, n = information.eigenvalues, 4000
    z = 1.0 - (2.0 * np.arange(n) + 1.0) / n
    angle = np.pi * (1.0 + math.sqrt(5.0)) * np.arange(n)
    ring = np.sqrt(1.0 - z**2)
    points = np.stack([ring * np.cos(angle), ring * np.sin(angle), z], axis=1)
    if information.k == 2:
        points = np.stack([np.cos(angle), np.sin(angle)], axis=1)
    return float(np.mean((points**2 @ values) ** -0.5))


def acceleration_slips(ratio: float, tolerance: float, g: float | None) -> tuple[str, ...]:
    """Usual slips that explain quoted / recomputed, best first; ``tolerance`` in ln."""
    factors = list(UNIT_SLIPS["acceleration"])
    if g is not None and abs(math.log(g)) > 2 * tolerance:
        factors.append((g, "value at the distance of the object and value at 1 au exchanged"))
    found = []
    for factor, words in factors:
        for one in (factor, 1.0 / factor):
            miss = abs(math.log(ratio / one))
            if miss <= tolerance:
                found.append((miss, words))
    return tuple(words for _, words in sorted(found))[:3]


@dataclass(frozen=True)
class ThresholdAudit:
    """A quoted threshold beside the one the arc gives.

    Attributes
    ----------
    quoted_au_d2 : float
    claimed : Reading
        What it is said to mean, recomputed.
    ratio_error : float
        Relative standard error of quoted over recomputed: rounding of the quoted numbers, and the
        noise level where it was not quoted.
    closest : Reading
        The reading that comes closest; of several that match, the one with the fewest changes.
    matching : tuple of Reading
    verdict : str
        "holds", "another reading", "slip", "too small", "too large".
    slips : tuple of str
    noise_scale : float
        sqrt(chi2 / dof) of the fit under these errors: how many times larger the residuals say
        the errors are.
    ratio_default_errors : float or None
        Quoted over claimed under the default error model, where another one was quoted.
    """

    quoted_au_d2: float
    claimed: Reading
    ratio_error: float
    closest: Reading
    matching: tuple[Reading, ...]
    all_readings: tuple[Reading, ...]
    verdict: str
    slips: tuple[str, ...]
    noise_scale: float
    ratio_default_errors: float | None

    def __str__(self) -> str:
        error = number_text(self.claimed.ratio * self.ratio_error, 2)
        lines = [
            f"Quoted threshold {number_text(self.quoted_au_d2)} au/d2: {self.verdict}.",
            f"  as claimed: {self.claimed} +- {error}",
        ]
        if self.verdict != "holds":
            lines.append(f"  closest:    {self.closest}")
        if self.verdict == "another reading":
            lines.append(f"  differs by: {'; '.join(self.closest.changes)}")
        if self.slips:
            lines.append(f"  slip:       {'; or '.join(self.slips)}")
        lines.append(
            f"  residuals are {number_text(self.noise_scale)} times what these errors say; scaled "
            f"so, the ratio is {number_text(self.claimed.ratio / self.noise_scale)}"
        )
        if self.ratio_default_errors is not None:
            lines.append(
                "  under the program's own error model the ratio is "
                f"{number_text(self.ratio_default_errors)}"
            )
        return "\n".join(lines)

    def to_frame(self) -> pd.DataFrame:
        """Every reading as a table, the claimed one first: words, value in au/d2, quoted over
        recomputed, changes from the claim."""
        return pd.DataFrame(
            {
                "reading": [r.words for r in self.all_readings],
                "value_au_d2": [r.value_au_d2 for r in self.all_readings],
                "ratio": [r.ratio for r in self.all_readings],
                "changes": ["; ".join(r.changes) for r in self.all_readings],
            }
        )

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        return {
            "quoted_au_d2": self.quoted_au_d2,
            "verdict": self.verdict,
            "claimed": self.claimed.to_dict(),
            "ratio_error": self.ratio_error,
            "closest": self.closest.to_dict(),
            "matching": [reading.to_dict() for reading in self.matching],
            "readings": [reading.to_dict() for reading in self.all_readings],
            "slips": list(self.slips),
            "noise_scale": self.noise_scale,
            "ratio_default_errors": self.ratio_default_errors,
        }


def audit_threshold(
    arc: Arc | Fit,
    quoted: QuotedThreshold | Mapping[str, Any],
    errors: Mapping[str, Any] | None = None,
    progress: Callable[[str], None] | None = None,
) -> ThresholdAudit:
    """Recompute a quoted threshold from the arc it rests on.

    Parameters
    ----------
    arc : Arc or Fit
        An arc is fitted with all three components under the quoted law and errors. A fit with
        thrust is taken as it is, unless errors are quoted.
    quoted : QuotedThreshold or mapping with its keys
    errors : mapping, optional
        Quoted error level: ``{"arcsec": 0.5}`` or keys of the error model; the program's own
        without it.
    progress : callable, optional

    Raises
    ------
    CaseError, FitError, LimitError
    """
    claim = quoted
    if not isinstance(claim, QuotedThreshold):
        claim = read_table(claim, QuotedThreshold)[0]
    size = size_au_d2(claim.value, "threshold.value")
    thrust = claim.thrust()
    if claim.at_au is not None:
        size /= float(thrust.g(claim.at_au))
    other = None
    own = arc.thrust if isinstance(arc, Fit) else None
    same_law = own is not None and (own.law, own.lag) == (thrust.law, thrust.lag)
    if isinstance(arc, Fit) and same_law and not errors:
        fit = arc
    else:
        if progress:
            progress("fitting the arc under the quoted errors")
        initial, observed = (arc.orbit, arc.arc) if isinstance(arc, Fit) else (None, arc)
        fit = fit_orbit(
            observed, thrust, error_model(errors or {}), initial=initial, progress=progress
        )
        if errors:
            plain = fit_orbit(observed, thrust, initial=fit.orbit, progress=progress)
            found = readings(thrust_information(plain), claim, size)[0]
            other = found.ratio
    information = thrust_information(fit)
    listed = readings(information, claim, size)
    claimed = listed[0]
    error = written_rounding(claim.value) ** 2
    if errors and "arcsec" in errors:
        error += written_rounding(errors["arcsec"]) ** 2
    elif fit.dof > 0:
        error += 0.5 / fit.dof
    error = math.sqrt(error)
    r_au = math.sqrt(math.prod(fit.distance_range_au))
    matching, slips, verdict = judge(
        listed, max(HOLDS, 2 * error), max(MATCHES, 2 * error), float(thrust.g(r_au))
    )
    closest = matching[0] if matching else min(listed, key=lambda x: abs(math.log(x.ratio)))
    scale = math.sqrt(fit.reduced_chi2) if fit.dof > 0 else math.nan
    return ThresholdAudit(
        size, claimed, error, closest, matching, listed, verdict, slips, scale, other
    )


def judge(
    listed: tuple[Reading, ...], holds: float, matches: float, g: float | None
) -> tuple[tuple[Reading, ...], tuple[str, ...], str]:
    """Readings that match (fewest changes first), slips, and the verdict.

    Only a reading with one change gives the verdict "another reading": among the many with more,
    some come close by chance.
    """
    claimed = listed[0]
    if abs(math.log(claimed.ratio)) <= holds:
        return (claimed,), (), "holds"
    matching = [r for r in listed[1:] if abs(math.log(r.ratio)) <= matches]
    matching.sort(key=lambda r: (len(r.changes), abs(math.log(r.ratio))))
    slips = acceleration_slips(claimed.ratio, holds, g)
    if matching and len(matching[0].changes) == 1:
        return tuple(matching), (), "another reading"
    if slips:
        return tuple(matching), slips, "slip"
    return tuple(matching), (), "too small" if claimed.ratio < 1 else "too large"
