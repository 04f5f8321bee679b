"""How the results of this room show themselves in a notebook; imports the standard library only."""

import html
from collections.abc import Iterable, Sequence


def as_html(
    sentences: Iterable[str], rows: Sequence[Sequence[str]] = (), notes: Iterable[str] = ()
) -> str:
    """Paragraphs, then a table whose first row is its head, then notes as a list."""
    parts = [f"<p>{html.escape(text)}</p>" for text in sentences]
    if rows:
        head, *body = rows
        lines = [_row(head, "th"), *(_row(cells, "td") for cells in body)]
        parts.append("<table>" + "".join(lines) + "</table>")
    listed = "".join(f"<li>{html.escape(text)}</li>" for text in notes)
    return "".join(parts) + (f"<ul>{listed}</ul>" if listed else "")


def _row(cells: Sequence[str], tag: str) -> str:
    return "<tr>" + "".join(f"<{tag}>{html.escape(cell)}</{tag}>" for cell in cells) + "</tr>"


def as_columns(rows: Sequence[Sequence[str]], left: Iterable[int] = (0,)) -> str:
    """Rows of text as aligned columns; the columns named in ``left`` are flush left."""
    flush = set(left)
    widths = [max(len(cells[j]) for cells in rows) for j in range(len(rows[0]))]
    return "\n".join(
        "  ".join(
            cell.ljust(width) if j in flush else cell.rjust(width)
            for j, (cell, width) in enumerate(zip(cells, widths, strict=True))
        ).rstrip()
        for cells in rows
    )
