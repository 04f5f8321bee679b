"""Every error ngbound raises on purpose; imports nothing.

NgboundError                 root; carries ``data`` (what was at hand) and ``exit_status``
├── InputError               the input cannot be read or is wrong (exit status 2)
│   ├── ArcError             an arc file or a record in it
│   ├── StationError         a station code or position
│   └── CaseError            a case file or a choice in it
└── AnalysisError            the input is readable, but the analysis cannot be done (exit status 1)
    ├── EphemerisRangeError  a date outside the planetary ephemeris
    ├── PropagationError     an orbit that cannot be integrated
    ├── FirstOrbitError      no preliminary orbit from these angles
    ├── FitError             the differential correction failed
    ├── LimitError           no threshold or limit exists for this arc
    ├── SamplingError        the posterior could not be sampled
    └── MassError            no mass follows from these numbers
NgboundWarning               what the user should know although the work goes on
"""

from typing import Any


class NgboundError(Exception):
    """Root of all errors of ngbound.

    Parameters
    ----------
    message : str
        One or more whole sentences: what is wrong, where, and how to mend it.
    **data
        Whatever was at hand and should not be lost (rows, values, partial results).
    """

    exit_status = 1

    def __init__(self, message: str, **data: Any) -> None:
        super().__init__(message)
        self.data: dict[str, Any] = data


class InputError(NgboundError):
    """The input cannot be read or is wrong."""

    exit_status = 2


class ArcError(InputError):
    """An arc file, or a record in it, is wrong."""


class StationError(InputError):
    """A station code or a station position is wrong."""


class CaseError(InputError):
    """A case file, or a choice in it, is wrong."""


class AnalysisError(NgboundError):
    """The input is readable, but the analysis cannot be done."""


class EphemerisRangeError(AnalysisError):
    """A date lies outside the planetary ephemeris."""


class PropagationError(AnalysisError):
    """An orbit cannot be integrated over the span asked for."""


class FirstOrbitError(AnalysisError):
    """No preliminary orbit could be found from the angles."""


class FitError(AnalysisError):
    """The differential correction failed."""


class LimitError(AnalysisError):
    """No threshold or limit exists for this arc."""


class SamplingError(AnalysisError):
    """The posterior could not be sampled."""


class MassError(AnalysisError):
    """No mass follows from these numbers."""


class NgboundWarning(UserWarning):
    """What the user should know although the work goes on."""
