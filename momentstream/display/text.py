"""Tables and numbers as text."""


def number(value, digits=6):
    """A number as a person reads it: six digits, whole numbers whole."""
    if value is None:
        return "unknown"
    if isinstance(value, (bool, str)):
        return str(value)
    if isinstance(value, int) or (float(value).is_integer() and abs(value) < 1e6):
        return f"{int(value):,}" if isinstance(value, int) else f"{int(value)}"
    return f"{float(value):.{digits}g}"


def label_text(label, longest=40):
    """A name on one line: control characters written out, the rest shortened."""
    shown = "".join(c if c.isprintable() else ascii(c)[1:-1] for c in label)
    return shown if len(shown) <= longest else f"{shown[: longest - 3]}..."


def columns(header, rows):
    """Lines of a table: the first column to the left, the others to the right."""
    cells = [header, *rows] if header else rows
    widths = [max(len(row[i]) for row in cells) for i in range(len(cells[0]))]
    lines = []
    for row in cells:
        first = row[0].ljust(widths[0])
        rest = (cell.rjust(width) for cell, width in zip(row[1:], widths[1:], strict=True))
        lines.append("  ".join((first, *rest)).rstrip())
    return lines


def one_line(name, fields):
    """``Name(key=value, ...)`` with numbers as a person reads them."""
    inside = ", ".join(
        f"{key}={value if isinstance(value, str) else number(value)}" for key, value in fields
    )
    return f"{name}({inside})"
