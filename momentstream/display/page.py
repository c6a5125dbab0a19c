"""Tables as HTML; everything that comes from outside is escaped."""


def table(header, rows, caption=""):
    """An HTML table of text cells; the first column holds names."""
    from html import escape

    parts = ["<table>"]
    if caption:
        parts.append(f"<caption>{escape(caption)}</caption>")
    if header:
        cells = "".join(f"<th>{escape(cell)}</th>" for cell in header)
        parts.append(f"<thead><tr>{cells}</tr></thead>")
    parts.append("<tbody>")
    for row in rows:
        cells = "".join(f'<td style="text-align:right">{escape(cell)}</td>' for cell in row[1:])
        parts.append(f'<tr><th style="text-align:left">{escape(row[0])}</th>{cells}</tr>')
    parts.append("</tbody></table>")
    return "".join(parts)
