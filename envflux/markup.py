"""HTML for notebooks."""

from __future__ import annotations

import html
from collections.abc import Iterable, Sequence


def table(rows: Iterable[Sequence[str]], heads: Sequence[str] = (), title: str = "") -> str:
    """Write a plain left-aligned table; every text is escaped."""
    lines = ([_row("th", heads)] if heads else []) + [_row("td", row) for row in rows]
    heading = f"<b>{html.escape(title)}</b>" if title else ""
    return f"{heading}<table>{''.join(lines)}</table>"


def _row(tag: str, cells: Sequence[str]) -> str:
    inside = "".join(f"<{tag} style='text-align:left'>{html.escape(cell)}</{tag}>" for cell in cells)
    return f"<tr>{inside}</tr>"
