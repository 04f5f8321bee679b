"""The public names, locked, and what importing them costs."""

import importlib
import json
import re
import subprocess
import sys

import ngbound

PUBLIC_NAMES = {
    "__version__",
    "Arc",
    "Case",
    "ErrorModel",
    "Fit",
    "NgboundError",
    "NgboundWarning",
    "Orbit",
    "Outgassing",
    "Record",
    "Thrust",
    "compare_fits",
    "detection_threshold",
    "fan_case",
    "fit_case",
    "fit_orbit",
    "inspect_case",
    "limit_case",
    "load_ephemeris",
    "mass_bound",
    "mass_case",
    "predict",
    "read_arc",
    "read_case",
    "residual_fan",
    "run_case",
    "sample_posterior",
    "simulate_arc",
    "sweep_cases",
    "upper_limit",
    "ForceModel",
    "TableLaw",
    "Window",
    "reciprocal_axis",
    "vet",
    "write_xml",
    "compare_laws",
    "forecast",
    "inject_and_recover",
    "power_curve",
    "threshold_growth",
    "audit",
    "reconcile",
    "forecast_case",
    "inject_case",
    "write_psv",
}
HEAVY = {"numba", "astropy", "pandas", "scipy", "matplotlib", "emcee", "numpy"}


def loaded_after(statement: str) -> tuple[set[str], float]:
    """Top-level modules loaded by a statement in a fresh interpreter, and its seconds."""
    code = (
        "import json, sys, time\n"
        "start = time.perf_counter()\n"
        f"{statement}\n"
        "seconds = time.perf_counter() - start\n"
        "print()\n"
        "print(json.dumps([sorted({n.split('.')[0] for n in sys.modules}), seconds]))\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60
    )
    names, seconds = json.loads(done.stdout.splitlines()[-1])
    return set(names), seconds


def test_public_names_are_locked():
    assert set(ngbound.__all__) == PUBLIC_NAMES


def test_every_public_name_resolves_to_what_its_room_exports():
    for name in ngbound.__all__:
        assert getattr(ngbound, name) is not None
    for name, home in ngbound._HOME.items():
        assert name in importlib.import_module(home).__dict__


def test_unknown_name_is_an_attribute_error():
    assert not hasattr(ngbound, "no_such_name")
    assert PUBLIC_NAMES <= set(dir(ngbound))


def test_import_is_light():
    names, seconds = loaded_after("import ngbound")
    assert names & HEAVY == set()
    assert seconds < 0.5


def test_help_loads_nothing_heavy():
    names, _ = loaded_after(
        "from ngbound.cli import main\ntry:\n    main(['--help'])\nexcept SystemExit:\n    pass"
    )
    assert names & HEAVY == set()


def test_version_is_that_of_the_distribution():
    assert re.fullmatch(r"\d+\.\d+\.\d+", ngbound.__version__)
