"""Promise 10 for joint moments: states of every past format load, and mean what they did."""

import itertools
from fractions import Fraction

import numpy as np
import pytest
from golden_joint import CASES, FOLDER

import momentstream as ms


def exact_sums(rows, weights, k):
    """The sums of products of k deviations, and of their absolute values."""
    weights = [Fraction(1)] * len(rows) if weights is None else [Fraction(w) for w in weights]
    columns = [[Fraction(v) for v in column] for column in zip(*rows, strict=True)]
    total = sum(weights)
    means = [sum(w * v for w, v in zip(weights, c, strict=True)) / total for c in columns]
    for which in itertools.combinations_with_replacement(range(len(columns)), k):
        terms = []
        for r, w in enumerate(weights):
            term = w
            for j in which:
                term *= columns[j][r] - means[j]
            terms.append(term)
        yield which, sum(terms) / total, sum(map(abs, terms)) / total


def test_every_golden_file_is_read():
    for folder in FOLDER.iterdir():
        files = {f"{name}.{form}.bin" for name in CASES for form in ("settled", "working")}
        assert files == {path.name for path in folder.iterdir()}


@pytest.mark.parametrize("name", list(CASES))
@pytest.mark.parametrize("form", ["settled", "working"])
@pytest.mark.parametrize("folder", sorted(FOLDER.iterdir()), ids=lambda folder: folder.name)
def test_golden_states_keep_loading(folder, form, name):
    data = (folder / f"{name}.{form}.bin").read_bytes()
    _, rows, weights = CASES[name]
    moments = ms.from_bytes(data)
    assert moments.to_bytes(resume=form == "working") == data
    assert moments.order == 4
    dim = len(rows[0])
    kept = len(rows) if weights is None else sum(w > 0 for w in weights)
    assert (moments.count, moments.dim) == (kept, dim)
    if name == "names":
        assert moments.names == ("inlet", "Rücklauf", "管道")
    if name == "own_scales":
        correlation = ms.JointMoments(2).update([row[:2] for row in CASES["order_4"][1]])
        assert np.array_equal(moments.correlation(), correlation.correlation())
        return
    for k in (2, 3, 4):
        for which, exact, size in exact_sums(rows[:], weights, k):
            got = moments.comoment([which.count(j) for j in range(dim)])
            assert abs(Fraction(got) - exact) <= 128 * size / 2**53, which
    if form == "working":
        moments.update(rows, weights)
        assert moments.count == 2 * kept
