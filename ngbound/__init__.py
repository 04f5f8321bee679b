"""ngbound: how large a non-gravitational acceleration an arc of astrometry would have shown.

This module holds the public names and nothing else.  They are looked up when first used, so that
``import ngbound`` costs next to nothing and loads neither numba nor astropy nor pandas.
"""

import importlib
from typing import Any

__version__ = "0.1.0"

_HOME = {
    "Arc": "ngbound.arc",
    "ErrorModel": "ngbound.arc",
    "read_arc": "ngbound.arc",
    "vet": "ngbound.arc",
    "write_psv": "ngbound.arc",
    "write_xml": "ngbound.arc",
    "load_ephemeris": "ngbound.sky",
    "ForceModel": "ngbound.motion",
    "Orbit": "ngbound.motion",
    "TableLaw": "ngbound.motion",
    "Thrust": "ngbound.motion",
    "Window": "ngbound.motion",
    "predict": "ngbound.motion",
    "reciprocal_axis": "ngbound.motion",
    "Fit": "ngbound.fit",
    "compare_fits": "ngbound.fit",
    "fit_orbit": "ngbound.fit",
    "compare_laws": "ngbound.limits",
    "detection_threshold": "ngbound.limits",
    "forecast": "ngbound.limits",
    "inject_and_recover": "ngbound.limits",
    "power_curve": "ngbound.limits",
    "threshold_growth": "ngbound.limits",
    "sample_posterior": "ngbound.limits",
    "upper_limit": "ngbound.limits",
    "Outgassing": "ngbound.mass",
    "audit": "ngbound.mass",
    "mass_bound": "ngbound.mass",
    "reconcile": "ngbound.mass",
    "Record": "ngbound.report",
    "residual_fan": "ngbound.report",
    "Case": "ngbound.case",
    "read_case": "ngbound.case",
    "fan_case": "ngbound.run",
    "fit_case": "ngbound.run",
    "forecast_case": "ngbound.run",
    "inject_case": "ngbound.run",
    "inspect_case": "ngbound.run",
    "limit_case": "ngbound.run",
    "mass_case": "ngbound.run",
    "run_case": "ngbound.run",
    "simulate_arc": "ngbound.simulate",
    "sweep_cases": "ngbound.sweep",
    "NgboundError": "ngbound.errors",
    "NgboundWarning": "ngbound.errors",
}
"""Each public name and the module that defines or exports it."""

__all__ = ["__version__", *sorted(_HOME)]


def __getattr__(name: str) -> Any:
    """Load a public name from its room on first use (PEP 562)."""
    try:
        home = _HOME[name]
    except KeyError:
        raise AttributeError(f"module 'ngbound' has no attribute {name!r}") from None
    value = getattr(importlib.import_module(home), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(set(globals()) | set(_HOME))
