"""Plain-text and HTML tables from the same rows."""

import html
from collections.abc import Sequence


def text_table(headers: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """Columns aligned with two spaces between them; the first column to the left, the others to the right.

    >>> print(text_table(["circuit", "shots"], [["0", "10"], ["1", "200"]]))
    circuit  shots
    -------  -----
    0           10
    1          200
    """
    widths = [max(len(row[k]) for row in [headers, *rows]) for k in range(len(headers))]

    def line(cells: Sequence[str]) -> str:
        first = cells[0].ljust(widths[0])
        return "  ".join(
            [first, *(cell.rjust(width) for cell, width in zip(cells[1:], widths[1:], strict=True))]
        ).rstrip()

    return "\n".join([line(headers), "  ".join("-" * width for width in widths), *(line(row) for row in rows)])


def summary_lines(pairs: Sequence[tuple[str, str]]) -> str:
    """Names and values in two aligned columns.

    >>> print(summary_lines([("shots", "10"), ("target", "1.6 mHa")]))
    shots   10
    target  1.6 mHa
    """
    width = max(len(name) for name, _ in pairs)
    return "\n".join(f"{name.ljust(width)}  {value}" for name, value in pairs)


def html_table(headers: Sequence[str], rows: Sequence[Sequence[str]], *, caption: str, limit: int = 60) -> str:
    """An escaped HTML table of at most `limit` rows; the caption says when rows are left out."""
    shown = rows[:limit]
    if len(rows) > limit:
        caption += f" (first {limit} of {len(rows)} rows)"
    head = "".join(f"<th>{html.escape(cell)}</th>" for cell in headers)
    body = "".join("<tr>" + "".join(f"<td>{html.escape(cell)}</td>" for cell in row) + "</tr>" for row in shown)
    return (
        f"<table><caption>{html.escape(caption)}</caption><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"
    )
