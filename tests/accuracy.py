"""How far an LLR may lie from the truth: the table, the measure, and the truth itself.

`BOUNDS` is the one table that the tests hold the library to and the README prints.  The measure is

    E = |llr - true| / (u (1 + |true| + max(|y|, rms) |d true / dy|)),   u = 2^-24 or 2^-53,

in words: the LLR is that of a sample moved by a few roundings of its own scale, plus a few roundings of
the result.  `true` belongs to the ideal points (a = 1/sqrt(E) is no double) and to the very y and N0 that
the library was given; |d true / dy| is the length of its gradient in the plane.  Where max-log LLRs have a
kink there are two such slopes, and the steeper one counts: it is looked for within one rounding of y.

`true` comes in two independent forms.  `truth_by_definition` is the definition in 50-digit arithmetic, term
by term.  It is far too slow for a dense sweep, so `Truth` computes the same in double-double arithmetic
(a value is an unevaluated sum of two doubles, about 2^-104) and sums a grid axis by axis; its own error
stays below `TRUTH_ERROR` units E of float64, which a test holds against the 50 digits.

    python tests/accuracy.py [--samples N]      prints the table with the worst E found, as Markdown
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable
from dataclasses import dataclass, field

import mpmath
import numpy as np

import pydemap

UNITS = {"float32": 2.0**-24, "float64": 2.0**-53}
TRUTH_ERROR = 1e-4

BOUNDS = {
    ("fold", "exact", "float32"): 4.0,
    ("fold", "exact", "float64"): 4.0,
    ("fold", "max-log", "float32"): 4.0,
    ("fold", "max-log", "float64"): 4.0,
    ("fold", "linear", "float32"): 4.0,
    ("fold", "linear", "float64"): 4.0,
    ("boxes", "exact", "float32"): 4.0,
    ("boxes", "exact", "float64"): 4.0,
    ("boxes", "max-log", "float32"): 4.0,
    ("boxes", "max-log", "float64"): 4.0,
    ("points", "exact", "float32"): 4.0,
    ("points", "exact", "float64"): 4.0,
    ("points", "max-log", "float32"): 4.0,
    ("points", "max-log", "float64"): 4.0,
}


def error_units(llr, true, gradient, y, rms, output):
    """E of every LLR against the truth (hi, lo): total over NaN, infinities and both zeros.

    A NaN is infinitely wrong.  Where the truth exceeds the type's range, its largest finite value of the
    same sign is right and all else is infinitely wrong.
    """
    hi, lo = true
    largest = float(np.finfo(output).max)
    llr = np.asarray(llr, np.float64)
    with np.errstate(over="ignore", invalid="ignore"):
        scale = np.maximum(np.abs(np.asarray(y, np.complex128)), rms)[..., None]
        error = np.abs((llr - hi) - lo) / (UNITS[output] * (1 + np.abs(hi) + scale * gradient))
    beyond = np.abs(hi) > largest
    error = np.where(beyond, np.where(llr == np.copysign(largest, hi), 0.0, np.inf), error)
    return np.where(np.isfinite(llr), error, np.inf)


# Double-double arithmetic on pairs (hi, lo) of arrays.


def _two_sum(a, b):
    s = a + b
    t = s - a
    return s, (a - (s - t)) + (b - t)


def _normal(hi, lo):
    s = hi + lo
    return s, lo - (s - hi)


def _two_product(a, b):
    def split(x):
        c = 134217729.0 * x  # 2^27 + 1
        high = c - (c - x)
        return high, x - high

    p = a * b
    (ah, al), (bh, bl) = split(a), split(b)
    return p, ((ah * bh - p) + ah * bl + al * bh) + al * bl


def _add(a, b):
    s, e = _two_sum(a[0], b[0])
    return _normal(s, e + (a[1] + b[1]))


def _negative(a):
    return -a[0], -a[1]


def _multiply(a, b):
    p, e = _two_product(a[0], b[0])
    return _normal(p, e + (a[0] * b[1] + a[1] * b[0]))


def _reciprocal(x):
    q = 1.0 / x
    p, e = _two_product(q, x)
    return _normal(q, q * ((1.0 - p) - e))


def _from_mpf(values):
    hi = np.array([float(v) for v in values])
    return hi, np.array([float(v - mpmath.mpf(h)) for v, h in zip(values, hi, strict=True)])


def _take(a, index):
    return a[0][index], a[1][index]


def _stack(pairs):
    return tuple(np.stack(part) for part in zip(*pairs, strict=True))


def _where(condition, a, b):
    return np.where(condition, a[0], b[0]), np.where(condition, a[1], b[1])


def _less(a, b):
    return (a[0] < b[0]) | ((a[0] == b[0]) & (a[1] < b[1]))


with mpmath.workdps(50):
    _LN2 = _from_mpf([mpmath.log(2)])
    _EXP_TABLE = _from_mpf([mpmath.exp(mpmath.mpf(j) / 64) for j in range(-23, 24)])


def _exp(a):
    """exp(a) = f 2^k as (f, k), f a pair near 1, k a whole double: relative error 2^-70 + 2^-103 |a|."""
    k = np.rint(a[0] / _LN2[0])
    r = _add(a, _multiply((-k, 0.0), _LN2))
    j = np.clip(np.rint(64 * r[0]), -23, 23)
    r = _add(r, (-j / 64, 0.0))
    # |r| <= 1/128: from the cubic term on, plain doubles are below 2^-72.
    tail = r[0] ** 3 * (1 / 6 + r[0] * (1 / 24 + r[0] * (1 / 120 + r[0] * (1 / 720 + r[0] * (1 / 5040)))))
    square = _multiply(r, r)
    series = _add((0.5 * square[0], 0.5 * square[1]), (tail, 0.0))
    series = _add((np.ones_like(tail), 0.0), _add(r, series))
    return _multiply(series, _take(_EXP_TABLE, j.astype(int) + 23)), k


def _log(a):
    """log(a) of a pair that is not far from 1, absolute error below 2^-69: a Newton step from the double."""
    start = np.log(a[0])
    f, k = _exp((-start, 0.0))
    product = _multiply(a, (np.ldexp(f[0], k.astype(int)), np.ldexp(f[1], k.astype(int))))
    return _add((start, 0.0), _add(product, (-1.0, 0.0)))


def ideal_coordinates(constellation):
    """The real and imaginary parts meant by a constellation, as lists of mpf.

    The library's own grids are odd multiples of a = 1/sqrt(E), E their mean energy in units of a^2: their
    doubles are only the nearest to that.  The points of any other set are the doubles themselves.
    """
    points = np.asarray(constellation.points, np.complex128)
    parts = np.stack([points.real, points.imag])
    multiples = np.rint(parts / np.abs(parts[parts != 0]).min())
    energy = int((multiples**2).sum()) / points.size
    with mpmath.workdps(50):
        if np.allclose(parts * np.sqrt(energy), multiples, rtol=1e-14, atol=0):
            root = mpmath.sqrt(energy)
            return [[mpmath.mpf(float(v)) / root for v in row] for row in multiples]
        return [[mpmath.mpf(float(v)) for v in row] for row in parts]


def truth_by_definition(constellation, rule, y, n0):
    """The n exact or max-log LLRs of one sample in 50-digit arithmetic, straight from the definition."""
    with mpmath.workdps(50):
        re, im = ideal_coordinates(constellation)
        y = complex(y)
        metrics = [
            -((mpmath.mpf(y.real) - a) ** 2 + (mpmath.mpf(y.imag) - b) ** 2) / mpmath.mpf(float(n0))
            for a, b in zip(re, im, strict=True)
        ]
        result = []
        for bit in np.asarray(constellation.bits).T:
            sides = []
            for value in (0, 1):
                side = [m for m, b in zip(metrics, bit, strict=True) if b == value]
                top = max(side)
                total = mpmath.fsum(mpmath.exp(m - top) for m in side) if rule == "exact" else 1
                sides.append(top + mpmath.log(total))
            result.append(sides[0] - sides[1])
        return result


@dataclass
class _Axis:
    """Levels along one axis of a product: a metric each, and the complex place for the gradient."""

    parts: list  # (which part of y, coordinate as a pair) of the coordinates that are not all zero
    square: tuple  # |x|^2 as a pair
    place: np.ndarray

    @classmethod
    def of(cls, re, im):
        with mpmath.workdps(50):
            square = _from_mpf([a * a + b * b for a, b in zip(re, im, strict=True)])
        parts = [(i, _from_mpf(v)) for i, v in enumerate((re, im)) if any(v)]
        place = np.array([complex(a, b) for a, b in zip(re, im, strict=True)])
        return cls(parts, square, place)

    def metrics(self, y, over_n0):
        """-|y - x|^2 / N0 less a part common to all x: pairs of shape (levels, samples)."""
        total = _negative((self.square[0][:, None], self.square[1][:, None]))
        for which, (hi, lo) in self.parts:
            part = (2 * (y.real, y.imag)[which], 0.0)
            total = _add(total, _multiply((hi[:, None], lo[:, None]), part))
        return _multiply(total, over_n0)


@dataclass
class Truth:
    """LLRs of the ideal constellation in double-double arithmetic, with their gradients.

    The points are laid out as columns x rows where they fill a grid reasonably well, as many columns and
    one row otherwise.  For each bit and value, columns that hold the value in the same rows are taken
    together: the sum over those points is the sum over these columns times the sum over these rows.
    """

    constellation: object
    axes: list = field(init=False)
    terms: list = field(init=False)  # terms[bit][value] = [(columns, rows), ...] as tuples of indices

    def __post_init__(self):
        re, im = ideal_coordinates(self.constellation)
        bits = np.asarray(self.constellation.bits)
        columns, rows = sorted(set(re)), sorted(set(im))
        order = len(re)
        zero = mpmath.mpf(0)
        if len(columns) * len(rows) <= 2 * order:
            self.axes = [_Axis.of(columns, [zero] * len(columns)), _Axis.of([zero] * len(rows), rows)]
            column, row = {v: i for i, v in enumerate(columns)}, {v: i for i, v in enumerate(rows)}
            where = np.array([[column[v] for v in re], [row[v] for v in im]])
        else:
            self.axes = [_Axis.of(re, im), _Axis.of([zero], [zero])]
            where = np.array([range(order), [0] * order])
        shape = len(self.axes[0].place), len(self.axes[1].place)
        self.terms = []
        for bit in bits.T:
            sides = []
            for value in (0, 1):
                grid = np.zeros(shape, bool)
                grid[tuple(where[:, bit == value])] = True
                patterns: dict = {}
                for i, line in enumerate(grid):
                    if line.any():
                        patterns.setdefault(tuple(np.flatnonzero(line)), []).append(i)
                sides.append([(tuple(c), r) for r, c in patterns.items()])
            self.terms.append(sides)

    def __call__(self, rule, y, n0):
        """Truth of samples y (samples,) and N0 (samples,): ((hi, lo), gradient), each (samples, bits)."""
        form = {"exact": self._exact, "max-log": self._max_log, "linear": self._linear}[rule]
        y, n0 = np.asarray(y, np.complex128), np.asarray(n0, np.float64)
        chunk = max(1, 40_000 // max(len(a.place) for a in self.axes))
        parts = [form(y[i : i + chunk], n0[i : i + chunk]) for i in range(0, max(1, y.size), chunk)]
        hi, lo, gradient = (np.concatenate(p) for p in zip(*parts, strict=True))
        return (hi, lo), gradient

    def _exact(self, y, n0):
        weights = [_exp(axis.metrics(y, _reciprocal(n0))) for axis in self.axes]

        def axis_sum(which, index):
            (f, k), place = weights[which], self.axes[which].place
            return _sum(_take(f, index), k[index], np.broadcast_to(place[index, None], k[index].shape))

        def product(a, b):
            return _multiply(a[0], b[0]), a[1] + b[1], a[2] + b[2]

        def side(terms, table):
            found = [product(*_axis_values(axis_sum, term, table)) for term in terms]
            f, k, place = zip(*found, strict=True)
            return _sum(_stack(f), np.stack(k), np.stack(place))

        def llr(zero, one):
            powers = _multiply((zero[1] - one[1], 0.0), _LN2)
            return _add(powers, _add(_log(zero[0]), _negative(_log(one[0]))))

        return self._by_bit(side, llr, n0)

    def _max_log(self, y, n0):
        metrics = [axis.metrics(y, _reciprocal(n0)) for axis in self.axes]

        def axis_top(which, index):
            place = self.axes[which].place[index, None]
            return _largest(_take(metrics[which], index), np.broadcast_to(place, (len(place), y.size)))

        def side(terms, table):
            found = []
            for term in terms:
                (a, place_a), (b, place_b) = _axis_values(axis_top, term, table)
                found.append((_add(a, b), place_a + place_b))
            values, places = zip(*found, strict=True)
            return _largest(_stack(values), np.stack(places))

        def llr(zero, one):
            return _add(zero[0], _negative(one[0]))

        return self._by_bit(side, llr, n0)

    def _by_bit(self, side, llr, n0):
        """LLR and gradient 2 |E(x | 0) - E(x | 1)| / N0 of each bit from the values of its two sides."""
        table: dict = {}
        hi, lo, gradient = [], [], []
        for zero_terms, one_terms in self.terms:
            zero, one = side(zero_terms, table), side(one_terms, table)
            value = llr(zero, one)
            hi.append(value[0])
            lo.append(value[1])
            gradient.append(2 * np.abs(zero[-1] - one[-1]) / n0)
        return np.stack(hi, -1), np.stack(lo, -1), np.stack(gradient, -1)

    def _linear(self, y, n0):
        """Distance to the bit's nearest threshold times 4 a / N0, positive on the side of 0."""
        hi, lo, gradient = [], [], []
        for zero_terms, _ in self.terms:
            ((columns, rows),) = zero_terms
            along = 0 if len(rows) == len(self.axes[1].place) else 1
            ((_, level),) = self.axes[along].parts
            is_zero = np.isin(np.arange(level[0].size), (columns, rows)[along])
            coordinate = (y.real, y.imag)[along]
            step = _add(_take(level, slice(1, 2)), _negative(_take(level, slice(0, 1))))
            change = np.flatnonzero(is_zero[1:] != is_zero[:-1])
            middle = _add(_take(level, change), _take(level, change + 1))
            offset = _add((coordinate, 0.0), (-middle[0][:, None] / 2, -middle[1][:, None] / 2))
            turned = _where(offset[0] < 0, offset, _negative(offset))
            distance, _ = _largest(turned, np.zeros(turned[0].shape))  # of the negative distances
            crossed = (offset[0] > 0).sum(0)
            sign = np.where((crossed % 2 == 0) == is_zero[0], -1.0, 1.0)
            slope = _multiply((2 * step[0], 2 * step[1]), _reciprocal(n0))
            value = _multiply((distance[0] * sign, distance[1] * sign), slope)
            hi.append(value[0])
            lo.append(value[1])
            gradient.append(slope[0])
        return np.stack(hi, -1), np.stack(lo, -1), np.stack(gradient, -1)


def _axis_values(form, term, table):
    """The values of a term's columns and rows, each computed once."""
    for which, index in enumerate(term):
        if (which, index) not in table:
            table[which, index] = form(which, list(index))
    return [table[which, index] for which, index in enumerate(term)]


def _sum(f, k, place):
    """Sum of f 2^k over the first axis as (f, k), and the mean place under these weights."""
    top = k.max(0)
    shift = np.maximum(k - top, -2000).astype(int)
    hi, lo = np.ldexp(f[0], shift), np.ldexp(f[1], shift)
    mean = (hi * place).sum(0) / hi.sum(0)
    while len(hi) > 1:  # pairwise
        half = len(hi) // 2
        s, e = _two_sum(hi[:half], hi[half : 2 * half])
        e += lo[:half] + lo[half : 2 * half]
        hi, lo = np.concatenate([s, hi[2 * half :]]), np.concatenate([e, lo[2 * half :]])
    return _normal(hi[0], lo[0]), top, mean


def _largest(value, place):
    """Largest pair over the first axis, and its place."""
    hi, lo = value
    while len(hi) > 1:
        half = len(hi) // 2
        a, b = (hi[:half], lo[:half]), (hi[half : 2 * half], lo[half : 2 * half])
        second = _less(a, b)
        h, low = _where(second, b, a)
        p = np.where(second, place[half : 2 * half], place[:half])
        hi, lo, place = (np.concatenate([n, o[2 * half :]]) for n, o in ((h, hi), (low, lo), (p, place)))
    return (hi[0], lo[0]), place[0]


# The sweep.


def draw(constellation, output, samples, rng):
    """Samples y and noise variances N0 of the given type: Es/N0 uniform over -40 .. +80 dB; y a transmitted
    point with noise, or any direction with |y| up to 16 times the peak, or a place where formulas change."""
    points = np.asarray(constellation.points, np.complex128)
    energy = np.mean(np.abs(points) ** 2)
    peak = np.abs(points).max()
    real = np.dtype(output)
    n0 = (energy * 10 ** (-rng.uniform(-40, 80, samples) / 10)).astype(real)

    noise = np.sqrt(n0 / 2) * (rng.standard_normal(samples) + 1j * rng.standard_normal(samples))
    received = rng.choice(points, samples) + noise
    size = 10 ** rng.uniform(np.log10(1e-3 * np.sqrt(energy)), np.log10(16 * peak), samples)
    anywhere = size * np.exp(2j * np.pi * rng.random(samples))

    def crossing(coordinate):
        """Levels and thresholds of one coordinate, and some beyond the outermost level."""
        level = np.unique(coordinate)
        places = np.concatenate([level, (level[1:] + level[:-1]) / 2, 2 * level, [0.0]])
        return rng.choice(places, samples)

    pairs = rng.choice(points, (2, samples))
    turns = rng.choice([1, 1j, -1, -1j], samples)
    corner = (np.abs(points.real).max() + 1j * np.abs(points.imag).max()) * turns
    structured = np.select(
        list(np.arange(8)[:, None] == rng.integers(0, 8, samples)),
        [
            np.zeros(samples),
            rng.choice(points, samples),
            pairs.mean(0),
            crossing(points.real) + 1j * crossing(points.imag),
            crossing(points.real) + 1j * anywhere.imag,
            size * turns,
            size * turns * (1 + 1j) / np.sqrt(2),
            corner * np.where(rng.random(samples) < 0.5, 1, rng.uniform(0.5, 1.5, samples)),
        ],
        default=0,
    )
    kind = rng.integers(0, 3, samples)
    y = np.select([kind == 0, kind == 1], [received, anywhere], default=structured)
    parts = np.stack([y.real, y.imag], -1).astype(real)
    nudge = rng.integers(-2, 3, parts.shape) * (rng.random(parts.shape) < 0.25)
    parts += (nudge * np.spacing(np.abs(parts))).astype(real)
    return parts.view(np.result_type(real, np.complex64)).reshape(samples), n0


def steepest(truth, rule, y, n0, radius):
    """Largest length of the gradient at y and at eight places around it, `radius` away."""
    around = [0, *np.exp(0.25j * np.pi * np.arange(8))]
    return np.max([truth(rule, y + radius * step, n0)[1] for step in around], axis=0)


@dataclass(frozen=True)
class Worst:
    """The largest E of a sweep and the input that gave it."""

    error: float
    y: complex
    n0: float
    bit: int
    llr: float
    true: float


def sweep(constellation, rule, output, samples, seed, *, truth=None, demap=None):
    """Worst E of `samples` random symbols under a rule and type; the seed makes it repeatable."""
    y, n0 = draw(constellation, output, samples, np.random.default_rng(seed))
    demap = demap or pydemap.SoftDemapper(constellation, rule=rule, output=output)
    truth = truth or Truth(constellation)
    llr = demap(y, n0)
    true, gradient = truth(rule, y, n0)
    rms = np.sqrt(np.mean(np.abs(np.asarray(constellation.points)) ** 2))
    error = error_units(llr, true, gradient, y, rms, output)
    if rule == "max-log":
        near = np.flatnonzero((error > 1).any(-1))
        around = steepest(truth, rule, y[near], n0[near], UNITS[output] * np.maximum(np.abs(y[near]), rms))
        error[near] = error_units(llr[near], _take(true, near), around, y[near], rms, output)
    i, bit = np.unravel_index(np.argmax(error), error.shape)
    found = error[i, bit], y[i], n0[i], bit, llr[i, bit], true[0][i, bit]
    return Worst(*(value.item() for value in found))


# The constellations that the table is held on.


def _random_points(order, seed):
    rng = np.random.default_rng(seed)
    points = rng.standard_normal(order) + 1j * rng.standard_normal(order)
    return pydemap.Constellation(points, rng.permutation(order))


def _rings(counts, radii, seed=0):
    points = np.concatenate(
        [r * np.exp(2j * np.pi * (np.arange(n) + 0.5) / n) for n, r in zip(counts, radii, strict=True)]
    )
    return pydemap.Constellation(points, np.random.default_rng(seed).permutation(points.size))


def _shuffled_grid(side, seed):
    level = 2.0 * np.arange(side) - (side - 1)
    points = (level[:, None] + 1j * level).ravel()
    return pydemap.Constellation(points, np.random.default_rng(seed).permutation(points.size))


CASES: dict[str, Callable[[], pydemap.Constellation]] = {
    **{f"square {m}": lambda m=m: pydemap.square_qam(m) for m in (4, 16, 64, 256, 1024, 4096, 16384, 65536)},
    **{f"{c} x {r}": lambda c=c, r=r: pydemap.rectangular_qam(c, r) for c, r in ((4, 2), (16, 8), (2, 64))},
    "3GPP 256": lambda: pydemap.published_mapping("3GPP TS 38.211", 256),
    **{f"cross {m}": lambda m=m: pydemap.cross_qam(m) for m in (8, 32, 128, 512, 2048, 8192, 32768)},
    **{
        f"ITU-T {m}": lambda m=m: pydemap.published_mapping("ITU-T G.9701", m)
        for m in (8, 32, 64, 128, 512, 2048)
    },
    "8-PSK": lambda: _rings([8], [1.0]),
    "16-APSK": lambda: _rings([4, 12], [0.4, 1.1]),
    "random 64": lambda: _random_points(64, 1),
    "random 256": lambda: _random_points(256, 2),
    "shuffled grid 64": lambda: _shuffled_grid(8, 3),
}


def worst_of_case(case, samples, seed):
    """Yield (family, rule, output, Worst) over the rules and types that a case has."""
    constellation = CASES[case]()
    truth = Truth(constellation)
    family = pydemap.SoftDemapper(constellation).family
    for rule in ("exact", "max-log", "linear"):
        for output in UNITS:
            if (family, rule, output) in BOUNDS:
                yield family, rule, output, sweep(constellation, rule, output, samples, seed, truth=truth)


def table(results):
    """Markdown of the bounds beside the worst E found, from (case, family, rule, output, E) tuples."""
    lines = ["| family | rule | type | promised E | worst E found | with |", "| --- " * 6 + "|"]
    for key, bound in BOUNDS.items():
        found = [(error, case) for case, *this, error in results if tuple(this) == key]
        if found:
            error, case = max(found)
            lines.append(f"| {' | '.join(key)} | {bound:g} | {error:.2f} | {case} |")
    return "\n".join(lines)


def main():
    parser = argparse.ArgumentParser(description="worst error found for each family, rule and type")
    parser.add_argument(
        "--samples", type=int, default=5000, help="symbols of each constellation, rule and type"
    )
    parser.add_argument("--seed", type=int, default=0)
    options = parser.parse_args()
    found = []
    for case in CASES:
        for *key, worst in worst_of_case(case, options.samples, options.seed):
            found.append((case, *key, worst.error))
            print(f"{case}, {', '.join(key)}: {worst}", file=sys.stderr)
    print(table(found))


if __name__ == "__main__":
    main()
