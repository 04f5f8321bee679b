"""Lines and cells of a PSV text by operations on the bytes of the whole file; imports this room's
fields and records.

A million rows are cut without a loop over rows: pipes and line ends are found once, cells are
trimmed by moving their ends, and a column is gathered byte by byte over all rows. Columns of few
distinct values come out as codes.
"""

from functools import cached_property
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ngbound.arc.fields import LONGEST, Packed, is_digit
from ngbound.arc.records import Coded, ObjectArray

IndexArray = NDArray[np.int64]

WORD = 8
"""Bytes that are gathered at once."""
NEWLINE, PIPE, HASH, MARK = 10, 124, 35, 33
ROUNDS = 64
"""Blanks beside a cell that are skipped for all cells at once; longer runs go cell by cell."""
WIDE = 8
"""A column is gathered as a matrix while that takes no more than this many times the file."""
AS_BYTES = ("obsTime", "ra", "dec", "raStar", "decStar")
"""Columns whose values seldom repeat, and are wanted as bytes."""
ODD_BLANKS = "\x85\xa0\u1680\u2028\u2029\u202f\u205f\u3000" + "".join(
    map(chr, range(0x2000, 0x200B))
)
_BLANK = np.zeros(256, dtype=bool)
_BLANK[[9, 32]] = True
_KEEP = np.array([(1 << (8 * k)) - 1 for k in range(WORD + 1)], dtype=np.uint64)


def trimmed_of_odd_blanks(text: str) -> str:
    """The text without the blanks beside cells, when it has blanks other than space and tab."""
    if text.isascii() or not any(blank in text for blank in ODD_BLANKS):
        return text
    return "\n".join(
        "|".join(cell.strip() for cell in line.split("|")) for line in text.split("\n")
    )


class Lines:
    """The lines of a text: ``starts`` and ``ends`` (m,) of each in ``data``, its ``first`` byte
    that is no blank (0 for a blank line), and ``words``: the eight bytes from every position on."""

    def __init__(self, text: str) -> None:
        self.data = text.encode("utf-8")
        padded = self.data + b"\n" + bytes(WORD)
        self.bytes = np.frombuffer(padded, dtype=np.uint8)
        self.words = np.ndarray((len(padded) - WORD,), dtype="<u8", buffer=padded, strides=(1,))
        self.ends = np.flatnonzero(self.bytes == NEWLINE)
        self.starts = np.concatenate([[0], self.ends[:-1] + 1])
        blanks = np.flatnonzero((self.bytes == 32) | (self.bytes == 9))
        before = self.bytes[np.maximum(blanks - 1, 0)]
        self.padded = {
            False: bool(np.isin(before, (PIPE, NEWLINE, 32, 9)).any()),
            True: bool(np.isin(self.bytes[blanks + 1], (PIPE, NEWLINE, 32, 9)).any()),
        }
        self.start = self.skip(self.starts, self.ends)
        self.first = np.where(self.start < self.ends, self.bytes[self.start], 0)

    def __len__(self) -> int:
        return len(self.ends)

    def text(self, line: int) -> str:
        """One line, trimmed."""
        return self.data[self.starts[line] : self.ends[line]].decode("utf-8").strip()

    def skip(self, at: IndexArray, stop: IndexArray, back: bool = False) -> IndexArray:
        """Positions moved over blanks, forward from ``at`` up to ``stop``, or ``back`` from ``at``
        down to ``stop``."""
        if not self.padded[back]:
            return at
        here = -1 if back else 0
        step = -1 if back else 1
        active = np.flatnonzero((at != stop) & _BLANK[self.bytes[at + here]])
        if not len(active):
            return at
        at = at.copy()
        for _ in range(ROUNDS):
            at[active] += step
            moved = at[active]
            active = active[(moved != stop[active]) & _BLANK[self.bytes[moved + here]]]
            if not len(active):
                return at
        for i in active.tolist():
            low, high = sorted((int(at[i]), int(stop[i])))
            piece = self.data[low:high]
            rest = piece.rstrip(b" \t") if back else piece.lstrip(b" \t")
            at[i] += step * (len(piece) - len(rest))
        return at

    def plainly_data(self) -> NDArray[np.bool_]:
        """Where a line can only be a row of data: a cell begins with a digit."""
        found = is_digit(self.first)
        if found.mean() < 0.9:
            after = np.zeros(len(self.bytes), dtype=np.uint8)
            after[:-1] = (self.bytes[:-1] == PIPE) & is_digit(self.bytes[1:])
            inside = np.bitwise_or.reduceat(after, self.starts) > 0
            found |= inside & (self.first != HASH) & (self.first != MARK) & (self.first != 0)
        return found


class Cells:
    """The cells of some lines: ``counts`` (n,) per line, and each column on demand."""

    def __init__(self, lines: Lines, rows: IndexArray) -> None:
        self.lines, self.rows = lines, rows
        low, high = lines.starts[rows], lines.ends[rows]
        base = int(low.min())
        pipes = np.flatnonzero(lines.bytes[base : int(high.max())] == PIPE) + base
        self.low, self.high = low, high
        self.pipes = pipes.astype(np.int32 if len(lines.bytes) < 2**31 else np.int64)
        self.first_pipe = np.searchsorted(self.pipes, low.astype(self.pipes.dtype))
        after = np.searchsorted(self.pipes, high.astype(self.pipes.dtype))
        self.counts = after - self.first_pipe + 1
        inside = self.counts - 1
        if int(inside.sum()) < len(pipes):  # other lines between these hold pipes too
            ahead = np.cumsum(inside) - inside
            self.pipes = self.pipes[
                np.repeat(self.first_pipe - ahead, inside) + np.arange(int(inside.sum()))
            ]
            self.first_pipe = ahead

    @cached_property
    def grid(self) -> NDArray[Any] | None:
        """The pipes (n, columns - 1) when every line has the same number of cells and there is
        nothing between the lines."""
        n, width = len(self.rows), int(self.counts[0]) - 1
        if len(self.pipes) != n * width or not width or (self.counts != width + 1).any():
            return None
        return self.pipes.reshape(n, width)

    def bounds(self, column: int) -> tuple[IndexArray, IndexArray]:
        """Where the trimmed cells of a column begin and end in the text; an absent cell is
        empty."""
        low, high = self.low, self.high
        if self.grid is not None and column <= self.grid.shape[1]:
            start = low if column == 0 else self.grid[:, column - 1].astype(np.int64) + 1
            end = high if column == self.grid.shape[1] else self.grid[:, column].astype(np.int64)
        elif len(self.pipes):
            last = len(self.pipes) - 1
            before = self.pipes[np.clip(self.first_pipe + column - 1, 0, last)].astype(np.int64)
            behind = self.pipes[np.clip(self.first_pipe + column, 0, last)].astype(np.int64)
            start = low if column == 0 else np.where(self.counts > column, before + 1, high)
            end = np.where(self.counts > column + 1, behind, high)
        else:
            start, end = (low, high) if column == 0 else (high, high)
        start = self.lines.skip(start, end)
        return start, self.lines.skip(end, start, back=True)

    def column(self, index: int, name: str) -> tuple[ObjectArray, Coded | None, Packed | None]:
        """A column as texts and, where that was done on the way, as codes or as bytes."""
        start, end = self.bounds(index)
        length = end - start
        n, width = len(length), int(length.max())
        if width == 0:
            nothing = np.array([""], dtype=object)
            return np.full(n, "", dtype=object), Coded(np.zeros(n, dtype=np.int64), nothing), None
        if width * n > WIDE * len(self.lines.data) or (name in AS_BYTES and width > LONGEST):
            return self._slices(start, end), None, None
        words = self._words(start, length, width)
        if name in AS_BYTES:
            turned = np.ascontiguousarray(words.view(np.uint8).reshape(n, -1)[:, :width].T)
            packed = Packed(turned, length)
            return packed.texts(), None, packed
        codes = _factorize(words)
        sample = np.empty(int(codes.max()) + 1, dtype=np.int64)
        sample[codes[::-1]] = np.arange(n - 1, -1, -1)
        coded = Coded(codes, self._slices(start[sample], end[sample]))
        return coded.texts(), coded, None

    def _words(self, start: IndexArray, length: IndexArray, width: int) -> NDArray[np.uint64]:
        """The cells as words (n, ceil(width/8)) of eight bytes, zero-padded."""
        words = np.empty((len(start), -(-width // WORD)), dtype="<u8")
        last = len(self.lines.words) - 1
        shortest = int(length.min())
        for k in range(words.shape[1]):
            at = start + WORD * k
            if int(at.max()) > last:
                at = np.minimum(at, last)
            words[:, k] = self.lines.words[at]
            if shortest < WORD * (k + 1):
                words[:, k] &= _KEEP[np.clip(length - WORD * k, 0, WORD)]
        return words

    def _slices(self, start: IndexArray, end: IndexArray) -> ObjectArray:
        out = np.full(len(start), "", dtype=object)
        for i in np.flatnonzero(end > start).tolist():
            out[i] = self.lines.data[start[i] : end[i]].decode("utf-8")
        return out


def _factorize(words: NDArray[np.uint64]) -> IndexArray:
    """Codes (n,) of the distinct rows of words (n, k)."""
    codes, _ = pd.factorize(np.ascontiguousarray(words[:, 0]))
    for k in range(1, words.shape[1]):
        part, values = pd.factorize(np.ascontiguousarray(words[:, k]))
        if len(values) > 1:
            codes, _ = pd.factorize(codes * len(values) + part)
    return codes.astype(np.int64)
