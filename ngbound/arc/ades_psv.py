"""ADES in pipe-separated values (PSV): read and write; imports errors and this room.

Follows A Concise Description of ADES (version 2022, 2 May 2024), section 5. ``#`` is no comment
mark: it opens a header. There is no quoting. A second keyword row ends the block before it, and its
records then stand without a header.
"""

import difflib
import warnings
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ngbound.arc.ades_rules import (
    COLUMNS,
    CONTEXT_ELEMENTS,
    OPTICAL_RESIDUAL,
    RADAR_RESIDUAL,
    VERSIONS,
    context_problem,
    kind_of_columns,
)
from ngbound.arc.ades_text import checked_contexts, grouped_cells
from ngbound.arc.fields import Packed, join_packed
from ngbound.arc.observations import Arc
from ngbound.arc.psv_cells import Cells, Lines, trimmed_of_odd_blanks
from ngbound.arc.records import (
    Coded,
    Context,
    ObjectArray,
    Records,
    concatenate,
    join_coded,
    merge_contexts,
)
from ngbound.arc.whole_file import PathLike, write_whole
from ngbound.errors import ArcError, NgboundWarning


@dataclass
class _Block:
    """Data rows under one keyword row, as spans of line numbers counted from 0."""

    names: list[str]
    names_line: int
    context: int
    spans: list[tuple[int, int]] = field(default_factory=list)

    def rows(self, lines: Lines) -> NDArray[np.int64]:
        """Every row that is not blank."""
        rows = np.concatenate([np.arange(a, b, dtype=np.int64) for a, b in self.spans])
        filled = lines.first[rows] != 0
        return rows if filled.all() else rows[filled]


@dataclass
class _Header:
    """A header while it is read: its elements, and the line of each."""

    elements: list[tuple[str, str, list[tuple[str, str]]]] = field(default_factory=list)
    lines: list[int] = field(default_factory=list)

    def frozen(self) -> Context:
        """The header as it stands in an arc."""
        return tuple((name, text, tuple(children)) for name, text, children in self.elements)


def psv_records(text: str, source: str) -> Records:
    """Records of a PSV text.

    Parameters
    ----------
    text : str
        The whole file, decoded.
    source : str
        Name for messages.

    Raises
    ------
    ArcError
        For anything that breaks the form; the message names line and column.
    """
    lines = Lines(trimmed_of_odd_blanks(text))
    version, headers, blocks = _split(lines, source)
    filled = [b for b in blocks if b.spans]
    if not filled:
        raise ArcError(
            f"{source}: there is no observation in it; an arc needs at least one.", file=source
        )
    _refuse_the_empty(headers, blocks, source)
    contexts, place = merge_contexts([header.frozen() for header in headers])
    for first in np.unique(place, return_index=True)[1]:
        _check_header(headers[first], version, source)
    groups: dict[tuple[str, ...], list[_Block]] = {}
    for block in blocks:
        groups.setdefault(tuple(block.names), []).append(block)
    parts = [_part(members, lines, version, source) for members in groups.values()]
    rows = np.concatenate([part.rows for part in parts])
    order = np.argsort(rows, kind="stable") if len(parts) > 1 else slice(None)
    number = np.concatenate([part.context for part in parts])[order]
    columns, coded, packed = _one_table(parts, order)
    n = len(rows)
    return Records(
        source=source,
        text=columns,
        kind=np.concatenate([part.kind for part in parts])[order],
        line=rows[order] + 1,
        block=np.where(number >= 0, np.append(place, -1)[number], -1),
        set_aside=np.full(n, "", dtype=object),
        contexts=contexts,
        version=version,
        coded=coded,
        packed=packed,
    )


@dataclass
class _Part:
    """All records under keyword rows of the same names: their lines, kinds and headers (positions,
    -1 without), and their columns as texts and, as far as they came on the way, as codes and
    bytes."""

    rows: NDArray[np.int64]
    kind: ObjectArray
    context: NDArray[np.int64]
    text: dict[str, ObjectArray]
    coded: dict[str, Coded]
    packed: dict[str, Packed]


def _part(blocks: list[_Block], lines: Lines, version: str, source: str) -> _Part:
    spans = [block.rows(lines) for block in blocks]
    sizes = [len(span) for span in spans]
    rows = np.concatenate(spans)
    above = np.repeat([block.names_line for block in blocks], sizes)
    kinds = np.array([_kind(block, version, source) for block in blocks], dtype=object)
    text, coded, packed = _cells(blocks[0].names, above, lines, rows, source)
    context = np.repeat([block.context for block in blocks], sizes)
    return _Part(rows, np.repeat(kinds, sizes), context, text, coded, packed)


def _one_table(
    parts: list[_Part], order: Any
) -> tuple[dict[str, ObjectArray], dict[str, Coded], dict[str, Packed]]:
    """The columns of all parts under one another, their rows put in order."""
    if len(parts) == 1:
        return parts[0].text, parts[0].coded, parts[0].packed
    sizes = [len(part.rows) for part in parts]
    text = {
        name: column[order]
        for name, column in concatenate([part.text for part in parts], sizes).items()
    }
    coded, packed = {}, {}
    for name in text:
        has = [part for part in parts if name in part.text]
        if all(name in part.coded for part in has):
            coded[name] = join_coded([part.coded.get(name) for part in parts], sizes).take(order)
        elif all(name in part.packed for part in has):
            packed[name] = join_packed([part.packed.get(name) for part in parts], sizes).take(order)
    return text, coded, packed


def _refuse_the_empty(headers: list[_Header], blocks: list[_Block], source: str) -> None:
    """A keyword row without records, and a header without a keyword row."""
    for block in blocks:
        if not block.spans:
            raise ArcError(
                f"{source}, line {block.names_line}: no record follows the keyword row. Remove it, "
                "or add the records.",
                file=source,
                line=block.names_line,
            )
    used = {block.context for block in blocks}
    for i, header in enumerate(headers):
        if i not in used:
            raise ArcError(
                f"{source}, line {header.lines[0]}: no record follows the header. Remove it, or "
                "add a keyword row and records.",
                file=source,
                line=header.lines[0],
            )


def _check_header(header: _Header, version: str, source: str) -> None:
    """The rules of a version for a header."""
    problem = context_problem(header.frozen(), version)
    if problem is not None:
        at, name, value, sentence = problem
        raise ArcError(
            f"{source}, line {header.lines[at]}, header element {name}: {sentence}.",
            file=source,
            line=header.lines[at],
            column=name,
            value=value,
        )


def _is_keyword_row(line: str) -> bool:
    first, *rest = line.split("|", 1)
    if not _begins_a_name(first):
        return False
    return all(_begins_a_name(token) for token in "".join(rest).split("|")) if rest else bool(first)


def _begins_a_name(token: str) -> bool:
    token = token.strip()
    return not token or token[0] == "_" or (token[0].isascii() and token[0].isalpha())


def _split(lines: Lines, source: str) -> tuple[str, list[_Header], list[_Block]]:
    version = ""
    headers: list[_Header] = []
    blocks: list[_Block] = []
    block: _Block | None = None
    in_header = False
    filled = lines.first != 0
    special = np.flatnonzero(~lines.plainly_data() & filled)
    ends = [*special[1:].tolist(), len(lines)] if len(special) else []
    opening = int(np.argmax(filled))
    if not len(special) or special[0] > opening:
        version = _version(lines.text(opening), source, opening + 1)
    count = np.concatenate([[0], np.cumsum(filled)])
    for index, end in zip(special.tolist(), ends, strict=True):
        number, line = index + 1, lines.text(index)
        span = (index + 1, end)
        first = line[:1]
        if not version:
            version = _version(line, source, number)
        elif first == "#":
            if not in_header:
                headers.append(_Header())
                in_header, block = True, None
            name, _, rest = line[1:].strip().partition(" ")
            _check_element(name, None, source, number)
            if rest.strip() and name != "fundingSource":
                raise ArcError(
                    f"{source}, line {number}: the header line {line[:60]!r} carries text after "
                    f"{name!r}; only fundingSource does. "
                    "Put the text on a line of its own, as in '! name text' (for a comment: '# "
                    "comment', then '! line text').",
                    file=source,
                    line=number,
                )
            headers[-1].elements.append((name, rest.strip(), []))
            headers[-1].lines.append(number)
        elif first == "!":
            if not in_header:
                raise ArcError(
                    f"{source}, line {number}: a line that begins with '!' must follow a line that "
                    "begins with '#'. "
                    "Add the '#' line that it belongs to.",
                    file=source,
                    line=number,
                )
            name, _, rest = line[1:].strip().partition(" ")
            parent = headers[-1].elements[-1]
            _check_element(parent[0], name, source, number)
            parent[2].append((name, rest.strip()))
        elif (first.isalpha() or first in "_|") and _is_keyword_row(line):
            names = [token.strip() for token in line.split("|")]
            _check_names(names, source, number)
            if block is not None and not block.spans:
                raise ArcError(
                    f"{source}, line {number}: this is a second keyword row with no record after "
                    "the first one "
                    f"(line {block.names_line}). Remove one of them.",
                    file=source,
                    line=number,
                )
            block = _Block(names, number, len(headers) - 1 if in_header else -1)
            blocks.append(block)
            in_header = False
        else:
            span = (index, end)
        if count[span[0]] == count[span[1]]:
            continue
        if block is None:
            number = span[0] + 1 + int(np.argmax(filled[span[0] : span[1]]))
            raise ArcError(
                f"{source}, line {number}: a record stands before any keyword row. "
                "Put the row of column names (permID|mode|stn|...) above it.",
                file=source,
                line=number,
            )
        if block.spans and block.spans[-1][1] == span[0]:
            span = (block.spans.pop()[0], span[1])
        block.spans.append(span)
    return version, headers, blocks


def _version(line: str, source: str, number: int) -> str:
    compact = "".join(line.split())
    if not compact.startswith("#version="):
        raise ArcError(
            f"{source}, line {number}: the first line of a PSV file must be '# version=2022' (or "
            f"2017), not {line[:40]!r}. "
            "Add it.",
            file=source,
            line=number,
        )
    version = compact.removeprefix("#version=")
    if version not in VERSIONS:
        raise ArcError(
            f"{source}, line {number}: the ADES version {version!r} is not known; it must be "
            f"{' or '.join(VERSIONS)}. Correct it.",
            file=source,
            line=number,
            value=version,
        )
    return version


def _check_element(name: str, child: str | None, source: str, number: int) -> None:
    allowed = tuple(CONTEXT_ELEMENTS) if child is None else CONTEXT_ELEMENTS[name]
    asked = name if child is None else child
    if asked not in allowed:
        where = "a header" if child is None else f"the header element {name}"
        near = difflib.get_close_matches(asked, allowed, n=1)
        hint = (
            f"Did you mean {near[0]}?"
            if near
            else f"Use one of {', '.join(allowed) or 'no child at all'}."
        )
        raise ArcError(
            f"{source}, line {number}: {asked!r} is not an element of {where}. {hint}",
            file=source,
            line=number,
            value=asked,
        )


def _check_names(names: list[str], source: str, number: int) -> None:
    if "" in names:
        raise ArcError(
            f"{source}, line {number}: column {names.index('') + 1} of the keyword row has no "
            "name. "
            "Name it, or remove the surplus '|'.",
            file=source,
            line=number,
        )
    for name in names:
        if name not in COLUMNS:
            near = difflib.get_close_matches(name, list(COLUMNS), n=3, cutoff=0.5)
            hint = f"did you mean {' or '.join(near)}?" if near else "see the list of ADES columns."
            raise ArcError(
                f"{source}, line {number}: the column {name!r} is not an ADES column; {hint}",
                file=source,
                line=number,
                column=name,
            )
    doubled = [name for i, name in enumerate(names) if name in names[:i]]
    if doubled:
        raise ArcError(
            f"{source}, line {number}: the column {doubled[0]} stands twice in the keyword row. "
            "Remove one.",
            file=source,
            line=number,
            column=doubled[0],
        )


def _kind(block: _Block, version: str, source: str) -> str:
    kind = kind_of_columns(set(block.names), version)
    if kind is None:
        missing = [
            c for c in ("stn", "mode", "obsTime", "ra", "dec", "astCat") if c not in block.names
        ]
        raise ArcError(
            f"{source}, line {block.names_line}: the column {missing[0] if missing else 'obsTime'} "
            "is missing from the keyword row; "
            "optical records need mode, stn, obsTime, ra, dec and astCat (other kinds: see the "
            "ADES description). Add it.",
            file=source,
            line=block.names_line,
            column=missing[0] if missing else "obsTime",
        )
    alien = [c for c in block.names if kind not in COLUMNS[c].kinds]
    if alien:
        raise ArcError(
            f"{source}, line {block.names_line}: the column {alien[0]} does not belong to records "
            f"of the kind {kind}. "
            "Remove it, or put the records of the other kind under a keyword row of their own.",
            file=source,
            line=block.names_line,
            column=alien[0],
        )
    if block.context >= 0 and kind in (OPTICAL_RESIDUAL, RADAR_RESIDUAL):
        raise ArcError(
            f"{source}, line {block.names_line}: records of the kind {kind} cannot stand under a "
            "header. Put them before the first header, or under a second keyword row.",
            file=source,
            line=block.names_line,
        )
    return kind


def _cells(
    names: list[str], above: NDArray[np.int64], lines: Lines, rows: NDArray[np.int64], source: str
) -> tuple[dict[str, ObjectArray], dict[str, Coded], dict[str, Packed]]:
    """The columns of some rows; ``above`` (n,) is the line of the keyword row of each."""
    width = len(names)
    cells = Cells(lines, rows)
    counts = cells.counts
    if (counts > width).any():
        row = int(np.argmax(counts > width))
        raise ArcError(
            f"{source}, line {rows[row] + 1}: the record has {counts[row]} cells, the keyword "
            f"row (line {above[row]}) "
            f"{width} names. Remove the surplus '|', or name the column.",
            file=source,
            line=int(rows[row]) + 1,
        )
    if (counts < width).any():
        row = int(np.argmax(counts < width))
        warnings.warn(
            f"{source}, line {rows[row] + 1}: the record has {counts[row]} cells, the keyword "
            f"row {width} names; "
            f"the missing ones are taken as empty ({int((counts < width).sum())} such records).",
            NgboundWarning,
            stacklevel=2,
        )
    texts: dict[str, ObjectArray] = {}
    coded: dict[str, Coded] = {}
    packed: dict[str, Packed] = {}
    for i, name in enumerate(names):
        texts[name], codes, raw = cells.column(i, name)
        if codes is not None:
            coded[name] = codes
        if raw is not None:
            packed[name] = raw
    return texts, coded, packed


# --------------------------------------------------------------------------- writing


def write_psv(arc: Arc, path: PathLike, *, version: str = "2022") -> None:
    """Write every record of an arc as PSV, headers included, in one step (a failure leaves no
    half-written file).

    Values that version 2022 does not allow in their old spelling (leading zeros, surplus decimals)
    are respelled. Positions
    that were reported in sexagesimal form are written in degrees, with their resolution in
    precTime, precRA and precDec.
    """
    write_whole(path, psv_text(arc, version))


def psv_text(arc: Arc, version: str = "2022") -> str:
    """The PSV text of an arc."""
    checked_contexts(arc, version)
    pieces = [f"# version={version}"]
    for run in grouped_cells(arc, version):
        if run.block >= 0:
            pieces.extend(_header_lines(arc.contexts[run.block]))
        names = list(run.columns)
        pieces.append("|".join(names))
        rows = zip(*(run.columns[c] for c in names), strict=True)
        pieces.extend("|".join(cells) for cells in rows)
    return "\n".join(pieces) + "\n"


def _header_lines(context: Context) -> list[str]:
    lines = []
    for name, text, children in context:
        lines.append(f"# {name} {text}".rstrip())
        lines.extend(f"! {child} {value}".rstrip() for child, value in children)
    return lines
