"""The referee's desk: does a quoted threshold, mass or size follow from what it is said to rest on?

May import: errors, arc, fit, and from its own room arithmetic, arc_geometry,
notebook, quoted and threshold_readings.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ngbound.arc import Arc, read_arc
from ngbound.fit import Fit

from .arc_geometry import GeometryAudit, audit_geometry
from .arithmetic import NumberAudit, audit_numbers
from .notebook import as_html
from .quoted import QuotedPaper, placed, read_table
from .threshold_readings import ThresholdAudit, audit_threshold

__all__ = ["Audit", "audit"]

_SOUND_NUMBERS = ("sound", "sound in part", "untestable")


@dataclass(frozen=True)
class Audit:
    """Verdicts on one set of quoted numbers.

    Attributes
    ----------
    title : str
    numbers : NumberAudit or None
        Arithmetic between the quoted numbers.
    threshold : ThresholdAudit or None
        The quoted threshold against its arc.
    geometry : GeometryAudit or None
        The quoted threshold against the outline of its arc.
    """

    title: str
    numbers: NumberAudit | None
    threshold: ThresholdAudit | None
    geometry: GeometryAudit | None

    @property
    def tested(self) -> bool:
        """True if at least one relation could be tested."""
        numbers = self.numbers is not None and self.numbers.verdict != "untestable"
        return numbers or self.threshold is not None or self.geometry is not None

    @property
    def sound(self) -> bool:
        """True if something could be tested, nothing that could be disagrees, and the digits
        quoted do tell this from the usual slips."""
        return (
            self.tested
            and (self.numbers is None or self.numbers.verdict in _SOUND_NUMBERS)
            and (self.threshold is None or self.threshold.verdict == "holds")
            and (self.geometry is None or self.geometry.verdict == "plausible")
        )

    @property
    def undecided(self) -> bool:
        """True if nothing disagrees, but digits are too few, or the bracket too wide, to tell."""
        faults = (
            self.numbers is not None and self.numbers.verdict in ("slip", "inconsistent"),
            self.threshold is not None and self.threshold.verdict not in ("holds", "cannot tell"),
            self.geometry is not None and self.geometry.verdict == "implausible",
        )
        return self.tested and not self.sound and not any(faults)

    @property
    def slips(self) -> tuple[str, ...]:
        """What explains the disagreements, in words, best first."""
        found: list[str] = []
        if self.numbers is not None and self.numbers.verdict in ("slip", "inconsistent"):
            found += [str(change) for change in self.numbers.changes if change.slips]
        if self.threshold is not None and self.threshold.verdict not in ("holds", "cannot tell"):
            found += self.threshold.slips
            if self.threshold.verdict == "another reading":
                found += self.threshold.changes
        if self.geometry is not None:
            found += self.geometry.slips
        return tuple(dict.fromkeys(found))

    @property
    def parts(self) -> tuple[NumberAudit | ThresholdAudit | GeometryAudit, ...]:
        """The verdicts there are."""
        listed = (self.numbers, self.threshold, self.geometry)
        return tuple(part for part in listed if part is not None)

    @property
    def headline(self) -> str:
        """The verdict in a sentence."""
        if not self.tested:
            verdict = "nothing in it could be tested; give more of its numbers, or its arc"
        elif self.undecided:
            verdict = "nothing in it disagrees, but what was quoted is too coarse to tell"
        elif not self.sound:
            verdict = "NOT sound"
        elif self.numbers is not None and self.numbers.untested:
            verdict = "sound in what could be tested; not everything could"
        else:
            verdict = "sound, everything in it was tested"
        return f"{self.title}: {verdict}."

    def __str__(self) -> str:
        return "\n".join([self.headline, *map(str, self.parts)])

    def _repr_html_(self) -> str:
        shown = [part._repr_html_() for part in self.parts]
        return "".join([as_html([self.headline]), *shown])

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        return {
            "title": self.title,
            "tested": self.tested,
            "sound": self.sound,
            "undecided": self.undecided,
            "headline": self.headline,
            "slips": list(self.slips),
            "numbers": None if self.numbers is None else self.numbers.to_dict(),
            "threshold": None if self.threshold is None else self.threshold.to_dict(),
            "geometry": None if self.geometry is None else self.geometry.to_dict(),
        }


def audit(
    quoted: QuotedPaper | Mapping[str, Any] | str | Path,
    arc: Arc | Fit | None = None,
    progress: Callable[[str], None] | None = None,
) -> Audit:
    """Test what a paper quotes against itself, its arc, or the outline of its arc.

    Parameters
    ----------
    quoted : path of a TOML file, or mapping with the keys of `QuotedPaper`
        ``[numbers]`` (keys of `audit_numbers`), ``[threshold]``, ``[arc]``, ``[errors]``,
        ``[geometry]``; paths count from the folder of the file.
    arc : Arc or Fit, optional
        Instead of the file named in ``[arc]``.
    progress : callable, optional
        Is given a sentence before each long step.

    Raises
    ------
    CaseError, ArcError
        Input that cannot be understood.
    FitError, LimitError, MassError
        The arc or the numbers allow no test.
    """
    paper, folder = quoted, Path()
    if not isinstance(paper, QuotedPaper):
        paper, folder = read_table(paper, QuotedPaper)
    if arc is None and paper.arc is not None:
        arc = read_arc(folder / paper.arc.file, object=paper.arc.object)
    file = f"{quoted}, " if isinstance(quoted, str | Path) else ""
    numbers = threshold = geometry = None
    if paper.numbers:
        with placed(f"{file}[numbers]"):
            numbers = audit_numbers(**paper.numbers)
    if paper.threshold is not None and arc is not None:
        with placed(f"{file}[threshold] against the arc"):
            threshold = audit_threshold(arc, paper.threshold, paper.errors or None, progress)
    if paper.threshold is not None and paper.geometry is not None:
        with placed(f"{file}[threshold] against [geometry]"):
            geometry = audit_geometry(paper.geometry, paper.threshold, paper.seed)
    return Audit(paper.title, numbers, threshold, geometry)
