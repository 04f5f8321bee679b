"""Offsets of star catalogues tile by tile, from the user's copy of the published table; imports
numpy, constants, errors and this room.

S. Eggl et al. 2020, Icarus 339, 113596: offsets and errors of the proper motions of 26 star
catalogues against Gaia DR2, averaged over equal-area tiles of the sky (49,152 for N = 64). The
table is too large to ship.

Format of the text file (gzip too):

- Lines that begin with ``!``, ``#`` or ``%``, and all before the first line of numbers, are its
  head. One line of the head (or several together) names the catalogues in the order of the columns,
  by the letter of the 80-column format or the ADES name, apart by blanks or commas, perhaps after
  a word and a colon; each once, or once above each of its four columns.
- Every other line is one tile, in RING order, equatorial coordinates; the number of lines tells N.
- Four numbers a catalogue: offset in RA times cos dec and in Dec at J2000.0, arcsec; error of the
  proper motion in RA times cos dec and in Dec, mas/yr.

They are subtracted from an observation at the year t:

    RA  - (dRA + (t - 2000) pmRA / 1000) / cos(Dec),    Dec - (dDec + (t - 2000) pmDec / 1000).

Four zeros mean that the catalogue was not compared in the tile: nothing is known there. Files from
before March 2023 give UCAC5 the letter W, now that of Gaia DR3: where W stands without Y, it is
read so, with a warning.
"""

import re
import warnings
from dataclasses import dataclass, field, replace
from functools import lru_cache
from math import isqrt
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ngbound.arc.catalogue_offsets import MJD_2000, YEAR_D, arc_mjd
from ngbound.arc.healpix import ring_tile
from ngbound.arc.observations import BIAS_COLUMNS, Arc
from ngbound.arc.report80 import catalogue_codes
from ngbound.arc.whole_file import PathLike, read_whole
from ngbound.constants import ARCSEC_RAD
from ngbound.errors import ArcError, CaseError, NgboundWarning

FloatArray = NDArray[np.float64]

COLUMNS_EACH = 4
MARKS = "!#%"
LARGEST = (10.0, 10.0, 1000.0, 1000.0)
"""No offset (arcsec) or proper motion (mas/yr) is larger: such a file has other units."""


@dataclass(frozen=True, eq=False)
class DebiasingTable:
    """Offsets of star catalogues on tiles of the sky.

    Attributes
    ----------
    source : str
    nside : int
    catalogues : tuple of str, (k,)
        ADES names.
    offsets : (12 nside^2, k, 4) float32 array
        As in the file.
    """

    source: str
    nside: int
    catalogues: tuple[str, ...]
    offsets: NDArray[np.float32] = field(repr=False)

    def at(
        self, catalogue: str, ra_rad: FloatArray, dec_rad: FloatArray, mjd: FloatArray
    ) -> FloatArray:
        """Offsets (n, 2) in RA times cos dec and Dec, arcsec; nan where none is known."""
        out = np.full((len(mjd), 2), np.nan)
        if catalogue in self.catalogues:
            tile = ring_tile(self.nside, ra_rad, dec_rad)
            four = self.offsets[tile, self.catalogues.index(catalogue)].astype(float)
            years = (mjd - MJD_2000) / YEAR_D
            known = np.any(four != 0.0, axis=1)
            out[known] = (four[:, :2] + years[:, None] * four[:, 2:] / 1000.0)[known]
        return out


def read_debiasing(path: PathLike) -> DebiasingTable:
    """Read the table of offsets, once as long as the file does not change.

    Raises
    ------
    CaseError
        The file cannot be read or is no such table; file and line are named.
    """
    try:
        told = Path(path).stat()
    except OSError as error:
        raise CaseError(
            f"{path}: the debiasing table cannot be read ({error.strerror or error}); give the "
            "path of the text file in [errors] debiasing, or leave the key out.",
            file=str(path),
        ) from error
    return _read(str(path), told.st_mtime_ns, told.st_size)


@lru_cache(maxsize=2)
def _read(path: str, mtime_ns: int, size: int) -> DebiasingTable:
    try:
        content = read_whole(path)
    except ArcError as error:
        raise CaseError(f"[errors] debiasing: {error}", file=path) from error
    lines = content.decode("latin-1").replace(",", " ").splitlines()
    head, body, first = [], [], 0
    for number, line in enumerate(lines, start=1):
        text = line.strip()
        if text and (text[0] in MARKS or not (first or _is_number(text.split()[0]))):
            head.append((number, text.strip(MARKS + " ")))
        elif text:
            first = first or number
            body.append((number, text))
    if not body:
        raise CaseError(f"{path}: the debiasing table holds no line of numbers.", file=path)
    values = _numbers(path, body)
    nside = isqrt(len(body) // 12)
    if 12 * nside**2 != len(body):
        raise CaseError(
            f"{path}: the debiasing table has {len(body)} lines of numbers, from line {first} to "
            f"line {body[-1][0]}; equal-area tiles are 12 N^2 (49152 for N = 64). Get the whole "
            "file.",
            file=path,
        )
    return DebiasingTable(path, nside, _catalogues(path, head, values.shape[1]), _four(values))


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _four(values: NDArray[np.float32]) -> NDArray[np.float32]:
    return values.reshape(len(values), -1, COLUMNS_EACH)


def _numbers(path: str, body: list[tuple[int, str]]) -> NDArray[np.float32]:
    wide = len(body[0][1].split())
    if wide % COLUMNS_EACH:
        raise CaseError(
            f"{path}, line {body[0][0]}: {wide} numbers are not four for each catalogue (two "
            "offsets in arcsec, two proper motions in mas/yr).",
            file=path,
            line=body[0][0],
        )
    try:
        values = np.loadtxt([text for _, text in body], dtype=np.float32, ndmin=2, comments=None)
    except ValueError as error:
        number, why = next(
            (
                (number, f"{bad[0]!r} is no number" if bad else f"{len(words)} numbers")
                for number, words in ((number, text.split()) for number, text in body)
                if (bad := [word for word in words if not _is_number(word)]) or len(words) != wide
            ),
            (body[0][0], str(error)),
        )
        raise CaseError(
            f"{path}, line {number}: {why}; each line of the debiasing table holds {wide} numbers "
            f"like line {body[0][0]}. Get the file again.",
            file=path,
            line=number,
        ) from error
    wrong = ~(np.abs(_four(values)) <= np.array(LARGEST, dtype=np.float32)).all(axis=(1, 2))
    if wrong.any():
        number = body[int(np.flatnonzero(wrong)[0])][0]
        raise CaseError(
            f"{path}, line {number}: an offset of more than {LARGEST[0]:g} arcsec or "
            f"{LARGEST[2]:g} mas/yr is none of a star catalogue; offsets are in arcsec, proper "
            "motions in mas/yr.",
            file=path,
            line=number,
        )
    return values


def _catalogues(path: str, head: list[tuple[int, str]], columns: int) -> tuple[str, ...]:
    """The catalogues that the head names, in order."""
    codes = catalogue_codes()
    names = {name: name for name in codes.values()} | codes
    wanted = columns // COLUMNS_EACH
    listed = [
        (number, words)
        for number, text in head
        if (words := re.split(r"[\s'\"\[\](){}]+", text.rpartition(":")[2].strip()))
        and all(word in names for word in words)
    ]
    together = [word for _, words in listed for word in words]
    for words in [*(words for _, words in listed), together]:
        if len(words) == columns and all(
            len(set(words[at : at + COLUMNS_EACH])) == 1 for at in range(0, columns, COLUMNS_EACH)
        ):
            words = words[::COLUMNS_EACH]
        if len(words) == wanted == len(set(words)):
            break
    else:
        where = f" names {len(together)} on line {listed[0][0]}" if listed else " names none"
        raise CaseError(
            f"{path}: the debiasing table has columns of {wanted} catalogues, but its head{where}; "
            "one line of the head must name each once, in the order of the columns, by its letter "
            "or ADES name.",
            file=path,
        )
    if "W" in words and "Y" not in words:
        warnings.warn(
            f"{path}: W is read as UCAC5, as in debiasing tables from before March 2023; a newer "
            "table has Y for it.",
            NgboundWarning,
            stacklevel=2,
        )
        names["W"] = "UCAC5"
    return tuple(names[word] for word in words)


def debiased(arc: Arc, path: PathLike) -> Arc:
    """The arc with the offsets of the table subtracted from its positions.

    Parameters
    ----------
    arc : Arc
        ``ra_rad`` and ``dec_rad`` of optical positions are corrected, ``ra`` and ``dec`` stay as
        observed. An arc that is corrected already comes back as it is.
    path : path
        Of the debiasing table.

    Returns
    -------
    Arc
        With the columns `ngbound.arc.observations.BIAS_COLUMNS`.
    """
    if BIAS_COLUMNS[0] in arc.table:
        return arc
    biases = read_debiasing(path)
    table = arc.table
    ra, dec = (table[c].to_numpy(dtype=float, copy=True) for c in ("ra_rad", "dec_rad"))
    mjd = arc_mjd(arc)
    named = table["astCat"].to_numpy(dtype=object)
    stars = (table["kind"] == "optical").to_numpy(dtype=bool) & np.isfinite(ra) & np.isfinite(dec)
    bias = np.full((len(table), 2), np.nan)
    for name in set(named[stars].tolist()):
        mine = stars & (named == name)
        bias[mine] = biases.at(name, ra[mine], dec[mine], mjd[mine])
    shift = np.nan_to_num(bias) * ARCSEC_RAD
    ra = np.where(stars, (ra - shift[:, 0] / np.cos(dec)) % (2.0 * np.pi), ra)
    dec = np.where(stars, dec - shift[:, 1], dec)
    changed = {"ra_rad": ra, "dec_rad": dec} | dict(zip(BIAS_COLUMNS, bias.T, strict=True))
    return replace(arc, table=table.assign(**changed))
