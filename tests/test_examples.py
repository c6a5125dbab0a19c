"""The examples, run as a user runs them: what they print is right, and bad input is told apart."""

import importlib.util
import subprocess
import sys
import tracemalloc
from decimal import Decimal, localcontext
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

EXAMPLES = Path(__file__).parents[1] / "examples"
STATISTICS = ("mean", "std", "skewness", "kurtosis", "minimum", "maximum")


def shard_totals(*arguments):
    return example("shard_totals.py", *arguments)


def example(name, *arguments):
    command = [sys.executable, "-W", "error", EXAMPLES / name, *arguments]
    return subprocess.run(
        [str(part) for part in command], capture_output=True, encoding="utf-8", timeout=240
    )


def table(output, first_cell):
    """The rows of the table whose header begins so, by their first cell."""
    lines = [line.split() for line in output.splitlines()]
    start = next(i for i, cells in enumerate(lines) if cells[:1] == [first_cell])
    end = next((i for i in range(start, len(lines)) if not lines[i]), len(lines))
    return {
        cells[0]: dict(zip(lines[start][1:], cells[1:], strict=False))
        for cells in lines[start + 1 : end]
    }


def proof(output):
    """Of each statistic: combined, in one pass, digits that agree."""
    lines = [line.split() for line in output.splitlines()]
    start = next(i for i, cells in enumerate(lines) if cells[:1] == ["combined"])
    return {cells[0]: cells[1:] for cells in lines[start + 1 :]}


def exact_statistics(readings):
    """Mean, standard deviation, skewness and kurtosis from exact rationals, rounded once."""
    x = [Fraction(value) for value in readings]
    mean = sum(x) / len(x)
    second, third, fourth = (sum((v - mean) ** k for v in x) / len(x) for k in (2, 3, 4))
    with localcontext(prec=50):
        std = (Decimal(second.numerator) / second.denominator).sqrt()
        skewness = Decimal(third.numerator) / third.denominator / std**3
    return {
        "mean": float(mean),
        "std": float(std),
        "skewness": float(skewness),
        "kurtosis": float(fourth / second**2 - 3),
        "minimum": min(readings),
        "maximum": max(readings),
    }


@pytest.fixture
def folder(tmp_path):
    """Shards of a logger: two .csv (one in the bytes of a spreadsheet), two .npy, and a note."""
    rng = np.random.default_rng(7)
    shards = {
        "a.csv": (4.0 + rng.gamma(2.0, 0.1, 9000)).round(3),
        "b.csv": (5.0 + rng.gamma(2.0, 0.1, 40)).round(3),
        "c.npy": 4.5 + rng.gamma(2.0, 0.1, 20_000),
        "d.npy": rng.integers(3, 6, (50, 4)),
    }
    lines = [f"{i},{value}" for i, value in enumerate(shards["a.csv"].tolist())]
    lines.insert(17, "x,")
    lines.insert(4321, "y, ")
    lines.insert(5000, "")
    (tmp_path / "a.csv").write_text("\n".join(["second, pressure", *lines]), encoding="utf-8")
    lines = [f'"{value}",dry' for value in shards["b.csv"].tolist()]
    (tmp_path / "b.csv").write_bytes("\r\n".join(["\ufeffpressure,note", *lines]).encode())
    np.save(tmp_path / "c.npy", shards["c.npy"])
    np.save(tmp_path / "d.npy", shards["d.npy"])
    (tmp_path / "notes.txt").write_text("not a shard")
    return tmp_path, shards


def test_own_folder_of_shards(folder):
    path, shards = folder
    result = shard_totals(path, "--column", "pressure", "--workers", 2)
    assert result.returncode == 0, result.stderr
    assert "4 of 4 shards" in result.stderr
    rows = table(result.stdout, "shard")
    assert list(rows) == [*shards, "whole"]
    parts = {name: values.ravel().tolist() for name, values in shards.items()}
    parts["whole"] = [value for part in parts.values() for value in part]
    for name, readings in parts.items():
        assert rows[name]["count"] == f"{len(readings):,}"
        assert rows[name]["omitted"] == ("2" if name in ("a.csv", "whole") else "0")
        for statistic, exact in exact_statistics(readings).items():
            # Five significant digits are printed: half a unit of the fifth, and no more.
            assert float(rows[name][statistic]) == pytest.approx(exact, rel=5.001e-5, abs=1e-12)


def test_proof_of_own_folder_holds_every_digit(folder):
    path, shards = folder
    result = shard_totals(path, "--column", "pressure")
    rows = proof(result.stdout)
    assert rows["count"] == ["29,240", "29,240", "all"]
    assert rows["omitted"] == ["2", "2", "all"]
    exact = exact_statistics([v for part in shards.values() for v in part.ravel().tolist()])
    for statistic in STATISTICS:
        combined, single, digits = rows[statistic]
        # Power sums are within 64 units of the last place (2**-53 each); a statistic takes at most
        # two of them, and skewness one to the power 1.5.
        size = max(abs(exact[statistic]), 1.0)
        for value in (combined, single):
            assert abs(float(value) - exact[statistic]) <= 160 * 2.0**-53 * size
        assert digits == "all" or int(digits) >= 14
        assert (digits == "all") == (combined == single)


def test_invented_data():
    result = shard_totals()
    assert result.returncode == 0, result.stderr
    assert result.stdout.startswith("Invented data")
    assert "12 of 12 shards" in result.stderr
    rows = table(result.stdout, "shard")
    assert len(rows) == 13
    counts = [int(row["count"].replace(",", "")) for row in rows.values()]
    assert counts[-1] == sum(counts[:-1]) > 2_000_000
    assert int(rows["whole"]["omitted"].replace(",", "")) > 0
    digits = {name: cells[2] for name, cells in proof(result.stdout).items()}
    assert list(digits) == ["count", "omitted", *STATISTICS]
    assert [digits[name] for name in ("count", "omitted", "minimum", "maximum")] == ["all"] * 4
    assert all(value == "all" or int(value) >= 13 for value in digits.values())


HEADER = "second,pressure\n"


@pytest.mark.parametrize(
    ("files", "options", "message"),
    [
        ({}, ["--column", "pressure"], "no .csv or .npy files"),
        ({"a.csv": HEADER + "1,4.0"}, ["--column", "presure"],
         "a.csv: no column 'presure'; it has: second, pressure"),
        ({"a.csv": HEADER + "1,4.0"}, [], "a.csv: choose one of its columns with --column"),
        ({"a.csv": HEADER + "1,4.0\n\n3,high"}, ["--column", "pressure"],
         "a.csv, line 4: 'high' is not a number"),
        ({"a.csv": HEADER + "1,4.0\n2"}, ["--column", "pressure"],
         "a.csv, line 3: the row ends before the column"),
        ({"a.csv": "4.0\n4.5"}, [], "a.csv, line 1: the first line must name the column"),
        ({"a.csv": ""}, ["--column", "pressure"], "a.csv: no column 'pressure'; it has: none"),
        ({"a.csv": b"pressure\n\xff\xfe"}, [], "a.csv: not a text file in UTF-8"),
        ({"a.csv": "pressure\n" + "4" * 200_000}, [], "a.csv, line 2: field larger than"),
        ({"a.npy": "4.0 4.5 4.2"}, [], "a.npy: the magic string is not correct"),
        ({"a.npy": np.array([4.0 + 1j])}, [], "a.npy: values must be real numbers"),
    ],
)  # fmt: skip
def test_bad_input_is_one_line_and_exit_code_2(tmp_path, files, options, message):
    for name, content in files.items():
        if isinstance(content, np.ndarray):
            np.save(tmp_path / name, content)
        else:
            data = content if isinstance(content, bytes) else content.encode()
            (tmp_path / name).write_bytes(data)
    result = shard_totals(tmp_path, *options, "--workers", 1)
    assert_refused(result, message)


def test_missing_folder(tmp_path):
    assert_refused(shard_totals(tmp_path / "nowhere"), "nowhere: no such folder")


def assert_refused(result, message):
    assert result.returncode == 2
    (line,) = (line for line in result.stderr.splitlines() if not line.startswith("["))
    assert line.startswith("shard_totals: ")
    assert message in line


def test_csv_is_read_in_bounded_memory(tmp_path):
    specification = importlib.util.spec_from_file_location(
        "shard_totals", EXAMPLES / "shard_totals.py"
    )
    example = importlib.util.module_from_spec(specification)
    specification.loader.exec_module(example)
    path = tmp_path / "long.csv"
    with open(path, "w", encoding="utf-8") as file:
        file.write("second,pressure\n")
        file.writelines(f"{i},{4 + i % 1000 / 1000}\n" for i in range(100_000))
    example.compile_kernels()
    tracemalloc.start()
    try:
        moments = example.feed(example.new_moments(), path, "pressure")
        _, peak = tracemalloc.get_traced_memory()
    finally:
        tracemalloc.stop()
    assert moments.count == 100_000
    # The file has 1.1 MB, and its 100,000 numbers as a list would take 3.2 MB.
    assert peak < 600_000


def test_joint_totals_tell_what_no_worker_saw_whole():
    result = example("joint_totals.py", "--stations", 3, "--rows", 60_000, "--workers", 2)
    assert result.returncode == 0, result.stderr
    specification = importlib.util.spec_from_file_location(
        "joint_totals", EXAMPLES / "joint_totals.py"
    )
    module = importlib.util.module_from_spec(specification)
    specification.loader.exec_module(module)
    rows = np.concatenate([chunk for i in range(3) for chunk in module.shard(i, 60_000)])
    assert "180,000 rows" in result.stdout
    correlations = table(result.stdout, "correlation")
    for i, name in enumerate(module.NAMES):
        printed = [float(correlations[name][other]) for other in module.NAMES]
        # Six significant digits are printed.
        assert printed == pytest.approx(np.corrcoef(rows.T)[i].tolist(), rel=5.001e-6)
    residue = (rows @ module.RESIDUE).tolist()
    exact = exact_statistics(residue)
    lines = {line.split("  ")[0]: line.split() for line in result.stdout.splitlines()}
    for line in ("combined", "one pass"):
        printed = lines[line][len(line.split()) :][:4]
        for number, statistic in zip(printed, module.STATISTICS, strict=True):
            assert float(number) == pytest.approx(exact[statistic], rel=5.001e-6)
    assert not any(
        cells[-1] == lines["combined"][-1] for n, cells in lines.items() if "station " in n
    )


def test_joint_totals_refuses_bad_options():
    result = example("joint_totals.py", "--rows", 0)
    assert result.returncode == 2
    assert "--rows must be at least 1, got 0" in result.stderr
