"""Constellations: their facts against published values and brute force, and what they promise and refuse."""

import copy
import math
import pickle
import tracemalloc
from concurrent.futures import ThreadPoolExecutor
from fractions import Fraction
from itertools import permutations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from outside import (
    CROSS_32_LABELS,
    CROSS_128_LABELS,
    CROSS_FACTS,
    CROSS_GRAY_PENALTY,
    CROSS_MEAN_OVER_PAIRS,
    DVB_C_32_PENALTIES,
    DVB_C_32_QUADRANT_I,
    DVB_C_32_QUADRANTS,
    G992_1_8_POINTS,
    RECTANGLE_AND_CROSS,
    SQUARE_FACTS,
)

from pydemap import Constellation, cross_qam, rectangular_qam, square_qam

SQUARE_ORDERS = [4**half for half in range(1, 9)]
CROSS_ORDERS = [2 * 4**half for half in range(2, 8)]
quick = settings(derandomize=True, deadline=None, max_examples=100)


def grid(c):
    """The points as pairs of integers, in half-spacings of a unit-energy grid."""
    a = c.min_distance / 2
    return [(round(p.real / a), round(p.imag / a)) for p in c.points]


def energy(c):
    """The exact mean energy in units of a^2."""
    return Fraction(sum(x * x + y * y for x, y in grid(c)), c.order)


def label_at(c):
    return dict(zip(grid(c), c.labels.tolist(), strict=True))


def mean_over_pairs(c):
    """Mean number of differing bits over all pairs of nearest neighbours, and the largest."""
    label = label_at(c)
    pairs = [(p, q) for p in label for q in ((p[0] + 2, p[1]), (p[0], p[1] + 2)) if q in label]
    bits = [(label[p] ^ label[q]).bit_count() for p, q in pairs]
    return Fraction(sum(bits), len(bits)), max(bits)


def table(text):
    """Labels laid out in rows from top to bottom, as {(x, y): word}."""
    rows = [line.split() for line in text.strip().splitlines()]
    size = len(rows)
    return {
        (2 * i - size + 1, size - 1 - 2 * j): word
        for j, row in enumerate(rows)
        for i, word in enumerate(row)
        if word != "."
    }


ALL_GRIDS = {
    **{f"square {m}": (square_qam, m) for m in SQUARE_ORDERS},
    **{f"cross {m}": (cross_qam, m) for m in [8, *CROSS_ORDERS]},
    "rectangle 16 x 8": (rectangular_qam, 16, 8),
    "rectangle 2 x 64": (rectangular_qam, 2, 64),
    "8 levels": (rectangular_qam, 8, 1),
}


@pytest.mark.parametrize("name", ALL_GRIDS)
def test_points_are_integers_times_one_factor(name):
    """One rounding away from a perfect grid, in label order, each label once, Es = 1 to rounding."""
    make, *sizes = ALL_GRIDS[name]
    c = make(*sizes)
    scale = 1 / math.sqrt(energy(c))
    x, y = np.array(grid(c)).T
    assert np.array_equal(c.points.real, x * scale)
    assert np.array_equal(c.points.imag, y * scale)
    assert np.array_equal(c.labels, np.arange(c.order))
    assert c.mean_energy == pytest.approx(1, abs=1e-14)


@pytest.mark.parametrize("order", SQUARE_ORDERS)
def test_square_formulas(order):
    """Textbook: E = (2/3)(M - 1) a^2, peak to mean 3 (sqrt M - 1)/(sqrt M + 1), 4 - 4/sqrt M neighbours."""
    c = square_qam(order)
    side = math.isqrt(order)
    assert c.order == order and c.bits_per_symbol == round(math.log2(order))
    assert energy(c) == Fraction(2, 3) * (order - 1)
    assert set(grid(c)) == {(x, y) for x in range(1 - side, side, 2) for y in range(1 - side, side, 2)}
    assert c.min_distance == pytest.approx(2 / math.sqrt(2 * (order - 1) / 3), rel=1e-12)
    assert c.peak_to_mean == pytest.approx(3 * (side - 1) / (side + 1), rel=1e-12)
    assert c.mean_neighbours == 4 - 4 / side
    assert c.gray_penalty == 1


@pytest.mark.parametrize("order", CROSS_ORDERS)
def test_cross_formulas(order):
    """E = (31 M - 32)/48 a^2, 4 - 6/sqrt(2 M) neighbours (textbook); a square of 1.5 sqrt(M/2) points a side,
    less a sixth of it at each corner; at most two bits differ between neighbours, 7/6 on average at 32 and
    1 + 1/sqrt(2 M) + 1/(3 M) beyond (Smith 1975, from memory: see outside.CROSS_GRAY_PENALTY)."""
    c = cross_qam(order)
    assert c.order == order and c.bits_per_symbol == round(math.log2(order))
    assert energy(c) == Fraction(31 * order - 32, 48)
    inner = math.isqrt(order // 2)
    axis = range(1 - 3 * inner // 2, 3 * inner // 2, 2)
    assert set(grid(c)) == {(x, y) for x in axis for y in axis if abs(x) < inner or abs(y) < inner}
    assert c.min_distance == pytest.approx(2 / math.sqrt((31 * order - 32) / 48), rel=1e-12)
    assert c.mean_neighbours == 4 - 6 / math.isqrt(2 * order)
    penalty = (
        Fraction(7, 6) if order == 32 else 1 + Fraction(1, math.isqrt(2 * order)) + Fraction(1, 3 * order)
    )
    assert c.gray_penalty == pytest.approx(float(penalty), rel=1e-13)
    assert mean_over_pairs(c)[1] == 2


@pytest.mark.parametrize("order", [*SQUARE_FACTS, *CROSS_FACTS])
def test_facts(order):
    c = square_qam(order) if order in SQUARE_FACTS else cross_qam(order)
    in_half_spacings, distance, peak_to_mean, peak_to_mean_db, neighbours = (SQUARE_FACTS | CROSS_FACTS)[
        order
    ]
    assert energy(c) == in_half_spacings
    assert c.min_distance == pytest.approx(distance, rel=1e-13)
    assert max(x * x + y * y for x, y in grid(c)) / energy(c) == peak_to_mean
    assert c.peak_to_mean == pytest.approx(float(peak_to_mean), rel=1e-13)
    assert 10 * math.log10(c.peak_to_mean) == pytest.approx(peak_to_mean_db, abs=5e-8)
    assert c.mean_neighbours == neighbours


@pytest.mark.parametrize("order", CROSS_GRAY_PENALTY)
def test_cross_gray_penalty(order):
    assert cross_qam(order).gray_penalty == pytest.approx(float(CROSS_GRAY_PENALTY[order]), rel=1e-13)


@pytest.mark.parametrize("order", CROSS_MEAN_OVER_PAIRS)
def test_cross_mean_over_pairs(order):
    assert mean_over_pairs(cross_qam(order)) == (CROSS_MEAN_OVER_PAIRS[order], 2)


@pytest.mark.parametrize("columns, rows", RECTANGLE_AND_CROSS)
def test_rectangle_against_cross(columns, rows):
    rectangle_energy, cross_energy, gain_db = RECTANGLE_AND_CROSS[columns, rows]
    rectangle, cross = rectangular_qam(columns, rows), cross_qam(columns * rows)
    assert (energy(rectangle), energy(cross)) == (rectangle_energy, cross_energy)
    assert 20 * math.log10(cross.min_distance / rectangle.min_distance) == pytest.approx(gain_db, abs=5e-4)


def test_cross_labels():
    assert label_at(cross_qam(32)) == {point: int(word, 2) for point, word in table(CROSS_32_LABELS).items()}
    label = label_at(cross_qam(128))
    for y, words in CROSS_128_LABELS.items():
        assert [label[x, y] for x in (1, 3, 5, 7)] == [int(word, 2) for word in words]


def test_cross_of_8():
    """The points of outside.G992_1_8_POINTS; E = 6 a^2, Gray; b0 and b2 are the signs of I and Q."""
    c = cross_qam(8)
    assert set(grid(c)) == set(G992_1_8_POINTS)
    assert energy(c) == energy(rectangular_qam(4, 2)) == 6
    assert (c.mean_neighbours, rectangular_qam(4, 2).mean_neighbours) == (2, 2.5)
    assert c.gray_penalty == 1
    assert np.array_equal(c.bits[:, 0], c.points.real > 0)
    assert np.array_equal(c.bits[:, 2], c.points.imag > 0)
    assert np.array_equal(c.bits[:, 1], np.abs(c.points) < 1)


def test_cross_of_8_has_no_other_gray_labels():
    """Computed (all 8! labellings): 48 are Gray, the 3! orders times 2^3 inversions of the bits of one."""
    c = cross_qam(8)
    distance = np.abs(c.points[:, None] - c.points)
    i, j = np.nonzero(np.triu((distance < 1.01 * c.min_distance) & (distance > 0)))
    ones = np.array([label.bit_count() for label in range(8)])
    labellings = np.array(list(permutations(range(8))))
    gray = labellings[(ones[labellings[:, i] ^ labellings[:, j]] == 1).all(axis=1)]
    turned = {
        tuple((c.bits[:, order] ^ inverted) @ [4, 2, 1])
        for order in permutations(range(3))
        for inverted in np.ndindex(2, 2, 2)
    }
    assert len(gray) == len(turned) == 48
    assert set(map(tuple, gray)) == turned


def test_labels_of_other_people():
    """DVB-C 32-QAM: Gray inside a quadrant and not across."""
    points, labels = [], []
    for turn, quadrant in enumerate(DVB_C_32_QUADRANTS):
        for (x, y), bits in DVB_C_32_QUADRANT_I.items():
            points.append(complex(x, y) * 1j**turn)
            labels.append(int(quadrant + bits, 2))
    c = Constellation(points, labels)
    penalty, over_pairs, most = DVB_C_32_PENALTIES
    assert set(grid(c)) == set(grid(cross_qam(32)))
    assert c.mean_energy == 20
    assert c.gray_penalty == pytest.approx(float(penalty), rel=1e-13)
    assert mean_over_pairs(c) == (over_pairs, most)


@pytest.mark.parametrize("columns, rows", [(2, 1), (1, 2), (4, 1), (4, 2), (2, 8), (16, 8), (256, 256)])
def test_rectangle_labels(columns, rows):
    """I bits first, each axis binary reflected Gray, all zeros most negative (recursive rule, textbook)."""

    def reflected(bits):
        if bits == 0:
            return [0]
        half = reflected(bits - 1)
        return half + [label + (1 << bits - 1) for label in reversed(half)]

    c = rectangular_qam(columns, rows)
    x_labels, y_labels = reflected(columns.bit_length() - 1), reflected(rows.bit_length() - 1)
    expected = {
        (2 * i - columns + 1, 2 * j - rows + 1): x_labels[i] * rows + y_labels[j]
        for i in range(columns)
        for j in range(rows)
    }
    assert label_at(c) == expected
    assert c.gray_penalty == 1


def test_square_is_a_rectangle():
    assert square_qam(64) == rectangular_qam(8, 8)


@st.composite
def point_sets(draw):
    """Scattered points, rings, and grids that are turned, stretched, moved, and rounded to float32."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    order = 2 ** draw(st.integers(1, 7))
    kind = draw(st.sampled_from(["scattered", "ring", "line", "grid", "float32 grid"]))
    if kind == "scattered":
        points = rng.normal(size=order) + 1j * rng.normal(size=order)
    elif kind == "ring":
        points = np.exp(2j * np.pi * np.arange(order) / order)
    elif kind == "line":
        points = np.arange(order) * np.exp(1j * draw(st.sampled_from([0, np.pi / 2, 1, 1 + np.pi / 2, 3])))
    else:
        columns = 2 ** draw(st.integers(0, order.bit_length() - 1))
        points = (np.arange(order) % columns) * rng.choice([1, 1.3]) + 1j * (np.arange(order) // columns)
        points = points * np.exp(1j * rng.choice([0, 0.3])) + rng.choice([0, 3 - 5j])
    points = points * 10.0 ** rng.integers(-100, 100)
    if kind == "float32 grid":
        points = (points / np.abs(points).max()).astype(np.complex64)
    return Constellation(rng.permutation(points), rng.permutation(order))


@quick
@given(point_sets())
def test_facts_by_brute_force(c):
    """All pairs, for any points; a distance equal but for rounding counts as equal."""
    distance = np.abs(c.points[:, None] - c.points)
    np.fill_diagonal(distance, np.inf)
    near = distance <= distance.min() * (1 + 1e-4)
    differing = (c.bits[:, None, :] != c.bits).sum(axis=-1)
    of_point = [differing[i, near[i]].mean() for i in range(c.order) if near[i].any()]
    assert c.min_distance == distance.min()
    assert c.mean_neighbours == near.sum() / c.order
    assert c.gray_penalty == pytest.approx(np.mean(of_point), rel=1e-12)
    assert c.mean_energy == pytest.approx(np.mean(np.abs(c.points) ** 2), rel=1e-12)
    assert c.peak_to_mean == pytest.approx(np.max(np.abs(c.points) ** 2) / c.mean_energy, rel=1e-12)


def test_distances_of_points_in_float32_count_as_equal():
    for order in (4096, 65536):
        c = square_qam(order)
        rounded = Constellation(c.points.astype(np.complex64), c.labels)
        assert (rounded.mean_neighbours, rounded.gray_penalty) == (c.mean_neighbours, 1)


def test_facts_of_the_largest_order_need_little_memory():
    """All pairs of 65536 points would take 32 GiB a matrix."""
    c = square_qam(65536)
    tracemalloc.start()
    assert c.mean_neighbours == 4 - 4 / 256
    assert c.gray_penalty == 1
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 64 * 2**20, f"{peak / 2**20:.0f} MiB"


def test_bits_are_most_significant_first():
    c = Constellation([0, 1, 2, 3], [2, 0, 3, 1])
    assert c.bits.dtype == np.uint8
    assert c.bits.tolist() == [[1, 0], [0, 0], [1, 1], [0, 1]]


def test_given_order_is_kept():
    points, labels = [3 + 1j, -1, 2j, 5], [2, 0, 3, 1]
    c = Constellation(points, labels)
    assert c.points.tolist() == points and c.labels.tolist() == labels
    assert c.points.dtype == np.complex128 and c.labels.dtype == np.int64
    assert c.map(c.bits).tolist() == points


@pytest.mark.parametrize("c", [square_qam(16), cross_qam(8), Constellation([1, -1], [1, 0])], ids=repr)
def test_map(c):
    n = c.bits_per_symbol
    labels = np.random.default_rng(1).integers(0, c.order, (3, 1, 5))
    bits = (labels[..., None] >> np.arange(n)[::-1] & 1).astype(np.uint8)
    expected = np.array([c.points[list(c.labels).index(label)] for label in labels.ravel()])
    assert np.array_equal(c.map(bits), expected.reshape(3, 1, 5))
    assert np.array_equal(c.map(bits.ravel()), expected)
    assert np.array_equal(c.map(bits.astype(bool)), expected.reshape(3, 1, 5))
    assert np.array_equal(c.map(bits.ravel().tolist()), expected)
    assert c.map(bits[0, 0, 0]).shape == (1,)
    assert c.map(bits[:0]).shape == (0, 1, 5) and c.map([]).shape == (0,)
    assert c.map(bits).dtype == np.complex128


@pytest.mark.parametrize(
    "bits, error, message",
    [
        ([0, 1, 0, 1, 1], ValueError, r"bits has shape \(5,\), expected \(\.\.\., 4\), or \(k \* 4,\)"),
        (np.zeros((2, 8), int), ValueError, r"bits has shape \(2, 8\)"),
        (np.zeros((0, 5), int), ValueError, r"bits has shape \(0, 5\)"),
        (1, ValueError, r"bits has shape \(\)"),
        ([0, 1, 2, 1], ValueError, r"bits must be 0 or 1, got 2 at index 2"),
        ([[0, 1, 0, -1]], ValueError, r"bits must be 0 or 1, got -1 at index \(0, 3\)"),
        ([0.0, 1.0, 1.0, 1.0], TypeError, "bits must be integers or booleans, got float64"),
    ],
)
def test_map_refuses(bits, error, message):
    with pytest.raises(error, match=message):
        square_qam(16).map(bits)


@pytest.mark.parametrize(
    "points, labels, error, message",
    [
        ([], [], ValueError, "power of two from 2 to 65536, got 0"),
        ([1], [0], ValueError, "power of two from 2 to 65536, got 1"),
        ([1, 2, 3], [0, 1, 2], ValueError, "power of two from 2 to 65536, got 3"),
        (np.arange(2**17), np.arange(2**17), ValueError, "power of two from 2 to 65536, got 131072"),
        ([[1, 2], [3, 4]], [0, 1, 2, 3], ValueError, r"points must have one dimension, got shape \(2, 2\)"),
        (["1", "2"], [0, 1], TypeError, "points must be complex numbers"),
        ([1, np.nan], [0, 1], ValueError, r"points must be finite.* at index 1"),
        ([1j * np.inf, 1], [0, 1], ValueError, r"points must be finite.* at index 0"),
        (
            [1, 1e200],
            [0, 1],
            ValueError,
            r"points must be finite, squares too, got \(1e\+200\+0j\) at index 1",
        ),
        ([1e-200, -1e-200], [0, 1], ValueError, "points must reach"),
        ([1, 2j, -1, 2j], [0, 1, 2, 3], ValueError, r"points must differ, got 2j at both index 1 and 3"),
        ([1, 0.0, -0.0, 2], [0, 1, 2, 3], ValueError, "points must differ, got 0j at both index 1 and 2"),
        ([1, 2], [0, 1, 2], ValueError, r"labels must have shape \(2,\) like points, got \(3,\)"),
        ([1, 2], [[0, 1]], ValueError, r"labels must have shape \(2,\) like points, got \(1, 2\)"),
        ([1, 2], [0.0, 1.0], TypeError, "labels must be integers, got float64"),
        ([1, 2], [0, 2], ValueError, "labels must be 0 to 1, got 2 at index 1"),
        ([1, 2], [-1, 0], ValueError, "labels must be 0 to 1, got -1 at index 0"),
        ([1, 2, 3, 4], [0, 3, 1, 3], ValueError, "each of 0 to 3 once, got 3 repeatedly and no 2"),
    ],
)
def test_constellation_refuses(points, labels, error, message):
    with pytest.raises(error, match=message):
        Constellation(points, labels)


@pytest.mark.parametrize(
    "make, error, message",
    [
        (
            lambda: square_qam(32),
            ValueError,
            "order of square_qam must be one of 4, 16, 64 ... 65536, got 32",
        ),
        (lambda: square_qam(1), ValueError, "got 1"),
        (lambda: square_qam(4**9), ValueError, "got 262144"),
        (lambda: square_qam(16.0), TypeError, "order must be an integer, got 16.0"),
        (lambda: cross_qam(16), ValueError, "order of cross_qam must be one of 8, 32, 128 ... 32768, got 16"),
        (lambda: cross_qam(2), ValueError, "got 2"),
        (lambda: cross_qam(131072), ValueError, "got 131072"),
        (lambda: cross_qam("32"), TypeError, "order must be an integer, got '32'"),
        (lambda: rectangular_qam(3, 4), ValueError, "columns must be a power of two, got 3"),
        (lambda: rectangular_qam(4, 0), ValueError, "rows must be a power of two, got 0"),
        (lambda: rectangular_qam(-4, 2), ValueError, "columns must be a power of two, got -4"),
        (lambda: rectangular_qam(1, 1), ValueError, r"columns \* rows must be 2 to 65536, got 1 \* 1"),
        (lambda: rectangular_qam(512, 256), ValueError, r"got 512 \* 256"),
        (lambda: rectangular_qam(4, 2.5), TypeError, "rows must be an integer, got 2.5"),
    ],
)
def test_shapes_refuse(make, error, message):
    with pytest.raises(error, match=message):
        make()


def test_immutable():
    points = np.array([1.0 + 0j, -1.0])
    c = Constellation(points, [0, 1])
    points[0] = 7
    assert c.points[0] == 1
    for array in (c.points, c.labels, c.bits):
        with pytest.raises(ValueError):
            array[0] = 0
        with pytest.raises(ValueError):
            array.flags.writeable = True
    for name in ("points", "labels", "order", "mean_energy", "other"):
        with pytest.raises(AttributeError, match=f"cannot set {name}"):
            setattr(c, name, 1)
        with pytest.raises(AttributeError, match=f"cannot delete {name}"):
            delattr(c, name)


def test_equal_by_value():
    c = cross_qam(32)
    same = Constellation(c.points.tolist(), c.labels.tolist())
    assert c == same and hash(c) == hash(same) and len({c, same}) == 1
    assert Constellation([0.0, 1.0], [0, 1]) == Constellation([-0.0, 1.0], [0, 1])
    assert hash(Constellation([0.0, 1.0], [0, 1])) == hash(Constellation([-0.0, 1 - 0j], [0, 1]))
    assert c != Constellation(c.points, c.labels[::-1])
    assert c != Constellation(2 * c.points, c.labels)
    assert c != cross_qam(128) and c != "32"


@pytest.mark.parametrize("clone", [lambda c: pickle.loads(pickle.dumps(c)), copy.copy, copy.deepcopy])
def test_copies(clone):
    c = cross_qam(32)
    assert c.gray_penalty > 1  # a computed fact must not stand in the way
    twin = clone(c)
    assert twin == c and twin.gray_penalty == c.gray_penalty
    assert not twin.points.flags.writeable


def test_shared_between_threads():
    c = square_qam(4096)
    with ThreadPoolExecutor(8) as pool:
        facts = list(pool.map(lambda _: (c.min_distance, c.mean_neighbours, c.gray_penalty), range(32)))
    assert set(facts) == {(c.min_distance, 3.9375, 1.0)}


def test_repr():
    assert repr(cross_qam(32)) == (
        "<Constellation of 32 points: mean energy 1, minimum distance 0.447214, Gray penalty 1.16667>"
    )
