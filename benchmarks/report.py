"""What was measured, as lines for a person, as Markdown and as JSON."""

import contextlib
import datetime
import json
import os
import platform
import re
from dataclasses import asdict
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

PACKAGES = ("momentstream", "numpy", "numba", "scipy", "pandas", "polars", "duckdb")
COLUMNS = ("row", "ours / theirs", "limit", "least", "medians", "kept", "least times")
WIDTHS = (14, 40, 9, 9, 9, 6, 0)


# -- the machine ---------------------------------------------------------------------------------


def machine():
    """Date, processor, versions, and how busy the machine was when measuring began."""
    load = os.getloadavg()[0] if hasattr(os, "getloadavg") else None
    return {
        "date": datetime.date.today().isoformat(),
        "processor": _processor(),
        "cores": os.cpu_count(),
        "system": f"{platform.system()} {platform.machine()}",
        "load": load,
        "versions": {"python": platform.python_version(), **_versions()},
    }


def _processor():
    try:
        text = Path("/proc/cpuinfo").read_text(encoding="utf-8")
        return re.search(r"^model name\s*:\s*(.+)$", text, re.MULTILINE)[1].strip()
    except (OSError, TypeError):
        return platform.processor() or platform.machine()


def _versions():
    found = {}
    for name in PACKAGES:
        with contextlib.suppress(PackageNotFoundError):
            found[name] = version(name)
    return found


def described(machine, scale):
    versions = ", ".join(f"{name} {number}" for name, number in machine["versions"].items())
    load = "" if machine["load"] is None else f", load {machine['load']:.1f} at the start"
    return (
        f"{machine['date']}, {machine['processor']}, {machine['cores']} cores, "
        f"{machine['system']}{load}\n{versions}\n{scale.readings:,} readings, one thread"
    )


def file_stem(machine):
    name = re.sub(r"[^a-z0-9]+", "-", machine["processor"].lower()).strip("-")
    return f"{machine['date']}-{name}"


# -- the rows ------------------------------------------------------------------------------------


def cells(row, result):
    """The text of a row, column by column."""

    def number(value):
        return f"{value:.2f} {row.unit}"

    limit = ""
    if row.limit is not None:
        limit = f"{'≥' if row.at_least else '≤'} {row.limit:g} {row.unit}"
    times = [f"{name} {duration(value)}" for name, value in result.times.items()]
    extra = [f"{name.replace('_', ' ')} {value:.3g}" for name, value in result.extra.items()]
    return (
        row.key, row.what, limit, number(result.least), number(result.median),
        row.verdict(result), ", ".join((*times, *extra)),
    )  # fmt: skip


def duration(seconds):
    for unit, size in (("s", 1.0), ("ms", 1e-3), ("µs", 1e-6)):
        if seconds >= size:
            return f"{seconds / size:.3g} {unit}"
    return f"{seconds * 1e9:.3g} ns"


def _aligned(texts):
    """Words to the left, figures to the right."""
    parts = [
        text.rjust(width) if 2 <= i <= 4 else text.ljust(width)
        for i, (text, width) in enumerate(zip(texts, WIDTHS, strict=True))
    ]
    return "  ".join(parts).rstrip()


HEADING = _aligned(COLUMNS)


def line(row, result):
    return _aligned(cells(row, result))


# -- the peers -----------------------------------------------------------------------------------

PEER_COLUMNS = (
    "four statistics", "version", "time", "least / ours", "medians / ours",
    "error: variance", "skewness", "kurtosis", "memory: peak", "added",
)  # fmt: skip


def _peer_rows(table, versions):
    for name, found in table.items():
        errors, memory = found["errors"], found["memory"]
        yield (
            name, versions.get(name.lower(), ""), duration(found["seconds"]),
            f"{found['least']:.1f} ×", f"{found['median']:.1f} ×",
            *(_error(errors[statistic]) for statistic in ("variance", "skewness", "kurtosis")),
            _times_input(memory["peak"]), _times_input(memory["added"]),
        )  # fmt: skip


def _error(value):
    return "none given" if value is None else f"{value:.1e}"


def _times_input(value):
    return "unknown" if value is None else f"{value:.2f} ×"


def peer_lines(table, versions):
    rows = [PEER_COLUMNS, *_peer_rows(table, versions)]
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    lines = []
    for first, *rest in rows:
        right = (cell.rjust(width) for cell, width in zip(rest, widths[1:], strict=True))
        lines.append("  ".join((first.ljust(widths[0]), *right)))
    return "\n".join(lines)


# -- files ---------------------------------------------------------------------------------------


def as_json(machine, scale, rows, results, table):
    measured = [
        {
            "row": row.key,
            "what": row.what,
            "limit": row.limit,
            "at_least": row.at_least,
            "unit": row.unit,
            "kept": row.verdict(results[row.key]),
            **asdict(results[row.key]),
        }
        for row in rows
    ]
    whole = {"machine": machine, "scale": asdict(scale), "rows": measured, "peers": table}
    return json.dumps(whole, indent=2, ensure_ascii=False) + "\n"


def as_markdown(machine, scale, rows, results, table):
    lines = [
        f"# Measured on {machine['date']}",
        "",
        described(machine, scale).replace("\n", "  \n"),
    ]
    lines += ["", *_markdown_table(COLUMNS, [cells(row, results[row.key]) for row in rows])]
    if table:
        peers = _peer_rows(table, machine["versions"])
        lines += ["", "Mean, variance, skewness and kurtosis by each peer:", ""]
        lines += _markdown_table(PEER_COLUMNS, peers)
    return "\n".join(lines) + "\n"


def _markdown_table(header, rows):
    rule = ["---"] * len(header)
    return ["| " + " | ".join(texts) + " |" for texts in (header, rule, *rows)]
