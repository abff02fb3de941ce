"""Every LLR within the bounds of the accuracy table, and the truth it is measured with right itself."""

import zlib

import accuracy
import mpmath
import numpy as np
import pytest
from accuracy import (
    BOUNDS,
    CASES,
    TRUTH_ERROR,
    UNITS,
    Truth,
    error_units,
    sweep,
    truth_by_definition,
    worst_of_case,
)

import pydemap

FAMILIES = {
    "fold": [name for name in CASES if name.startswith(("square", "3GPP")) or " x " in name],
    "boxes": [name for name in CASES if name.startswith(("cross", "ITU-T"))],
    "points": ["8-PSK", "16-APSK", "random 64", "random 256", "shuffled grid 64"],
}


@pytest.mark.parametrize("name", CASES)
def test_family(name):
    """The sweep below reaches every family, and each constellation is recognised as what it is."""
    (expected,) = [family for family, names in FAMILIES.items() if name in names]
    assert pydemap.SoftDemapper(CASES[name]()).family == expected


def certify(name, effort, seed, record_property):
    """A sweep of one constellation under every rule and type that its family has; small ones are quicker."""
    samples = int(effort * np.clip(1_500_000 / CASES[name]().order, 1500, 12_000))
    failures = []
    for *key, worst in worst_of_case(name, samples, seed):
        record_property("accuracy", (name, *key, worst.error))
        print(f"{name}, {', '.join(key)}: {worst}")
        if not worst.error <= BOUNDS[tuple(key)]:
            failures.append(f"{name}, {', '.join(key)}: bound {BOUNDS[tuple(key)]}, found {worst}")
    assert not failures, "\n".join(failures)


@pytest.mark.parametrize("name", CASES)
def test_bounds(name, record_property):
    certify(name, 1, zlib.crc32(name.encode()), record_property)


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(1, 11))
@pytest.mark.parametrize("name", CASES)
def test_bounds_in_a_dense_sweep(name, seed, record_property):
    certify(name, 8, zlib.crc32(name.encode()) + seed, record_property)


# The truth itself.

SMALL = ["square 16", "16 x 8", "cross 8", "cross 32", "ITU-T 32", "cross 128", "16-APSK", "random 64"]


def certified_error(constellation, rule, samples, seed):
    """Largest difference of Truth from the 50-digit definition, in units E of float64."""
    truth = Truth(constellation)
    y, n0 = accuracy.draw(constellation, "float64", samples, np.random.default_rng(seed))
    (hi, lo), gradient = truth(rule, y, n0)
    rms = np.sqrt(np.mean(np.abs(constellation.points) ** 2))
    difference = np.empty(hi.shape)
    with mpmath.workdps(50):
        for i in range(samples):
            for bit, value in enumerate(truth_by_definition(constellation, rule, y[i], n0[i])):
                difference[i, bit] = float(value - mpmath.mpf(hi[i, bit]) - mpmath.mpf(lo[i, bit]))
    return error_units(difference, (np.zeros_like(hi), 0.0), gradient, y, rms, "float64").max()


@pytest.mark.parametrize("rule", ["exact", "max-log"])
@pytest.mark.parametrize("name", SMALL)
def test_truth_equals_definition(name, rule):
    """Double-double sums over axes against 50 digits over points: two ways to the same value."""
    samples = max(6, 1200 // CASES[name]().order)
    assert certified_error(CASES[name](), rule, samples, 5) < TRUTH_ERROR


@pytest.mark.parametrize("rule", ["exact", "max-log"])
def test_truth_equals_definition_at_large_order(rule):
    assert certified_error(CASES["square 4096"](), rule, 2, 6) < TRUTH_ERROR
    assert certified_error(CASES["cross 2048"](), rule, 2, 7) < TRUTH_ERROR


@pytest.mark.parametrize("name", ["square 64", "16 x 8"])
def test_truth_of_linear_equals_definition(name):
    """Against the plain form: distance to the bit's nearest change along its axis, times 4 a / N0."""
    constellation = CASES[name]()
    y, n0 = accuracy.draw(constellation, "float64", 300, np.random.default_rng(8))
    (hi, _), gradient = Truth(constellation)("linear", y, n0)
    a = constellation.min_distance / 2
    points = constellation.points
    apart = np.abs(points[:, None] - points) < 2.1 * a
    for k, bit in enumerate(constellation.bits.T):
        one, other = np.nonzero(apart & (bit[:, None] != bit))
        middle = (points[one] + points[other]) / 2
        along_q = (
            np.abs(points[one] - points[other]).max() == np.abs((points[one] - points[other]).imag).max()
        )
        thresholds, coordinate = (middle.imag, y.imag) if along_q else (middle.real, y.real)
        distance = np.abs(coordinate[:, None] - thresholds).min(1)
        nearest = np.abs(y[:, None] - points).argmin(1)
        expected = np.where(bit[nearest] == 0, 1, -1) * distance * 4 * a / n0
        np.testing.assert_allclose(hi[:, k], expected, rtol=1e-9, atol=1e-9 * np.max(4 * a * a / n0))
        np.testing.assert_allclose(gradient[:, k], 4 * a / n0, rtol=1e-12)


@pytest.mark.parametrize("rule", ["exact", "max-log"])
@pytest.mark.parametrize("name", ["square 16", "cross 32", "16-APSK"])
def test_gradient_is_the_derivative(name, rule):
    """Against central differences of the truth, which has the digits for it."""
    constellation = CASES[name]()
    truth = Truth(constellation)
    rng = np.random.default_rng(9)
    y = rng.standard_normal(200) + 1j * rng.standard_normal(200)
    n0 = 10 ** rng.uniform(-1.5, 2, 200)
    _, gradient = truth(rule, y, n0)
    step = 2.0**-30
    slopes = []
    for direction in (step, 1j * step):
        (hi, lo), _ = truth(rule, y + direction, n0)
        (hi0, lo0), _ = truth(rule, y - direction, n0)
        slopes.append(((hi - hi0) + (lo - lo0)) / (2 * step))
    np.testing.assert_allclose(np.hypot(*slopes), gradient, rtol=1e-6, atol=1e-6)


# The measure itself.


def test_measure_is_total():
    """NaN and infinity are infinitely wrong, both zeros are one, what the type cannot hold must saturate."""
    largest = float(np.finfo("float32").max)

    def error(llr, true):
        values = np.array([[true]]), np.array([[0.0]])
        return error_units(np.array([[llr]]), values, np.zeros((1, 1)), [1.0], 1.0, "float32").item()

    assert error(np.nan, 1.0) == error(np.inf, 1.0) == error(-np.inf, 1e39) == error(np.inf, 1e39) == np.inf
    assert error(0.0, 0.0) == error(-0.0, 0.0) == 0.0
    assert error(largest, 1e39) == error(-largest, -1e39) == 0.0
    assert error(-largest, 1e39) == error(1.0, 1e39) == np.inf
    assert error(1 + 2.0**-23, 1.0) == pytest.approx(1.0)


def test_slope_at_a_kink_is_the_steeper_one():
    """16-QAM, b0 of Gray labels: slopes 4 a / N0 inside the levels +-a, 8 a / N0 beyond 2 a (closed form)."""
    truth = Truth(CASES["square 16"]())
    a = 10**-0.5
    y = np.array([1.9, 2.0 - 1e-15, 2.0 + 1e-15, 2.1]) * a + 0.3j
    slope = accuracy.steepest(truth, "max-log", y, np.ones(4), np.full(4, 1e-14))
    np.testing.assert_allclose(slope[:, 0], np.array([4, 8, 8, 8]) * a, rtol=1e-12)


@pytest.mark.parametrize("output", UNITS)
def test_sweep_sees_an_error(output):
    """A demapper that is wrong by 20 units on one bit of one symbol in ten is caught."""
    constellation = CASES["square 64"]()
    truth = Truth(constellation)

    def wrong(y, n0):
        (hi, _), gradient = truth("exact", y, n0)
        unit = UNITS[output] * (1 + np.abs(hi) + np.maximum(np.abs(y), 1)[:, None] * gradient)
        llr = hi.astype(output)
        llr[::10, 3] += 20 * unit[::10, 3]
        return llr

    worst = sweep(constellation, "exact", output, 100, 1, truth=truth, demap=wrong)
    assert 19 < worst.error < 22 and worst.bit == 3
