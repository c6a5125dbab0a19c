"""Random lives of an accumulator, beside a kept list of its readings and exact fractions."""

import copy
import math
import os
import pickle
import tempfile
from fractions import Fraction

import numpy as np
import pytest
from assertions import assert_close
from exact import Exact, U, assert_same_state
from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import (
    RuleBasedStateMachine,
    initialize,
    invariant,
    precondition,
    rule,
)

import momentstream as ms

FLOATS = st.one_of(
    st.floats(-1e3, 1e3),
    st.floats(-1e-9, 1e-9).map(lambda x: 1e6 + x),
    st.sampled_from([0.0, -0.0, 5e-324, 0.1, 1e8, -1e8, 1e30, 1.0000000000000002]),
)
NUMBERS = st.one_of(
    FLOATS, st.integers(-1000, 1000), st.sampled_from([2**53 + 1, 2**62 + 3, 2**64 - 1, True])
)


class Life(RuleBasedStateMachine):
    """One accumulator lives; ``steady`` is given the same, but is never saved, copied or cut."""

    @initialize(
        weights=st.sampled_from([None, None, "frequency", "reliability"]),
        nonfinite=st.sampled_from(["raise", "omit", "omit"]),
    )
    def begin(self, weights, nonfinite):
        self.configuration = {"weights": weights, "nonfinite": nonfinite}
        self.lives = ms.Moments(**self.configuration)
        self.steady = ms.Moments(**self.configuration)
        self.values, self.weights = [], []
        self.inside = []  # parts that were merged in: (accumulator, values, weights)
        self.gone, self.gone_weights = [], []  # readings that were removed
        self.removals = self.omitted = 0
        self.unknown = False  # the extremes, after a removal

    # -- feeding ---------------------------------------------------------------------------

    def weigh(self, data, n):
        kind = self.configuration["weights"]
        if kind is None:
            return None
        weight = st.integers(0, 5) if kind == "frequency" else st.floats(0.125, 8.0)
        return data.draw(st.lists(weight, min_size=n, max_size=n), label="weights")

    def keep(self, values, w):
        w = [1] * len(values) if w is None else w
        for value, weight in zip(values, w, strict=True):
            if weight == 0:
                continue
            if isinstance(value, float) and math.isnan(value):
                whole = self.configuration["weights"] == "frequency"
                self.omitted += weight if whole else 1
            else:
                self.values.append(value)
                self.weights.append(weight)

    @rule(values=st.lists(NUMBERS, max_size=20), data=st.data())
    def feed_a_list(self, values, data):
        w = self.weigh(data, len(values))
        self.lives.update(values, w)
        self.steady.update(iter(values), None if w is None else iter(w))
        self.keep(values, w)

    @rule(values=st.lists(FLOATS, max_size=20), data=st.data())
    def feed_an_array(self, values, data):
        w = self.weigh(data, len(values))
        x = np.array(values, float)
        self.lives.update(x[::-1].copy()[::-1], w)
        self.steady.update(values, w)
        self.keep(values, w)

    @rule(values=st.lists(NUMBERS, max_size=20), data=st.data())
    def feed_one_by_one(self, values, data):
        w = self.weigh(data, len(values))
        for i, value in enumerate(values):
            self.lives.update(value, None if w is None else w[i])
        self.steady.update(values, w)
        self.keep(values, w)

    @rule(values=st.lists(st.integers(-99, 99), max_size=20), data=st.data())
    def feed_small_integers(self, values, data):
        w = self.weigh(data, len(values))
        self.lives.update(np.array(values, np.int16), w)
        self.steady.update(np.array(values, np.float32), w)
        self.keep(values, w)

    @rule(seed=st.integers(0, 3), n=st.sampled_from([1500, 4200]), data=st.data())
    def feed_much(self, seed, n, data):
        # Three times, and a block is full; no more than exact sums can follow quickly.
        if len(self.values) > 9000:
            return
        x = np.random.default_rng(seed).normal(size=n) + 100.0 * seed
        w = None if self.configuration["weights"] is None else [1] * n
        cut = data.draw(st.integers(0, n), label="cut")
        self.lives.update(x[:cut], None if w is None else w[:cut])
        self.lives.update(x[cut:], None if w is None else w[cut:])
        self.steady.update(x, w, threads=2)
        self.keep(x.tolist(), w)

    @rule(values=st.lists(FLOATS, max_size=5), data=st.data())
    def feed_a_gap(self, values, data):
        values = [*values, math.nan]
        w = self.weigh(data, len(values))
        if w is not None:
            w[-1] = 1
        if self.configuration["nonfinite"] == "omit":
            self.lives.update(values, w)
            self.steady.update(values, w)
            self.keep(values, w)
            return
        before = self.lives.to_bytes(resume=True)
        for form in (values, iter(values), np.array(values)):
            with pytest.raises(ms.NonFiniteError) as caught:
                self.lives.update(form, w)
            assert caught.value.position == len(values) - 1
            assert self.lives.to_bytes(resume=True) == before

    # -- combining -------------------------------------------------------------------------

    @rule(values=st.lists(NUMBERS, max_size=20), data=st.data())
    def merge(self, values, data):
        w = self.weigh(data, len(values))
        part = ms.Moments(**self.configuration).update(values, w)
        before = part.to_bytes(resume=True)
        self.lives.merge(part)
        self.steady.merge(part)
        assert part.to_bytes(resume=True) == before
        counted = part.omitted, len(self.values)
        self.keep(values, w)
        assert counted[0] == 0
        start = counted[1]
        self.inside.append((part, self.values[start:], self.weights[start:]))

    @rule()
    def add(self):
        self.lives = self.lives + ms.Moments(**self.configuration)
        assert_same_state(self.lives, self.steady, "an empty part")

    @precondition(lambda self: self.inside)
    @rule(data=st.data())
    def remove(self, data):
        part, values, weights = self.inside.pop(
            data.draw(st.integers(0, len(self.inside) - 1), label="part")
        )
        self.lives.remove(part)
        self.steady.remove(part)
        kept = list(zip(self.values, self.weights, strict=True))
        for pair in zip(values, weights, strict=True):
            kept.remove(pair)
        self.values = [value for value, _ in kept]
        self.weights = [weight for _, weight in kept]
        if values:
            self.gone += values
            self.gone_weights += weights
            self.removals += 1
            self.unknown = True
        if not self.values:
            self.start_over()

    def start_over(self):
        self.gone, self.gone_weights, self.removals, self.unknown = [], [], 0, False

    @rule()
    def clear(self):
        assert self.lives.clear() is self.lives
        self.steady.clear()
        self.values, self.weights, self.inside, self.omitted = [], [], [], 0
        self.start_over()
        assert self.lives == ms.Moments(**self.configuration)

    # -- living on -------------------------------------------------------------------------

    @rule(how=st.sampled_from([copy.copy, copy.deepcopy, ms.Moments.copy]))
    def live_on_as_a_copy(self, how):
        original, self.lives = self.lives, how(self.lives)
        # What becomes of the original must not matter.
        original.update(1.0, None if self.configuration["weights"] is None else 1)

    @rule()
    def resume(self):
        data = self.lives.to_bytes(resume=True)
        self.lives = ms.from_bytes(data)
        assert self.lives.to_bytes(resume=True) == data

    @rule()
    def save_and_load(self):
        with tempfile.TemporaryDirectory() as folder:
            path = os.path.join(folder, "life.state")
            ms.save(self.lives, path)
            self.lives = ms.load(path)
            assert os.listdir(folder) == ["life.state"]

    @rule(how=st.sampled_from(["pickle", "bytes"]))
    def live_on_settled(self, how):
        # Settled states are equal, and continue to promise 5 but not to the bit.
        if how == "pickle":
            other = pickle.loads(pickle.dumps(self.lives))
        else:
            other = ms.Moments.from_bytes(self.lives.to_bytes())
        assert other == self.lives
        assert other.to_bytes() == self.lives.to_bytes()
        self.lives, self.steady = other, other.copy()

    # -- what must hold --------------------------------------------------------------------

    @invariant()
    def bits_are_those_of_the_steady_one(self):
        if hasattr(self, "lives"):
            assert_same_state(self.lives, self.steady, "a life")

    @invariant()
    def counts_and_extremes_are_exact(self):
        if not hasattr(self, "lives"):
            return
        whole = self.configuration["weights"] == "frequency"
        assert self.lives.count == (sum(self.weights) if whole else len(self.values))
        assert self.lives.omitted == self.omitted
        if self.unknown or not self.values:
            assert math.isnan(self.lives.minimum())
            assert math.isnan(self.lives.maximum())
        else:
            assert self.lives.minimum() == float(min(self.values))
            assert self.lives.maximum() == float(max(self.values))

    @rule()
    def moments_are_right(self):
        self.check()

    def teardown(self):
        if hasattr(self, "lives"):
            self.check()

    def check(self):
        if not self.values:
            assert math.isnan(self.lives.mean())
            assert math.isnan(self.lives.variance())
            return
        exact = Exact(self.values, self.weights)
        sizes = [exact.absolute(k) for k in range(5)]
        if self.gone:
            # A removal errs relative to the sums of the total, about the mean that stays.
            away = np.array([abs(float(Fraction(v) - exact.mean)) for v in self.gone])
            sizes = [s + np.sum(np.array(self.gone_weights) * away**k) for k, s in enumerate(sizes)]
        units = 64 * (1 + self.removals) * U
        weight = Fraction(self.lives.weight)
        assert_close(self.lives.weight, exact.weight, ulps=64 + self.removals, label="weight")
        mean = Fraction(self.lives.mean())
        allowed = Fraction(math.ulp(self.lives.mean()))
        allowed += (units if self.gone else 4 * U) * Fraction(sizes[1]) / exact.weight
        assert abs(mean - exact.mean) <= allowed, "mean"
        for k in (2, 3, 4):
            error = abs(Fraction(self.lives.central(k)) * weight - exact.sums[k])
            assert error <= units * Fraction(sizes[k]), (
                f"power sum {k}: {float(error / (U * Fraction(sizes[k] or 1.0)))} u"
            )
        assert self.lives.variance() >= 0.0


TestLife = Life.TestCase
TestLife.settings = settings(max_examples=60, stateful_step_count=30, deadline=None)
