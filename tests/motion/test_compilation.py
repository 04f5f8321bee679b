"""Compiled code: where it is kept, the notice of a first run, read-only folders, two starts."""

import os
import shutil
import subprocess
import sys
from pathlib import Path

import ngbound
from ngbound.motion._kernels.compiled import is_compiled, kept_in
from ngbound.motion.compilation import compile_notice, compiled_code_folder, missing_kernels
from tests.motion.orbits import BELT, neighbourhood

HERE = Path(ngbound.__file__).parents[1]
PROBE = """
import sys
from ngbound.motion.compilation import compile_notice, compiled_code_folder
print(compile_notice())
print(compiled_code_folder())
import numpy as np
from ngbound.motion._kernels.bodies import inside_table
from ngbound.motion.gravity import ForceModel
tab, _ = ForceModel(asteroids=False).perturbers(0.0, 10.0)
print(inside_table(tab, 5.0))
print(sum(inside_table.stats.cache_hits.values()), sum(inside_table.stats.cache_misses.values()))
"""


def probe(
    environment: dict[str, str], path: Path | None = None, lines: int | None = None
) -> list[str]:
    """What the first lines of the probe print; all of them by default."""
    clean = os.environ | {"PYTHONPATH": str(path or HERE)} | environment
    done = subprocess.run(
        [sys.executable, "-c", "\n".join(PROBE.splitlines()[:lines])],
        env=clean,
        capture_output=True,
        text=True,
        check=True,
        cwd="/",
    )
    return done.stdout.splitlines()


def test_nothing_is_said_once_compiled() -> None:
    near, _ = neighbourhood(BELT, 100.0, 50.0, n=8)
    near.chi2(near.theta[None])
    assert missing_kernels() == []
    assert compile_notice() == ""
    assert compiled_code_folder().exists()


def test_a_first_run_says_that_it_compiles_and_the_second_finds_the_code(tmp_path: Path) -> None:
    first = probe({"NUMBA_CACHE_DIR": str(tmp_path)})
    assert "first run" in first[0] and str(tmp_path) in first[0]
    assert first[3] == "0 1"
    assert probe({"NUMBA_CACHE_DIR": str(tmp_path)})[3] == "1 0"


def block_caches(package: Path) -> None:
    """A file where numba would put its folder keeps even the superuser from writing there."""
    for folder in [package, *[p for p in package.rglob("*") if p.is_dir()]]:
        (folder / "__pycache__").write_text("")


def test_package_in_a_folder_that_cannot_be_written(tmp_path: Path) -> None:
    package = tmp_path / "site" / "ngbound"
    source = Path(ngbound.__file__).parent
    shutil.copytree(source, package, ignore=shutil.ignore_patterns("__pycache__"))
    home = tmp_path / "home"
    home.mkdir()
    block_caches(package)
    environment = {"HOME": str(home), "XDG_CACHE_HOME": str(home / "cache")}
    first = probe(environment, tmp_path / "site")
    assert first[2] == "True" and str(home) in first[1]
    assert probe(environment, tmp_path / "site")[3] == "1 0"


def test_an_edit_in_one_kernel_file_compiles_the_others_anew(tmp_path: Path) -> None:
    package = tmp_path / "site" / "ngbound"
    source = Path(ngbound.__file__).parent
    shutil.copytree(source, package, ignore=shutil.ignore_patterns("__pycache__"))
    environment = {"NUMBA_CACHE_DIR": str(tmp_path / "cache")}
    assert probe(environment, tmp_path / "site")[3] == "0 1"
    assert probe(environment, tmp_path / "site")[3] == "1 0"
    # as after a checkout: another time, the same content
    (package / "motion" / "_kernels" / "laws.py").touch()
    assert probe(environment, tmp_path / "site")[3] == "1 0"
    with (package / "motion" / "_kernels" / "laws.py").open("a") as file:
        file.write("\n")
    assert probe(environment, tmp_path / "site")[3] == "0 1"


def test_every_kernel_bears_the_decorator_that_sees_all_files() -> None:
    for path in Path(ngbound.__file__).parent.rglob("*.py"):
        assert path.name == "compiled.py" or "njit" not in path.read_text(), path.name


def test_two_processes_that_start_at_once(tmp_path: Path) -> None:
    environment = {**os.environ, "PYTHONPATH": str(HERE), "NUMBA_CACHE_DIR": str(tmp_path)}
    started = [
        subprocess.Popen(
            [sys.executable, "-c", PROBE], env=environment, stdout=subprocess.PIPE, text=True
        )
        for _ in range(2)
    ]
    for process in started:
        out, _ = process.communicate()
        assert process.returncode == 0
        assert out.splitlines()[2] == "True"
    # one may have overwritten the other's index, which costs one compilation more and no more
    probe({"NUMBA_CACHE_DIR": str(tmp_path)})
    assert probe({"NUMBA_CACHE_DIR": str(tmp_path)})[3] == "1 0"


def without_cache(tmp_path: Path) -> tuple[dict[str, str], Path]:
    """Environment and place of a package where neither its folder nor a home can be written."""
    package = tmp_path / "site" / "ngbound"
    source = Path(ngbound.__file__).parent
    shutil.copytree(source, package, ignore=shutil.ignore_patterns("__pycache__"))
    block_caches(package)
    home = tmp_path / "no folder"
    home.write_text("")
    return {"HOME": str(home), "XDG_CACHE_HOME": str(home)}, tmp_path / "site"


def test_no_folder_can_be_written_at_all(tmp_path: Path) -> None:
    for _ in range(2):
        told = probe(*without_cache(tmp_path))
        assert "in every run" in told[0] and "NUMBA_CACHE_DIR" in told[0]
        assert told[1:] == ["None", "True", "0 1"]
        shutil.rmtree(tmp_path / "site")


def test_uncompiled_kernels_need_no_notice() -> None:
    told = probe({"NUMBA_DISABLE_JIT": "1"}, lines=5)
    assert told == ["", "None"]


def test_numba_without_the_attributes_that_keep_the_mark() -> None:
    # another numba may name them otherwise: code is then kept and looked up as numba does it
    class Other:
        signatures: tuple[str, ...] = ()

    assert not is_compiled(Other()) and kept_in(Other()) == ""
    Other.signatures = ("(f8)",)
    assert is_compiled(Other())

    class Cache:
        _cache_file = object()

    Other._cache, Other.signatures = Cache(), ()
    assert not is_compiled(Other())
