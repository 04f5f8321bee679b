"""Many cases: on one machine in parallel, or shared out over the nodes of a cluster.

Each case is a job of its own with its own record, so a sweep can be interrupted and begun again: a
case whose record already stands, made from the same inputs and choices, is not run anew. On a
cluster every node runs the same command with its own ``part``. May import case and run, and every
room to their left; never cli.
"""

import hashlib
import json
import os
import re
import sys
from collections.abc import Iterable, Iterator
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pandas as pd
from tqdm import tqdm

from ngbound.case import Case, case_for
from ngbound.errors import CaseError, NgboundError
from ngbound.report import load_record
from ngbound.rounding import down, is_number, up
from ngbound.run import run_case

DONE = "done"
KEPT = "kept"
FAILED = "failed"
COLUMNS = (
    "case",
    "status",
    "object",
    "verdict",
    "threshold_worst_au_d2",
    "threshold_best_au_d2",
    "limit_au_d2",
    "mass_kg",
    "diameter_m",
    "record",
    "problem",
)


@dataclass(frozen=True, eq=False)
class Sweep:
    """What became of every case of a sweep.

    Attributes
    ----------
    table : pandas.DataFrame
        One row per case: case, status (done, kept, failed), object, verdict, threshold_worst_au_d2,
        threshold_best_au_d2, limit_au_d2, mass_kg, diameter_m, record, problem.
    """

    table: pd.DataFrame = field(repr=False)

    @property
    def n_failed(self) -> int:
        """Cases that could not be done."""
        return int((self.table["status"] == FAILED).sum())

    def to_dict(self) -> dict[str, Any]:
        """Counts and rows."""
        rows = json.loads(self.table.to_json(orient="records"))
        return {"n_cases": len(self.table), "n_failed": self.n_failed, "cases": rows}

    def __str__(self) -> str:
        shown = self.table[
            [
                "case",
                "status",
                "object",
                "verdict",
                "threshold_worst_au_d2",
                "limit_au_d2",
                "mass_kg",
            ]
        ]
        written = {"threshold_worst_au_d2": up, "limit_au_d2": up, "mass_kg": down}
        text = shown.to_string(
            index=False,
            na_rep="-",
            formatters={
                name: lambda x, write=write: write(x) if is_number(x) else "-"
                for name, write in written.items()
            },
        )
        lines = [text]
        for _, row in self.table[self.table["status"] == FAILED].iterrows():
            lines.append(f"{row['case']}: {row['problem']}")
        return "\n".join(lines)


def sweep_cases(
    paths: Iterable[str | Path],
    *,
    workers: int | None = None,
    part: str = "1/1",
    table: str | Path | None = None,
    again: bool = False,
    progress: bool = False,
) -> Sweep:
    """Run many case files.

    Parameters
    ----------
    paths : iterable of paths
        Case files, or folders whose ``*.toml`` files that hold a case are taken.
    workers : int, optional
        Processes at a time; as many as there are cores by default.
    part : str
        "2/8" takes the second eighth of the cases: one part for each node of a cluster.
    table : path, optional
        CSV file for the table of results.
    again : bool
        Run cases anew even where their record stands.
    progress : bool
        Show a progress bar on stderr.

    Raises
    ------
    CaseError
        No case found, two cases with one output folder, or a wrong part.
    """
    number, of = _part(part)
    cases = sorted(set(_case_files(paths)))
    if not cases:
        raise CaseError("No case file (*.toml with an [arc] table) was found in what was given.")
    read = {path: case_for(path) for path in cases}
    _refuse_shared_folders(read)
    mine = cases[number - 1 :: of]
    rows: dict[Path, dict[str, Any]] = {}
    waiting = []
    for path in mine:
        kept = None if again else _standing_record(path, read[path])
        if kept is None:
            waiting.append(path)
        else:
            rows[path] = _row(path, KEPT, kept, folder=read[path].output.folder)
    count = min(workers or os.cpu_count() or 1, max(len(waiting), 1))
    bar = tqdm(
        total=len(mine), initial=len(rows), desc="cases", file=sys.stderr, disable=not progress
    )
    with bar, ProcessPoolExecutor(count) as pool:
        jobs = {pool.submit(_one_case, path): path for path in waiting}
        for job in as_completed(jobs):
            path = jobs[job]
            rows[path] = job.result()
            bar.update()
            bar.set_postfix_str(path.name)
    frame = pd.DataFrame([rows[path] for path in mine], columns=list(COLUMNS))
    if table is not None:
        target = Path(table)
        temporary = target.with_name(target.name + ".part")
        frame.to_csv(temporary, index=False)
        os.replace(temporary, target)
    return Sweep(frame)


def _case_files(paths: Iterable[str | Path]) -> Iterator[Path]:
    for given in paths:
        path = Path(given)
        if path.is_dir():
            for found in sorted(path.glob("*.toml")):
                text = found.read_bytes().decode("utf-8", errors="replace")
                if re.search(r"^\s*\[arc\]", text, re.MULTILINE):
                    yield found.resolve()
        elif path.is_file():
            yield path.resolve()
        else:
            raise CaseError(f"There is no case file or folder {path}; check its name.")


def _part(text: str) -> tuple[int, int]:
    found = re.fullmatch(r"(\d+)/(\d+)", text.strip())
    if found is None or not 1 <= int(found[1]) <= int(found[2]):
        raise CaseError(
            f"The part '{text}' of a sweep must be written like 2/8: from 1/8 to "
            "8/8 for eight nodes."
        )
    return int(found[1]), int(found[2])


def _refuse_shared_folders(read: dict[Path, Case]) -> None:
    owner: dict[Path, Path] = {}
    for path, case in read.items():
        assert case.output.folder is not None
        folder = case.output.folder.resolve()
        if folder in owner:
            raise CaseError(
                f"{path} and {owner[folder]} write into the same folder {folder}; give each "
                "its own [output] folder."
            )
        owner[folder] = path


def _sha256(path: Path) -> str:
    return hashlib.sha256(path.read_bytes()).hexdigest()


def _standing_record(path: Path, case: Case) -> dict[str, Any] | None:
    """The record of an earlier run of the same inputs, or None."""
    assert case.output.folder is not None
    target = case.output.folder / "record.json"
    if not target.is_file():
        return None
    try:
        data = load_record(target).data
    except NgboundError:
        return None
    inputs = data.get("provenance", {}).get("inputs", {})
    now = {"arc": _sha256(case.arc.file), "case": _sha256(path)}
    return data if all(inputs.get(k, {}).get("sha256") == v for k, v in now.items()) else None


def _one_case(path: Path) -> dict[str, Any]:
    try:
        return _row(path, DONE, run_case(path).data, folder=case_for(path).output.folder)
    except NgboundError as error:
        return _row(path, FAILED, {}, str(error))


def _plain(value: Any) -> dict[str, Any]:
    if value is None:
        return {}
    return value if isinstance(value, dict) else value.to_dict()


def _row(
    path: Path,
    status: str,
    data: dict[str, Any],
    problem: str = "",
    folder: Path | None = None,
) -> dict[str, Any]:
    threshold, limit = _plain(data.get("threshold")), _plain(data.get("limit"))
    mass, judged = _plain(data.get("mass")), _plain(data.get("verdict"))
    return {
        "case": path.name,
        "status": status,
        "object": data.get("object"),
        "verdict": judged.get("kind"),
        "threshold_worst_au_d2": threshold.get("worst_au_d2"),
        "threshold_best_au_d2": threshold.get("best_au_d2"),
        "limit_au_d2": limit.get("magnitude_au_d2"),
        "mass_kg": mass.get("mass_kg"),
        "diameter_m": mass.get("diameter_m"),
        "record": "" if folder is None else str(folder / "record.json"),
        "problem": problem,
    }
