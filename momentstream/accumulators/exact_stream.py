"""The working state behind ``ExactMoments``: integer power sums by exponent.

Signs and exponents have slots of their own in ``table`` (``kernels.exact``); what is compared and
sent is the ``content``: for each exponent e the signed sums of powers of the integers M, where
readings are M * 2**e.
"""

import numpy as np

from ..algebra.integers import deviations
from .lazy import exact as _exact
from .stream import Refusal

_PART = 1 << 16  # readings looked at at a time
_FEWEST_SLOTS = 8
_SUBNORMAL = -1074
_SIGN, _EXPONENTS = 2048, 2047
MOST_COUNTED = 2**63 - 1


class Settled:
    """What statistics read: integers, and whatever was made of them since."""

    __slots__ = ("content", "exponent", "sums", "view")

    def __init__(self, content, order):
        self.content = content
        self.view = None
        self.exponent = min(content, default=0)
        self.sums = [
            sum(sums[k - 1] << k * (e - self.exponent) for e, sums in content.items())
            for k in range(1, order + 1)
        ]


class ExactStream:
    """Counts, integer sums and extremes of everything that was fed."""

    __slots__ = (
        "count",
        "extremes",
        "minus",
        "nans",
        "omitted",
        "order",
        "places",
        "plus",
        "policy",
        "table",
        "used",
    )  # fmt: skip

    def __init__(self, order, policy):
        self.order = order
        self.policy = policy
        # All readings taken in, and those of them that are not finite.
        self.count = self.nans = self.plus = self.minus = 0
        self.omitted = 0
        self.extremes = np.array([np.inf, -np.inf])  # of finite readings; nan: unknown
        self.places = self.table = None
        self.used = np.zeros(1, np.int64)

    def copy(self):
        other = object.__new__(type(self))
        for name in self.__slots__:
            value = getattr(self, name)
            setattr(other, name, value.copy() if isinstance(value, np.ndarray) else value)
        return other

    @property
    def finite(self):
        """How many finite readings there are."""
        return self.count - self.nans - self.plus - self.minus

    # -- feeding -----------------------------------------------------------------------------

    def feed(self, x, low, w, threads=1):
        """Take one stretch in, all of it or nothing.

        Raises
        ------
        Refusal
            A reading is refused; its place counts from the start of the stretch.
        """
        if self.count + len(x) >= MOST_COUNTED:
            raise ValueError("the count would reach 2**63 - 1; nothing was taken in")
        if threads > 1 and len(x) >= threads * _PART:
            parts = self._fed_by_threads(x, low, threads)
        else:
            parts = [self.copy()]
            parts[0]._feed(x, low)
        whole, *others = parts
        for part in others:
            whole.take_in(part)
        for name in self.__slots__:
            setattr(self, name, getattr(whole, name))

    def _fed_by_threads(self, x, low, threads):
        from concurrent.futures import ThreadPoolExecutor

        edges = [len(x) * i // threads for i in range(threads + 1)]

        def reduce(i):
            part = self.copy() if i == 0 else ExactStream(self.order, self.policy)
            cut = slice(edges[i], edges[i + 1])
            try:
                part._feed(x[cut], None if low is None else low[cut])
            except Refusal as refusal:
                refusal.row += edges[i]
                return refusal
            return part

        with ThreadPoolExecutor(max_workers=threads) as pool:
            results = list(pool.map(reduce, range(threads)))
        for result in results:
            if isinstance(result, Refusal):
                raise result
        return results

    def _feed(self, x, low):
        """Take readings in; a refusal leaves the state undefined."""
        self.reserve(0)
        self._add_all(x, low)
        self.extremes += 0.0  # zeros have no sign

    def _add_all(self, x, low):
        for start in range(0, len(x), _PART):
            part = np.ascontiguousarray(x[start : start + _PART], dtype=np.float64)
            rest = None if low is None else low[start : start + _PART]
            if rest is not None and not rest.any():
                rest = None
            place = 0
            while place < len(part):
                place = self._add(part, rest, place)
                if place == len(part):
                    break
                if np.isfinite(part[place]):
                    self.reserve(1)
                    continue
                if self.policy == "raise":
                    raise Refusal(start + place, None, float(part[place]))
                finite = np.isfinite(part[place:])
                self._set_apart(part[place:][~finite])
                part = part[place:][finite]
                rest = None if rest is None else rest[place:][finite]
                place = 0

    def _add(self, part, rest, place):
        state = self.order, self.places, self.table, self.used, self.extremes
        if rest is None:
            after = int(_exact.add_readings(part, place, *state))
        else:
            after = int(_exact.add_wide(part, rest, place, *state))
        self.count += after - place
        return after

    def _set_apart(self, values):
        """Count readings that are not finite."""
        if self.policy == "omit":
            self.omitted += len(values)
            return
        self.count += len(values)
        self.nans += int(np.isnan(values).sum())
        self.plus += int((values == np.inf).sum())
        self.minus += int((values == -np.inf).sum())

    def reserve(self, slots):
        """Make room for so many slots more."""
        if self.table is None:
            self.places = np.full(_exact.PLACES, -1, np.int16)
            self.table = np.zeros((max(_FEWEST_SLOTS, slots), _exact.WORDS), np.uint64)
        used, have = int(self.used[0]), len(self.table)
        if used + slots > have:
            table = np.zeros((max(2 * have, used + slots), _exact.WORDS), np.uint64)
            table[:used] = self.table[:used]
            self.table = table

    # -- combining ---------------------------------------------------------------------------

    def take_in(self, other):
        """Take another stream's readings in; it may be this very one."""
        slots = int(other.used[0])
        if slots:
            more = other.table[:slots].copy() if other is self else other.table
            self.reserve(slots)
            _exact.add_table(self.order, self.places, self.table, self.used, more, slots)
        for name in ("count", "nans", "plus", "minus", "omitted"):
            setattr(self, name, getattr(self, name) + getattr(other, name))
        # An unknown extreme stays unknown.
        self.extremes[0] = np.minimum(self.extremes[0], other.extremes[0])
        self.extremes[1] = np.maximum(self.extremes[1], other.extremes[1])

    # -- content -----------------------------------------------------------------------------

    def content(self):
        """For each exponent in use the sums of order 1 .. p, from the lowest exponent up."""
        found: dict[int, list[int]] = {}
        for slot in range(int(self.used[0])):
            words = self.table[slot]
            place = int(words[_exact.KEY])
            exponent = max(place & _EXPONENTS, 1) - 1 + _SUBNORMAL
            sums = found.setdefault(exponent, [0] * self.order)
            for k in range(1, self.order + 1):
                first = _exact.FIRST_WORD[k]
                data = words[first : first + _exact.WIDTHS[k]].tobytes()
                value = int.from_bytes(data, "little", signed=True)
                sums[k - 1] += -value if place & _SIGN and k % 2 else value
        for e, sums in found.items():
            # What slots hold is right in the bits of their width, and so are the sums.
            found[e] = [_signed(value, k) for k, value in enumerate(sums, start=1)]
        return {e: found[e] for e in sorted(found) if any(found[e])}

    def replace(self, content):
        """Hold this content instead; the extremes stay."""
        self.places = self.table = None
        self.used = np.zeros(1, np.int64)
        self.reserve(len(content))
        for slot, (exponent, sums) in enumerate(content.items()):
            place = exponent - _SUBNORMAL + 1
            self.places[place] = slot
            self.table[slot, _exact.KEY] = place
            for k, value in enumerate(sums, start=1):
                first, width = _exact.FIRST_WORD[k], _exact.WIDTHS[k]
                data = value.to_bytes(8 * width, "little", signed=True)
                self.table[slot, first : first + width] = np.frombuffer(data, "<u8")
        self.used[0] = len(content)


def _signed(value, k):
    """A sum of k-th powers, from what it is modulo the length of its slot."""
    bits = 64 * (k + 1)
    value &= (1 << bits) - 1
    return value - (1 << bits) if value >> (bits - 1) else value


def impossible(count, content):
    """Why no ``count`` finite readings have this content, in words; None where some may.

    Not every content that no readings have is recognised; but statistics of what passes are those
    of some law.
    """
    fewest = 0
    for exponent, sums in content.items():
        fault = _impossible_sums(count, sums)
        if fault is not None:
            return f"{fault} at exponent {exponent}"
        largest = 2**64 - 1 if exponent == 0 else 2**53 - 1
        fewest += -(-abs(sums[0]) // largest) if len(sums) < 2 else -(-sums[1] // largest**2)
    if fewest > count:
        return f"sums that more than {count} readings make up"
    if count and content:
        order = len(next(iter(content.values())))
        _, *d = deviations(count, Settled(content, order).sums)
        second, third, fourth = (*d, 0, 0, 0)[:3]
        if second < 0 or (second == 0 and (third or fourth)):
            return "a negative variance"
        if order == 4 and second * fourth < third**2 + second**3:
            return "a kurtosis below that of any law"
    return None


def _impossible_sums(count, sums):
    """The same for the sums of powers of integers."""
    if len(sums) < 2:
        return None
    first, second, third, fourth = (*sums, 0, 0)[:4]
    if second <= 0:
        return "no sum of squares"
    if (first - second) % 2:
        return "sums of first and second powers of unequal parity"
    if first**2 > count * second:
        return "a sum too large for its squares"
    if len(sums) > 2 and (third - first) % 6:
        return "sums of first and third powers that do not fit"
    if len(sums) > 3:
        if third**2 > second * fourth or not second**2 <= count * fourth:
            return "a sum of fourth powers too small"
        if fourth > second**2 or (fourth - second) % 12:
            return "sums of second and fourth powers that do not fit"
    return None
