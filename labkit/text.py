"""Plain text for a terminal."""


def align(rows: list[list[str]]) -> str:
    """Return rows of texts as lines with aligned columns; the first row is the header."""
    widths = [max(len(cell) for cell in column) for column in zip(*rows, strict=True)]
    return "\n".join(
        "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows
    )
