"""Plain tables for people: aligned, at most 100 columns, no control characters."""

__all__ = ["WIDTH", "columns", "number", "safe", "wrap"]


def safe(text):
    """Return text with control characters written out, so that a terminal does not obey them."""
    return "".join(c if c.isprintable() else f"\\x{ord(c):02x}" for c in str(text))


WIDTH = 100


def columns(titles, rows, left=1):
    """Lay out rows of text under titles; the first `left` columns are left-aligned, the others right-aligned.

    What is wider than `WIDTH` goes on below, with the left columns again.

    Parameters
    ----------
    titles : list of str
        Column heads.
    rows : list of list of str
        Cells.
    left : int
        How many columns are text.

    Returns
    -------
    str
    """
    table = [titles, *[[safe(c) for c in row] for row in rows]]
    width = [max(len(row[i]) for row in table) for i in range(len(titles))]
    first, blocks = sum(w + 2 for w in width[:left]), [[]]
    used = first
    for i in range(left, len(titles)):
        if used + width[i] > WIDTH and blocks[-1]:
            blocks.append([])
            used = first
        blocks[-1].append(i)
        used += width[i] + 2
    parts = []
    for block in blocks:
        lines = []
        for row in table:
            cells = [row[i].ljust(width[i]) for i in range(left)] + [row[i].rjust(width[i]) for i in block]
            lines.append("  ".join(cells).rstrip())
        parts.append("\n".join(lines))
    return "\n\n".join(parts)


def number(x, digits=3):
    """Return a number with so many significant digits, or a dash where there is none."""
    if x is None or x != x:
        return "-"
    if x == 0:
        return "0"
    return f"{x:.{digits}g}" if not 1e-3 <= abs(x) < 1e5 else f"{x:#.{digits}g}".rstrip(".")


def wrap(text, width=WIDTH, indent="  "):
    """Break a line at spaces so that it fits `width` columns."""
    import textwrap

    return textwrap.fill(safe(text), width=width, subsequent_indent=indent)
