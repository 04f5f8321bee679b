"""What a quoted detection threshold can mean, and which meaning the arc bears out.

May import: errors, arc, fit, limits, and from its own room distributions, frames, notebook, quoted,
slips and written.

A threshold "A at 3 sigma" may be of one component with the others held at zero or free, of all
together along one axis or the worst one; one- or two-sided; with or without a chance of detection
beyond one half; with errors as quoted or scaled to the scatter of the residuals. Each reading is
one number that follows from the thrust information F_A of the arc.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd
from scipy.stats import chi2, norm

from ngbound.arc import Arc
from ngbound.errors import LimitError
from ngbound.fit import Fit, fit_orbit
from ngbound.limits import ThrustInformation, noncentrality, thrust_information

from .distributions import number_text
from .frames import text_rows
from .notebook import as_html
from .quoted import QuotedThreshold, error_model, read_table, size_au_d2
from .slips import UNIT_SLIPS
from .written import Written, rounding, spread_allowed

HOLDS = 0.05
"""Relative disagreement that is always forgiven."""
MATCHES = 0.03
"""The same for a reading that was not claimed."""
CLOSE = 0.01
"""Readings whose misfits differ by less come equally close."""
_WORDS = {"R": "radial", "T": "transverse", "N": "normal"}
_OTHERS = {"held": "the other components held at zero", "free": "the other components free"}
_NOT = {"held": " not free", "free": " not held at zero"}
_TOGETHER = "all components tested together (direction-free)"
_SIDES = ("two-sided instead of one-sided", "one-sided instead of two-sided")
_SCALED = "errors scaled to the scatter of the residuals"
VERDICTS = {
    "holds": "follows from the arc as claimed.",
    "cannot tell": "follows from the arc as claimed, but other readings come as close: the digits "
    "cannot tell.",
    "another reading": "does not follow from the arc as claimed; another reading does.",
    "slip": "does not follow from the arc; a slip of unit or factor would explain it.",
    "too small": "is smaller than the arc gives under the claim or any one change of it.",
    "too large": "is larger than the arc gives under the claim or any one change of it.",
}
"""What each verdict says of the quoted threshold."""


@dataclass(frozen=True)
class Level:
    """How far beyond the noise: ``z`` sigma, false-alarm rate ``alpha`` (two-sided, or of the joint
    test), chance to find it ``power`` (0.5: a plain multiple)."""

    words: str
    z: float
    alpha: float
    power: float

    @property
    def joint_words(self) -> str:
        """For a test of several components together, which has no sides."""
        return self.words.removeprefix("one-sided ").removeprefix("two-sided ")

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
            f"{self.words}: {number_text(self.value_au_d2)} au/d2, and quoted over recomputed is "
            f"{number_text(self.ratio)}"
        )

    @property
    def miss(self) -> float:
        """How far quoted and recomputed lie apart, in ln."""
        return abs(math.log(self.ratio))

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
        listed.append((_level(quoted, 3 - quoted.sided, quoted.power), (_SIDES[quoted.sided - 1],)))
    for power in (0.5, 0.95):
        if power != quoted.power:
            word = (
                "a plain multiple of sigma, without a chance of detection"
                if power == 0.5
                else "with a 95 % chance of detection added"
            )
            listed.append((_level(quoted, quoted.sided, power), (word,)))
    for z in (1.0, 2.0, 3.0, 5.0):
        if abs(z - claimed.z) > 0.02:
            level = Level(f"{z:g} sigma", z, 2.0 * float(norm.sf(z)), 0.5)
            listed.append((level, (f"{z:g} sigma instead of the claimed level",)))
    return listed


def readings(
    information: ThrustInformation, quoted: QuotedThreshold, size: float, noise_scale: float = 1.0
) -> tuple[Reading, ...]:
    """Every reading of a threshold of ``size`` au/d2, the claimed one first; ``noise_scale``: how
    many times larger the residuals say the errors are."""
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
        axes = _single(information, quoted, letters, level)
        if not set(changed) & set(_SIDES):  # a joint test has no sides
            axes += _joint(information, quoted, letters, level)
        for words, value, change in axes:
            out.append(Reading(words, value, size / value, (*change, *changed)))
            if not changed and abs(math.log(noise_scale)) > MATCHES:
                scaled = noise_scale * value
                out.append(
                    Reading(f"{words}, {_SCALED}", scaled, size / scaled, (*change, _SCALED))
                )
    out.sort(key=lambda reading: len(reading.changes))
    return tuple(out)


_Axis = tuple[str, float, tuple[str, ...]]
"""Words, value in au/d2, what differs from the claim."""


def _single(
    information: ThrustInformation, quoted: QuotedThreshold, letters: list[str], level: Level
) -> list[_Axis]:
    """One component tested by itself, the others held at zero or free."""
    axes: list[_Axis] = []
    for letter in letters:
        for treatment, sigma in (
            ("held", information.sigma_held(letter)),
            ("free", information.sigma_free(letter)),
        ):
            words = f"{_WORDS[letter]} component, {_OTHERS[treatment]}"
            change: tuple[str, ...] = ()
            if quoted.component == "any":
                change = (f"the {words}, instead of any direction",)
            else:
                if letter != quoted.component:
                    change = (_instead(letter, quoted.component),)
                if treatment != quoted.others:
                    change += (f"{_OTHERS[treatment]},{_NOT[treatment]}",)
            value = level.one() * float(sigma.value)
            axes.append((f"{words}, {level.words}", value, change))
    return axes


def _joint(
    information: ThrustInformation, quoted: QuotedThreshold, letters: list[str], level: Level
) -> list[_Axis]:
    """All components tested together, for a thrust along one axis, the worst, the best, any."""
    if information.k < 2:
        return []
    reach, values = level.joint(information.k), information.eigenvalues
    any_of = quoted.component == "any"
    axes: list[_Axis] = []
    for letter in letters:
        change = () if letter == quoted.component else (_instead(letter, quoted.component),)
        held = float(information.sigma_held(letter).value)
        axes.append((f"{_WORDS[letter]} thrust", reach * held, (*change, _TOGETHER)))
        if any_of:
            change = (f"the {_WORDS[letter]} direction instead of any",)
            axes[-1] = (*axes[-1][:2], change)
    for words, sigma in (
        ("worst direction", float(values[0]) ** -0.5),
        ("best direction", float(values[-1]) ** -0.5),
        ("mean over directions", mean_sigma(information)),
    ):
        claimed = any_of and words == "worst direction"
        axes.append((words, reach * sigma, () if claimed else (f"{words} of all",)))
    told = level.joint_words
    return [(f"{words}, {_TOGETHER}, {told}", value, change) for words, value, change in axes]


def _instead(letter: str, claimed: str) -> str:
    return f"the {_WORDS[letter]} component instead of the {_WORDS.get(claimed, claimed)}"


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
    closest : tuple of Reading
        If the claim holds: the claimed one, and those with one change that come as close. If not:
        of the readings that match, the one with the fewest changes, and those that come as close
        with no more changes; or the nearest of all, if none matches.
    matching : tuple of Reading
    verdict : str
        A key of `VERDICTS`.
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
    closest: tuple[Reading, ...]
    matching: tuple[Reading, ...]
    all_readings: tuple[Reading, ...]
    verdict: str
    slips: tuple[str, ...]
    noise_scale: float
    ratio_default_errors: float | None

    @property
    def headline(self) -> str:
        """The verdict in a sentence."""
        return (
            f"The quoted threshold of {number_text(self.quoted_au_d2)} au/d2 "
            f"{VERDICTS[self.verdict]}"
        )

    @property
    def changes(self) -> tuple[str, ...]:
        """What the closest readings change of the claim, one text a reading."""
        return tuple("; ".join(r.changes) for r in self.closest if r.changes)

    def __str__(self) -> str:
        error = number_text(self.claimed.ratio * self.ratio_error, 2)
        lines = [self.headline, f"  As claimed: {self.claimed} +- {error}."]
        near = [r for r in self.closest if r is not self.claimed]
        if len(near) > 1 or (near and self.verdict == "cannot tell"):
            lines.append("  These readings come equally close and cannot be told apart:")
            lines += [f"    {reading}." for reading in near]
        else:
            lines += [f"  Closest: {reading}." for reading in near]
        if self.verdict == "another reading":
            lines.append(f"  Unlike the claim: {'; or '.join(self.changes)}.")
        if self.slips:
            lines.append(f"  The slip: {'; or '.join(self.slips)}.")
        return "\n".join([*lines, *(f"  {note}" for note in self._notes())])

    def _notes(self) -> list[str]:
        notes = [
            f"The residuals scatter {number_text(self.noise_scale)} times as much as these errors "
            "say; with errors scaled to them the ratio is "
            f"{number_text(self.claimed.ratio / self.noise_scale)}."
        ]
        if not math.isfinite(self.noise_scale):
            notes = []
        if self.ratio_default_errors is not None:
            notes.append(
                "Under the program's own error model the ratio is "
                f"{number_text(self.ratio_default_errors)}."
            )
        return notes

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

    def _repr_html_(self) -> str:
        return as_html([self.headline], text_rows(self.to_frame()), self._notes())

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        return {
            "quoted_au_d2": self.quoted_au_d2,
            "verdict": self.verdict,
            "headline": self.headline,
            "claimed": self.claimed.to_dict(),
            "ratio_error": self.ratio_error,
            "closest": [reading.to_dict() for reading in self.closest],
            "matching": [reading.to_dict() for reading in self.matching],
            "readings": [reading.to_dict() for reading in self.all_readings],
            "slips": list(self.slips),
            "noise_scale": self.noise_scale if math.isfinite(self.noise_scale) else None,
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
    scale = math.sqrt(fit.reduced_chi2) if fit.dof > 0 else math.nan
    listed = readings(thrust_information(fit), claim, size, scale if math.isfinite(scale) else 1.0)
    written = [(1.0, rounding(claim.value))]
    if errors and "arcsec" in errors:
        written.append((-1.0, rounding(errors["arcsec"])))
    elif fit.dof > 0:
        written.append((-1.0, Written(0.0, 0.0, 0.0, math.sqrt(0.5 / fit.dof), False)))
    r_au = math.sqrt(math.prod(fit.distance_range_au))
    digits = max(spread_allowed([(p, replace(w, sigma=0.0)) for p, w in written], 0.0))
    matching, closest, slips, verdict = judge(
        listed, max(spread_allowed(written, 0.0)), digits, float(thrust.g(r_au))
    )
    error = math.sqrt(sum((w.down + w.up) ** 2 / 12.0 + w.sigma**2 for _, w in written))
    return ThresholdAudit(
        size, listed[0], error, closest, matching, listed, verdict, slips, scale, other
    )


def judge(
    listed: tuple[Reading, ...], reach: float, digits: float, g: float | None
) -> tuple[tuple[Reading, ...], tuple[Reading, ...], tuple[str, ...], str]:
    """Readings that match (fewest changes first), those that come closest, slips, and the verdict.

    ``reach`` is how far quoted over recomputed may lie from 1, in ln, and ``digits`` the part of it
    that comes from rounding. Only a reading with one change gives the verdict "another reading", or
    a doubt: among the many with more, some come close by chance.
    """
    claimed, single = listed[0], [r for r in listed[1:] if len(r.changes) == 1]
    if claimed.miss <= max(HOLDS, reach):
        near = max(digits, claimed.miss) + CLOSE
        doubts = [
            r
            for r in single
            if r.miss <= near and abs(math.log(r.value_au_d2 / claimed.value_au_d2)) > HOLDS
        ]
        verdict = "cannot tell" if doubts else "holds"
        return (claimed, *doubts), (claimed, *doubts), (), verdict
    matching = [r for r in listed[1:] if r.miss <= max(MATCHES, reach)]
    matching.sort(key=lambda r: (len(r.changes), r.miss))
    slips = acceleration_slips(claimed.ratio, max(HOLDS, reach), g)
    if not matching:
        verdict = "slip" if slips else "too small" if claimed.ratio < 1 else "too large"
        return (), (min(listed, key=lambda r: r.miss),), slips, verdict
    best = matching[0]
    tied = tuple(
        r
        for r in matching
        if len(r.changes) == len(best.changes) and r.miss <= max(digits, best.miss) + CLOSE
    )
    if len(best.changes) == 1:
        return tuple(matching), tied, (), "another reading"
    verdict = "slip" if slips else "too small" if claimed.ratio < 1 else "too large"
    return tuple(matching), tied, slips, verdict
