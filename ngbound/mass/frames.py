"""A table of results as rows of text, for a notebook.

May import from its own room distributions.
"""

import pandas as pd

from .distributions import number_text


def text_rows(table: pd.DataFrame) -> list[tuple[str, ...]]:
    """Head and rows of a table as text, numbers to three digits; none for an empty table."""
    rows = [
        tuple(number_text(cell) if isinstance(cell, float) else str(cell) for cell in row)
        for row in table.itertuples(index=False)
    ]
    return [tuple(map(str, table.columns)), *rows] if rows else []
