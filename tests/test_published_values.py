"""Published, certified and closed-form values: whole, and merged from random cuts.

Tolerances.  A published value is held to its own tolerance in the file (half a unit of the last
printed digit, and what reading the data as doubles does), plus what is allowed against exact
arithmetic on the doubles themselves: four units of the last place an order.  A k-th power is k - 1
multiplications, every merge moves it by k terms more, and a ratio of two moments has the errors of
both; half of that is reached.  Units are those of the sum of absolute terms (``Reference.size``).
"""

from collections import Counter
from fractions import Fraction
from functools import cache
from typing import NamedTuple
from zlib import crc32

import numpy as np
import pytest
from assertions import assert_close, unit_of_last_place
from exact import assert_mean
from published import Reference, fed, load, merged, random_cuts, read, square_root, table

import momentstream as ms

CASES = {case["id"]: case for case in load("published/check_values.json")["cases"]}

NEIGHBOURS = "products of neighbouring readings: the order of readings is not kept"
TWO_VARIABLES = "products of two variables: the channels of Moments are each read on their own"
ONE_SIDE = "sums over the readings on one side of a target"
TEST = "a test of normality, computed from the skewness and kurtosis that are compared here"
HIGH = "k-statistics are given to the sixth"
LINES = "lines of a table of frequencies; Moments counts the readings they stand for"

# What Moments alone cannot give.  Covariances of a variable with itself are taken as variances.
NOT_TAKEN = {
    **{
        (f"strd-{name}", "autocorr1"): NEIGHBOURS
        for name in ("lew", "lottery", "mavro", "michelso", "pidigits")
    },
    **{(f"strd-numacc{i}", "autocorr1"): NEIGHBOURS for i in (1, 2, 3, 4)},
    ("gum-h2", "corr"): TWO_VARIABLES,
    ("cork-mardia", "cov of two"): TWO_VARIABLES,
    ("cork-mardia", "mardia_b1p"): TWO_VARIABLES,
    ("cork-mardia", "mardia_b2p"): TWO_VARIABLES,
    ("longley-corr", "corr"): TWO_VARIABLES,
    ("r-cov-wt", "cov_reliability of two"): TWO_VARIABLES,
    ("r-cov-wt", "cov_pop of two"): TWO_VARIABLES,
    ("r-cov-wt", "corr"): TWO_VARIABLES,
    ("macdonell", "corr_sheppard"): TWO_VARIABLES,
    ("mechanics-bodies", "Pxy"): TWO_VARIABLES,
    ("dagostino-cholesterol", "z_skew"): TEST,
    ("dagostino-cholesterol", "z_kurt"): TEST,
    ("dagostino-cholesterol", "K2"): TEST,
    **{
        ("closed-partial-moments", f"{side}{k}"): ONE_SIDE
        for side in ("lpm", "upm")
        for k in (1, 2, 3, 4)
    },
    ("scipy-kstat", "exact k7"): HIGH,
    ("scipy-kstat", "exact k8"): HIGH,
    **{
        (case, "exact n"): LINES
        for case in ("student-yeast", "macdonell", "yule-heights", "weldon-dice", "closed-binomial")
    },
}

# Cases with a test of their own.
ANOVA = ("strd-anova-atmwtag", "strd-anova-smls04")
BODIES = "mechanics-bodies"
ENUMERATION = "closed-kstat-unbiased"

CLASS_WIDTHS = {"height": Fraction(1), "finger": Fraction(1, 10)}
MORE = {
    "cov": lambda a, key: read(a, "var"),
    "cov_reliability": lambda a, key: read(a, "var"),
    "cov_pop": lambda a, key: read(a, "var_pop"),
    "weighted_total": lambda a, key: a.weight * a.mean(),
    "mean_over_12": lambda a, key: a.mean() / 12,
    "sd_pop_sheppard": lambda a, key: float(
        np.sqrt(a.variance() - float(CLASS_WIDTHS[key] ** 2 / 12))
    ),
}
# The highest power in a statistic; four units of the last place for each.
ORDERS = {
    "skew_pop": 3, "skew_adj": 3, "skew_nm1": 3,
    "kurt_pop": 4, "kurt_nm1": 4, "exkurt_pop": 4, "exkurt_adj": 4,
}  # fmt: skip


def units(name):
    if name[1:].isdigit():
        return 4 * int(name[1:])
    return 4 * ORDERS.get(name, 2)


def reason(case, entry):
    """Why a statistic is not taken, or None."""
    name = entry["stat"]
    if name.startswith("cov") and len(set(entry["columns"])) == 2:
        name += " of two"
    return NOT_TAKEN.get((case, name))


# -- data ------------------------------------------------------------------------------------------


class Readings(NamedTuple):
    values: np.ndarray
    weights: np.ndarray | None = None
    kind: str | None = None


@cache
def readings_of(case):
    """The readings of a case, by the name that its statistics and its exact values use."""
    if case in MADE:
        return {key: Readings(*made) for key, made in MADE[case]().items()}
    file = CASES[case]["file"]
    columns = {name: np.array(texts) for name, texts in table(file).items()}
    weights, kind = None, None
    for name in ("freq", "w", "weight"):
        if name in columns:
            weights = columns.pop(name).astype(float)
            kind = "frequency" if name == "freq" else "reliability"
    for name, word in (("sample", "sample "), ("law", ""), ("treatment", "treatment ")):
        if name in columns:
            group = columns.pop(name)
            (values,) = (texts.astype(float) for texts in columns.values())
            result = {"all y": Readings(values)} if name == "treatment" else {}
            for member in dict.fromkeys(group.tolist()):
                inside = group == member
                chosen = None if weights is None else weights[inside]
                result[f"{word}{member}"] = Readings(values[inside], chosen, kind)
            return result
    return {name: Readings(texts.astype(float), weights, kind) for name, texts in columns.items()}


def _integers():
    return {
        f"n={n}, from {offset:g}": (offset + np.arange(1.0, n + 1.0),)
        for n in (10, 1000, 1_000_000)
        for offset in (0.0, 1e9)
    }


def _waveforms():
    cycle = 2.0 * np.pi * np.arange(1000) / 1000
    quarter = np.arange(25.0)
    return {
        "sine A=1": (np.sin(7 * cycle + 0.3),),
        "sine": (4.5 * np.sin(3 * cycle - 1.1),),
        "square": (np.where(np.arange(1000) % 20 < 10, 2.5, -2.5),),
        "triangle q=25": (np.concatenate([quarter, 25.0 - quarter, -quarter, quarter - 25.0]),),
    }


def _two_points():
    return {
        f"{low}:{high}": (np.array([0.0, 1.0]), np.array([low, high]), "frequency")
        for low, high in ((1, 1), (2, 1), (999, 1), (999_999, 1))
    }


def _documentation():
    columns = table("scipy_docs8.csv")
    return {"x": (np.array(columns["x"], float),), "0..9": (np.arange(10.0),)}


MADE = {
    "closed-integers": _integers,
    "closed-waveforms": _waveforms,
    "closed-two-point": _two_points,
    "scipy-docs": _documentation,
}


def keys_of(case, entry):
    """Which readings of its case a published value belongs to."""
    for field, form in (
        ("column", "{}"), ("law", "{}"), ("data", "{}"), ("wave", "{}"), ("sample", "sample {}"),
    ):  # fmt: skip
        if field in entry:
            return [form.format(entry[field])]
    if "columns" in entry:
        return [entry["columns"][0]]
    if "freq" in entry:
        return ["{}:{}".format(*entry["freq"])]
    if "n" in entry:
        return [f"n={entry['n']}, from 0", f"n={entry['n']}, from 1e+09"]
    (key,) = readings_of(case)
    return [key]


@cache
def accumulators(case, key):
    """(how it was fed, accumulator): whole, and merged from random cuts."""
    values, weights, kind = readings_of(case)[key]
    configuration = {"order": 8, "weights": kind}
    result = [("whole", fed(values, weights, **configuration))]
    rng = np.random.default_rng(crc32(f"{case} {key}".encode()))
    for parts in (2, 5, 30, 200):
        cuts = random_cuts(rng, len(values), parts)
        result.append((f"{parts} parts", merged(values, cuts, weights, **configuration)))
    if kind == "frequency":
        part = np.floor(weights * rng.random(len(weights)))
        halves = [fed(values, w, **configuration) for w in (part, weights - part)]
        result.append(("frequencies divided", ms.combine(halves)))
        if weights.sum() < 50_000:
            repeated = rng.permutation(np.repeat(values, weights.astype(int)))
            result.append(("repeated", fed(repeated, order=8)))
    return result


@cache
def reference(case, key):
    values, weights, kind = readings_of(case)[key]
    if weights is None:
        return Reference(values)
    taken = weights > 0.0
    return Reference(values[taken], weights[taken], kind)


def size_of(case, key, entry):
    """What our error in a published value is relative to."""
    name = {"cov": "var", "cov_pop": "var_pop", "cov_reliability": "var"}.get(
        entry["stat"], entry["stat"]
    )
    if name[1:].isdigit() or name in ("skew_pop", "kurt_pop", "exkurt_pop"):
        if len(readings_of(case)[key].values) <= 5000:
            return reference(case, key).size(name)
        # Integers 1 .. n, by integrals: a third absolute moment of n**3 / 32.
        return max(abs(Fraction(entry["value"])), Fraction(entry["n"] ** 3, 32) * (name == "m3"))
    return Fraction(entry["value"])


def from_memory(case, entry):
    """Whether a published value, or all of its case, was written down from memory."""
    marked = any("from_memory" in other for other in CASES[case]["statistics"])
    return "from_memory" in (entry if marked else CASES[case])


def source_of(case, entry=None):
    memory = entry is not None and from_memory(case, entry)
    return CASES[case]["source"] + (" (from memory)" if memory else "")


def assert_published(got, entry, more, label):
    """Within the value's own tolerance, and ``more`` for our arithmetic."""
    value = Fraction(entry["value"])
    own = Fraction(entry["abs_tol"]) if value == 0 else Fraction(entry["rel_tol"]) * abs(value)
    error = abs(Fraction(got) - value)
    assert error <= own + more, (
        f"{label}: got {got!r}, published {entry['value']}, off by {float(error):.3g}, "
        f"{float(own + more):.3g} allowed"
    )


# -- published values ------------------------------------------------------------------------------

PUBLISHED = [
    (case, number, entry)
    for case in CASES
    for number, entry in enumerate(CASES[case]["statistics"])
    if case not in (*ANOVA, BODIES, ENUMERATION) and reason(case, entry) is None
]


@pytest.mark.parametrize(
    ("case", "entry"),
    [
        pytest.param(c, e, id=f"{c}-{i}-{e['stat']}{'-from-memory' * from_memory(c, e)}")
        for c, i, e in PUBLISHED
    ],
)
def test_published_value(case, entry):
    name = entry["stat"]
    for key in keys_of(case, entry):
        more = units(name) * unit_of_last_place(size_of(case, key, entry))
        for how, accumulator in accumulators(case, key):
            got = MORE[name](accumulator, key) if name in MORE else read(accumulator, name)
            assert_published(got, entry, more, f"{source_of(case, entry)}: {name} of {key}, {how}")


EXACT = [
    (case, key, name)
    for case in CASES
    for key, block in CASES[case].get("exact", {}).items()
    for name in block
    if (case, f"exact {name}") not in NOT_TAKEN
]


@pytest.mark.parametrize(
    ("case", "key"),
    [pytest.param(c, k, id=f"{c}-{k}") for c, k in dict.fromkeys((c, k) for c, k, _ in EXACT)],
)
def test_exact_value_of_the_doubles(case, key):
    exact = reference(case, key)
    for name in [n for c, k, n in EXACT if (c, k) == (case, key)]:
        value = CASES[case]["exact"][key][name]
        # The reference is what units are taken from: it must know the data as the file does.
        assert_close(
            float(exact.value(name)), value, ulps=1, relative_to=exact.size(name), label=f"{name}"
        )
        for how, accumulator in accumulators(case, key):
            label = f"{source_of(case)}: {name} of {key}, {how}"
            got = read(accumulator, name)
            if name == "mean":
                assert_mean(got, exact, label)
            elif name in ("n", "sum_w"):
                assert got == Fraction(value), label
            else:
                size = exact.size(name)
                assert_close(got, value, ulps=units(name), relative_to=size, label=label)


@pytest.mark.parametrize(
    ("case", "key"),
    [
        pytest.param(case, key, id=f"{case}-{key}")
        for case in ("r-cov-wt", "closed-gauss-laws", "closed-waveforms", "closed-two-point")
        for key in readings_of(case)
    ],
)
def test_closed_forms_and_weights_against_exact_arithmetic(case, key):
    exact = reference(case, key)
    names = ["var_pop", "sd_pop", *(f"m{k}" for k in range(3, 9)), "skew_pop", "exkurt_pop"]
    names += ["var", "sd", "skew_adj", "exkurt_adj", "k3", "k4"]
    for how, accumulator in accumulators(case, key):
        assert_mean(accumulator.mean(), exact, f"{source_of(case)}: mean of {key}, {how}")
        for name in names:
            value = exact.value(name)
            size = None if value == "undefined" else exact.size(name)
            label = f"{source_of(case)}: {name} of {key}, {how}"
            got = read(accumulator, name)
            assert_close(got, value, ulps=units(name), relative_to=size, label=label)


# -- cases with a test of their own ----------------------------------------------------------------


@pytest.mark.parametrize("case", ANOVA)
def test_sums_of_squares_within_and_between_groups(case):
    treatments = [key for key in readings_of(case) if key != "all y"]
    groups = len(treatments)
    exact = reference(case, "all y")
    total = exact.central(2) * exact.weight
    # Published and exact sums differ by what reading seven constant digits as doubles does; our
    # own error is relative to the total.
    more = 8 * unit_of_last_place(total)
    for choice in range(len(accumulators(case, "all y"))):
        parts = [accumulators(case, key)[choice][1] for key in treatments]
        whole = ms.combine(parts)
        within = sum(part.central(2) * part.weight for part in parts)
        between = whole.central(2) * whole.weight - within
        degrees = whole.count - groups
        got = {
            "within_ss": within,
            "between_ss": between,
            "resid_sd": (within / degrees) ** 0.5,
            "r2": between / (between + within),
            "f": between / (groups - 1) / (within / degrees),
        }
        sizes = {
            "within_ss": 1,
            "between_ss": 1,
            "resid_sd": 1 / (2 * square_root(Fraction(within) * degrees)),
            "r2": 1 / total,
            "f": (1 / Fraction(within) + Fraction(between) / Fraction(within) ** 2)
            * Fraction(degrees, groups - 1),
        }
        for entry in CASES[case]["statistics"]:
            name = entry["stat"]
            how = accumulators(case, "all y")[choice][0]
            label = f"{source_of(case, entry)}: {name}, groups of {how}"
            assert_published(got[name], entry, more * sizes[name], label)


def body(name):
    columns = table("equimomental_bodies.csv")
    rows = [i for i, entry in enumerate(columns["body"]) if entry == name]
    points = np.array([[float(columns[axis][i]) for axis in "xyz"] for i in rows])
    return points, np.array([float(columns["mass"][i]) for i in rows])


MECHANICS = [e for e in CASES[BODIES]["statistics"] if reason(BODIES, e) is None]


@pytest.mark.parametrize("name", ["rod", "box", "triangle", "sphere"])
def test_masses_centres_and_moments_of_inertia_of_bodies(name):
    points, masses = body(name)
    configuration = {"order": 2, "shape": (3,), "weights": "reliability"}
    rng = np.random.default_rng(crc32(name.encode()))
    ways = [("whole", fed(points, masses, **configuration))]
    for parts in (2, 3, 9):
        cuts = random_cuts(rng, len(points), parts)
        ways.append((f"{parts} parts", merged(points, cuts, masses, **configuration)))
    for entry in [e for e in MECHANICS if e["body"] == name]:
        wanted = Fraction(entry["value"])
        for how, accumulator in ways:
            got = of_a_body(accumulator, entry["stat"], entry["about"])
            # The second moments of small integers: zero is reached exactly, the rest to 8 units.
            more = 8 * unit_of_last_place(wanted) if wanted else 0
            what = f"{entry['stat']} of the {name} about {entry['about']}, {how}"
            assert_published(got, entry, more, f"{source_of(BODIES, entry)}: {what}")


def of_a_body(accumulator, name, about):
    if name == "mass":
        return float(accumulator.weight[0])
    axis = "xyz".index(name[-1])
    if name.startswith("com_"):
        return float(accumulator.mean()[axis])
    if about == "centre of mass":
        squares = accumulator.variance()
    else:
        squares = [accumulator.channel(i).raw(2, about=float(about[i])) for i in range(3)]
    return float(accumulator.weight[0] * sum(squares[i] for i in range(3) if i != axis))


def test_k_statistics_are_unbiased():
    samples = np.array([[number >> bit & 1 for bit in range(6)] for number in range(64)], float)
    chances = [Fraction(2 ** (6 - int(s)), 729) for s in samples.sum(axis=1)]
    rows = samples.T
    channels = [
        fed(rows, order=6, shape=64),
        merged(rows, [slice(0, 1), slice(1, None)], order=6, shape=64),
    ]
    single = [fed(sample, order=6) for sample in samples]
    for entry in CASES[ENUMERATION]["statistics"]:
        k = int(entry["stat"].removeprefix("mean_of_k"))
        sizes = [Reference(sample, order=6).size(f"k{k}") for sample in samples]
        ways = [[float(v) for v in accumulator.k_statistic(k)] for accumulator in channels]
        ways.append([accumulator.k_statistic(k) for accumulator in single])
        for values in ways:
            more = sum(chance * size for chance, size in zip(chances, sizes, strict=True))
            got = sum(chance * Fraction(v) for chance, v in zip(chances, values, strict=True))
            label = f"{source_of(ENUMERATION, entry)}: {entry['stat']}"
            assert_published(got, entry, units(f"k{k}") * unit_of_last_place(more), label)


# -- nothing is left out ---------------------------------------------------------------------------


def test_every_value_of_the_file_is_compared_or_has_a_reason():
    compared = Counter(case for case, _, _ in PUBLISHED)
    compared.update({BODIES: len(MECHANICS), ENUMERATION: 6, **dict.fromkeys(ANOVA, 5)})
    used = set()
    for case, content in CASES.items():
        missing = 0
        for entry in content["statistics"]:
            name = entry["stat"]
            if reason(case, entry) is not None:
                missing += 1
                two = name.startswith("cov") and len(set(entry["columns"])) == 2
                used.add((case, f"{name} of two" if two else name))
        assert compared[case] + missing == len(content["statistics"]), case
        for key, block in content.get("exact", {}).items():
            left = {name for name in block if (case, key, name) not in EXACT}
            used.update((case, f"exact {name}") for name in left)
    assert used == set(NOT_TAKEN), "a reason is given for what the file does not have"
    assert all(NOT_TAKEN.values())
    assert {case for case, count in compared.items() if count} == set(CASES) - {
        "longley-corr",
        "closed-partial-moments",
    }


@pytest.mark.parametrize(
    ("got", "exact"),
    [(0.1, "0.1000000000000001"), (1e-20, 0), (float("nan"), 1), (1.0, "undefined"), (np.inf, 3)],
)
def test_the_comparison_itself_can_fail(got, exact):
    with pytest.raises(AssertionError, match="units of the last place"):
        assert_close(got, exact, ulps=4, label="a wrong value")
