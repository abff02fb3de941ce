"""The reference against vectors of many digits, closed forms, and the definition in probabilities."""

import csv
from pathlib import Path

import mpmath
import numpy as np
import pytest
from outside import GOLDEN_TOLERANCE
from test_constellation import grid

from pydemap import Constellation, cross_qam, published_mapping, rectangular_qam, reference, square_qam

GOLDEN = Path(__file__).parent / "golden"
RULES = ["exact", "max-log", "linear"]
EPS = np.finfo(float).eps


def on_grid(c):
    """The same labels on odd integers."""
    return Constellation([complex(*point) for point in grid(c)], c.labels)


def ts_38_211_grid(order):
    return on_grid(published_mapping("3GPP TS 38.211", order))


def scattered(order, seed):
    rng = np.random.default_rng(seed)
    return Constellation(rng.normal(size=order) + 1j * rng.normal(size=order), rng.permutation(order))


def samples(c, count, n0, seed=0):
    rng = np.random.default_rng(seed)
    noise = (rng.normal(size=count) + 1j * rng.normal(size=count)) * np.sqrt(n0 / 2)
    return rng.choice(c.points, count) + noise


def farthest(c, y, n0):
    """The largest metric, to which roundings are proportional."""
    return ((np.abs(y[..., None] - c.points) ** 2).max(-1) / n0 + 1)[..., None]


VECTORS = {
    "16qam": published_mapping("3GPP TS 38.211", 16),
    "16qam_grid": ts_38_211_grid(16),
    "64qam": published_mapping("3GPP TS 38.211", 64),
    "32cross": cross_qam(32),
    "32cross_grid": on_grid(cross_qam(32)),
}


@pytest.mark.parametrize("rule, column", [("exact", "llr"), ("max-log", "maxlog")])
@pytest.mark.parametrize("name", VECTORS)
def test_golden_vectors(name, rule, column):
    c = VECTORS[name]
    rows = list(csv.DictReader((GOLDEN / f"golden_{name}.csv").read_text().splitlines()))
    assert len(rows) == 40
    y = np.array([complex(float(row["y_re"]), float(row["y_im"])) for row in rows])
    n0 = np.array([float(row["N0"]) for row in rows])
    expected = np.array([[float(row[f"{column}{k}"]) for k in range(c.bits_per_symbol)] for row in rows])
    error = np.abs(reference.llr(y, n0, c, rule=rule) - expected) / (EPS * farthest(c, y, n0))
    row, bit = np.unravel_index(error.argmax(), error.shape)
    tolerance = GOLDEN_TOLERANCE[name.removesuffix("_grid")]
    assert error[row, bit] <= tolerance, f"bit {bit} of {rows[row]}: error {error[row, bit]}"


# Closed forms


@pytest.mark.parametrize("rule", RULES)
def test_bpsk_and_qpsk(rule):
    """Textbook: 4 sqrt(Es) Re(y)/N0, and for QPSK 2 sqrt2 sqrt(Es) Re(y)/N0 and the same of Im(y)."""
    y = samples(square_qam(4), 100, 0.5)
    bpsk = Constellation([1.5, -1.5], [0, 1])
    np.testing.assert_allclose(
        reference.llr(y, 0.7, bpsk, rule=rule)[:, 0], 4 * 1.5 * y.real / 0.7, rtol=1e-12
    )
    qpsk = published_mapping("3GPP TS 38.211", 4)
    expected = 2 * np.sqrt(2) * np.stack([y.real, y.imag], -1) / 0.7
    np.testing.assert_allclose(reference.llr(y, 0.7, qpsk, rule=rule), expected, rtol=1e-12)


@pytest.mark.parametrize("rule", ["exact", "max-log"])
def test_diagonal_bpsk(rule):
    """3GPP TS 38.211, clause 5.1.2: 2 sqrt2 (Re y + Im y)/N0 (computed from the points)."""
    c = published_mapping("3GPP TS 38.211", 2)
    y = samples(c, 100, 0.5)
    expected = 2 * np.sqrt(2) * (y.real + y.imag) / 0.7
    np.testing.assert_allclose(reference.llr(y, 0.7, c, rule=rule)[:, 0], expected, rtol=1e-12)


@pytest.mark.parametrize("n0", [0.3, 2, 50])
def test_exact_16qam(n0):
    """Computed (checked to 1e-74), grid: b0 ln[(e^(2y/N0) + e^((6y-8)/N0))/(e^(-2y/N0) + e^((-6y-8)/N0))],
    b2 8/N0 + ln[cosh(2y/N0)/cosh(6y/N0)]; b1 and b3 the same of Im y."""
    y = np.linspace(-9, 9, 181)

    def first(v):
        return np.logaddexp(2 * v, 6 * v - 8 / n0) - np.logaddexp(-2 * v, -6 * v - 8 / n0)

    def second(v):
        return 8 / n0 + np.logaddexp(2 * v, -2 * v) - np.logaddexp(6 * v, -6 * v)

    expected = [first(y / n0), first(-y / n0), second(y / n0), second(y / n0)]
    llr = reference.llr(y - 1j * y, n0, ts_38_211_grid(16))
    np.testing.assert_allclose(llr, np.stack(expected, -1), rtol=1e-12, atol=1e-13 * 400 / n0)


def first_bit(y, side):
    """N0 L of the sign bit: 4 (k + 1)(y - k s), k = min(floor(|y|/2), side/2 - 1), s the sign of y."""
    k = np.minimum(np.floor(np.abs(y) / 2), side / 2 - 1)
    return 4 * (k + 1) * (y - k * np.sign(y))


# N0 L on the grid, 3GPP labels, bits of one axis (computed; in line with Tosato and Bisaglia, ICC 2002, and
# Akay and Ayanoglu, abstracts).
MAX_LOG = {
    16: [lambda y: first_bit(y, 4), lambda y: 4 * (2 - abs(y))],
    64: [
        lambda y: first_bit(y, 8),
        lambda y: np.where(
            abs(y) <= 2, 8 * (3 - abs(y)), np.where(abs(y) <= 6, 4 * (4 - abs(y)), 8 * (5 - abs(y)))
        ),
        lambda y: np.where(abs(y) <= 4, 4 * (abs(y) - 2), 4 * (6 - abs(y))),
    ],
    256: [lambda y: first_bit(y, 16), lambda y: first_bit(8 - abs(y), 8)],
    1024: [lambda y: first_bit(y, 32)],
}


@pytest.mark.parametrize("order", MAX_LOG)
def test_max_log_closed_forms(order):
    y = np.linspace(-40, 40, 801)
    llr = reference.llr(y - 1j * y, 0.5, ts_38_211_grid(order), rule="max-log")
    for k, form in enumerate(MAX_LOG[order]):
        np.testing.assert_allclose(llr[:, 2 * k] * 0.5, form(y), rtol=0, atol=1e-11)
        np.testing.assert_allclose(llr[:, 2 * k + 1] * 0.5, form(-y), rtol=0, atol=1e-11)


@pytest.mark.parametrize("order", [4, 16, 64, 256, 1024])
def test_linear_closed_forms(order):
    """Distances to thresholds: y; y, 2 - |y|; y, 4 - |y|, 2 - |4 - |y||; and so on (Tosato and Bisaglia, ICC
    2002, from memory)."""
    y = np.linspace(-40, 40, 801)
    llr = reference.llr(y - 1j * y, 0.5, ts_38_211_grid(order), rule="linear")
    fold_i, fold_q, turn = y, -y, round(order**0.5)
    for k in range(0, llr.shape[1], 2):
        np.testing.assert_allclose(llr[:, k] * 0.5, 4 * fold_i, rtol=0, atol=1e-11)
        np.testing.assert_allclose(llr[:, k + 1] * 0.5, 4 * fold_q, rtol=0, atol=1e-11)
        turn //= 2
        fold_i, fold_q = turn - np.abs(fold_i), turn - np.abs(fold_q)


@pytest.mark.parametrize("c", [square_qam(64), rectangular_qam(8, 2), rectangular_qam(1, 8)], ids=repr)
def test_linear_is_max_log_next_to_a_threshold(c):
    """Between two neighbours whose bits differ the two rules are one (computed)."""
    a = c.min_distance / 2
    for k in range(c.bits_per_symbol):
        pairs = [
            (p, q)
            for p in range(c.order)
            for q in range(c.order)
            if c.bits[p, k] == 0 and c.bits[q, k] == 1 and abs(c.points[p] - c.points[q]) < 2.1 * a
        ]
        assert pairs
        for p, q in pairs:
            y = c.points[p] + np.linspace(0, 1, 5) * (c.points[q] - c.points[p])
            linear, max_log = (reference.llr(y, 0.1, c, rule=rule)[:, k] for rule in ("linear", "max-log"))
            np.testing.assert_allclose(linear, max_log, rtol=1e-9, atol=1e-11)


def test_linear_takes_any_labels_of_an_axis():
    """Bits exchanged, inverted, natural binary, a moved and stretched grid: thresholds follow the labels."""
    c = Constellation([10, 12, 14, 16], [0, 1, 2, 3])
    llr = reference.llr(np.array([10.5, 12.75, 15.75]) + 3j, 0.5, c, rule="linear")
    np.testing.assert_allclose(llr, 8 * np.array([[2.5, 0.5], [0.25, -0.25], [-2.75, -0.75]]), rtol=1e-14)
    square, turned = square_qam(64), np.random.default_rng(3).permutation(6)
    labels = (square.bits[:, turned] ^ 1) @ (1 << np.arange(6)[::-1])
    other = Constellation((square.points.real * 2 + 1j * square.points.imag) * 3 + 1, labels)
    y = samples(square, 50, 0.2)
    moved = (y.real * 2 + 1j * y.imag) * 3 + 1
    plain, new = (reference.llr(v, 0.2, k, rule="linear") for v, k in ((y, square), (moved, other)))
    stretch = np.where(turned < 3, 36, 9)
    np.testing.assert_allclose(new, -plain[:, turned] * stretch, rtol=1e-9, atol=1e-11)


@pytest.mark.parametrize(
    "c", [cross_qam(8), cross_qam(32), published_mapping("3GPP TS 38.211", 2), scattered(8, 1)], ids=repr
)
def test_linear_needs_a_full_grid(c):
    with pytest.raises(ValueError, match="rule 'linear' needs"):
        reference.llr(np.array([0.1j]), 1.0, c, rule="linear")


@pytest.mark.parametrize(
    "points, labels, message",
    [
        ([0, 1, 1j, 1 + 1j], [0, 1, 2, 3], None),
        ([0, 1, 1j, 1 + 1j], [0, 1, 3, 2], "each bit on one axis"),
        ([0, 1, 2, 4], [0, 1, 3, 2], "evenly spaced levels"),
    ],
)
def test_linear_needs_bits_on_axes(points, labels, message):
    c = Constellation(points, labels)
    if message is None:
        assert np.isfinite(reference.llr(np.array([0.3j]), 1.0, c, rule="linear")).all()
    else:
        with pytest.raises(ValueError, match=message):
            reference.llr(np.array([0.3j]), 1.0, c, rule="linear")


def test_linear_takes_levels_that_are_equal_but_for_rounding():
    c = square_qam(64)
    rounded = Constellation(c.points * np.exp(0.3j) * np.exp(-0.3j), c.labels)
    assert np.unique(rounded.points.real).size > 8
    y = samples(c, 50, 0.2)
    plain, new = (reference.llr(y, 0.2, k, rule="linear") for k in (c, rounded))
    np.testing.assert_allclose(new, plain, rtol=0, atol=1e-13)


# Exact against max-log


@pytest.mark.parametrize("c", [square_qam(64), cross_qam(32), scattered(16, 2)], ids=repr)
def test_sign_of_max_log_is_the_nearest_point(c):
    """By the definition, for any labels."""
    y = samples(c, 500, 0.5)
    nearest = np.abs(y[:, None] - c.points).argmin(axis=1)
    llr = reference.llr(y, 0.5, c, rule="max-log")
    assert np.array_equal(llr < 0, c.bits[nearest] == 1)


@pytest.mark.parametrize("c", [square_qam(64), cross_qam(32), scattered(16, 2)], ids=repr)
def test_max_log_is_within_n_minus_1_bits(c):
    """Each sum of 2^(n-1) terms exceeds its largest by 0 to (n - 1) ln 2 (textbook)."""
    largest = 0.0
    for n0 in (0.01, 0.3, 3, 100):
        y = samples(c, 200, n0)
        exact, max_log = reference.llr(y, n0, c), reference.llr(y, n0, c, rule="max-log")
        largest = max(largest, np.abs(exact - max_log).max())
    assert 0.1 < largest <= (c.bits_per_symbol - 1) * np.log(2) + 1e-9


@pytest.mark.parametrize("es_n0_db", [-40, 0, 20, 40, 80])
def test_any_snr(es_n0_db):
    """Finite, and meeting max-log as the noise goes."""
    c = cross_qam(128)
    n0 = 10 ** (-es_n0_db / 10)
    y = 16 * samples(c, 20, n0)
    exact, max_log = reference.llr(y, n0, c), reference.llr(y, n0, c, rule="max-log")
    assert np.isfinite(exact).all()
    if es_n0_db == 80:
        np.testing.assert_allclose(exact, max_log, rtol=1e-12)


# Priors, gain, conventions


def by_probabilities(y, n0, c, h, prior, rule):
    """The LLRs of one symbol with 50 digits: P(b | y) summed, or its largest term, then the logarithm."""
    with mpmath.workdps(50):
        weights = []
        for point, bits in zip(c.points.tolist(), c.bits.tolist(), strict=True):
            distance = abs(mpmath.mpc(y) - mpmath.mpc(h) * mpmath.mpc(point)) ** 2
            weight = mpmath.exp(-distance / mpmath.mpf(n0))
            for bit, known in zip(bits, prior, strict=True):
                zero = 1 / (1 + mpmath.exp(-mpmath.mpf(known)))
                weight *= 1 - zero if bit else zero
            weights.append(weight)
        combine = max if rule == "max-log" else mpmath.fsum
        sides = [
            [[w for w, b in zip(weights, c.bits[:, k], strict=True) if b == v] for v in (0, 1)]
            for k in range(len(prior))
        ]
        return [float(mpmath.log(combine(zero) / combine(one))) for zero, one in sides]


@pytest.mark.parametrize("rule", ["exact", "max-log"])
@pytest.mark.parametrize("c", [square_qam(16), cross_qam(8), scattered(8, 5)], ids=repr)
def test_definition(c, rule):
    """Gain and prior in the definition itself (computed, mpmath 50 digits)."""
    rng = np.random.default_rng(11)
    n = c.bits_per_symbol
    y, h = samples(c, 6, 0.4), rng.normal(size=6) + 1j * rng.normal(size=6)
    n0, prior = rng.uniform(0.1, 2, 6), rng.normal(size=(6, n)) * 4
    llr = reference.llr(y, n0, c, rule=rule, gain=h, prior=prior)
    expected = [by_probabilities(*values, rule) for values in zip(y, n0, [c] * 6, h, prior, strict=True)]
    np.testing.assert_allclose(llr, expected, rtol=1e-12, atol=1e-13)
    extrinsic = reference.llr(y, n0, c, rule=rule, gain=h, prior=prior, extrinsic=True)
    np.testing.assert_allclose(extrinsic, np.array(expected) - prior, rtol=1e-11, atol=1e-12)
    turned = reference.llr(y, n0, c, rule=rule, gain=h, prior=-prior, positive_bit=1)
    assert np.array_equal(turned, -llr)


@pytest.mark.parametrize("rule", RULES)
def test_gain_is_equalisation(rule):
    """y = h s + w carries what y/h = s + w/h does, whose noise is N0/|h|^2."""
    c = square_qam(64)
    h = np.array([2, 1j, 0.3 - 0.4j, -1.5 + 2j])
    y = h * samples(c, 4, 0.3)
    with_gain, equalised = (
        reference.llr(y, 0.3, c, rule=rule, gain=h),
        reference.llr(y / h, 0.3 / abs(h) ** 2, c, rule=rule),
    )
    np.testing.assert_allclose(with_gain, equalised, rtol=1e-11, atol=1e-11)


@pytest.mark.parametrize("rule", RULES)
def test_extrinsic_of_a_bit_leaves_its_own_prior_out(rule):
    c = square_qam(16)
    y, prior = samples(c, 5, 0.5), np.random.default_rng(4).normal(size=(5, 4))
    other = prior + np.array([0, 3, 0, 0])
    bit = [reference.llr(y, 0.5, c, rule=rule, prior=p, extrinsic=True)[:, 1] for p in (prior, other)]
    np.testing.assert_allclose(bit[0], bit[1], rtol=1e-12, atol=1e-12)


@pytest.mark.parametrize("rule", ["exact", "max-log"])
@pytest.mark.parametrize("sign", [1, -1])
def test_a_certain_bit_leaves_half_the_points(rule, sign):
    """An infinite prior on b0 of a cross of 32 is the demapper of the 16 points that remain."""
    c = cross_qam(32)
    y = samples(c, 20, 0.2)
    prior = np.zeros(5)
    prior[0] = sign * np.inf
    llr = reference.llr(y, 0.2, c, rule=rule, prior=prior)
    kept = c.bits[:, 0] == (sign < 0)
    half = Constellation(c.points[kept], c.labels[kept] % 16)
    np.testing.assert_allclose(llr[:, 1:], reference.llr(y, 0.2, half, rule=rule), rtol=1e-12, atol=1e-12)
    assert (llr[:, 0] == sign * 2.0**900).all()
    assert np.isfinite(reference.llr(y, 0.2, c, rule=rule, prior=prior, extrinsic=True)).all()


@pytest.mark.parametrize("rule", RULES)
def test_shapes(rule):
    c = square_qam(16)
    y = samples(c, 12, 0.3).reshape(3, 4)
    n0, h, prior = np.array([[0.1], [1], [3]]), np.array([1, 1j, 2, -1]), np.arange(4.0)
    llr = reference.llr(y, n0, c, rule=rule, gain=h, prior=prior)
    assert llr.shape == (3, 4, 4) and llr.dtype == np.float64
    for i, j in np.ndindex(3, 4):
        one = reference.llr(y[i, j], n0[i, 0], c, rule=rule, gain=h[j], prior=prior)
        assert one.shape == (4,)
        np.testing.assert_allclose(llr[i, j], one, rtol=1e-13, atol=1e-13)
    assert reference.llr(y[:0], 1.0, c, rule=rule).shape == (0, 4, 4)
    single = y.astype(np.complex64)
    assert np.array_equal(
        reference.llr(single, n0, c, rule=rule), reference.llr(single.astype(complex), n0, c, rule=rule)
    )


@pytest.mark.parametrize("rule", RULES)
def test_not_finite(rule):
    """NaN for every bit of the symbol, and for no other symbol; silently."""
    c = square_qam(16)
    y = np.array([0.3, np.nan, complex(0, np.inf), 0.3, 0.3, 0.3])
    h = np.array([1, 1, 1, complex(0, np.nan), -np.inf, 1])
    prior = np.zeros((6, 4))
    prior[5, 2] = np.nan
    with np.errstate(all="raise"):
        llr = reference.llr(y, 0.5, c, rule=rule, gain=h, prior=prior)
    assert np.array_equal(np.isnan(llr).all(axis=-1), [False, True, True, True, True, True])
    assert np.array_equal(llr[0], reference.llr(y[0], 0.5, c, rule=rule))


@pytest.mark.parametrize("rule", RULES)
def test_no_gain_no_information(rule):
    c = square_qam(16)
    y, prior = np.array([0.3 - 1j, 1e6]), np.array([1.3, -2.1, 0, 30.7])
    assert np.array_equal(reference.llr(y, 0.1, c, rule=rule, gain=0), np.zeros((2, 4)))
    llr = reference.llr(y, 0.1, c, rule=rule, gain=0, prior=prior)
    np.testing.assert_allclose(llr, np.tile(prior, (2, 1)), rtol=1e-13, atol=1e-14)


@pytest.mark.parametrize(
    "changed, error, message",
    [
        ({"y": np.zeros(3)}, TypeError, "y must be complex, got float64"),
        ({"n0": 0}, ValueError, r"n0 must be finite and positive, got 0 at index \(\)"),
        ({"n0": [1, np.nan, -1]}, ValueError, r"n0 must be finite and positive, got nan at index \(1,\)"),
        ({"n0": np.inf}, ValueError, "n0 must be finite and positive, got inf"),
        ({"n0": [1, 2]}, ValueError, r"n0 of shape \(2,\) does not broadcast to \(3,\)"),
        ({"n0": np.ones((2, 3))}, ValueError, r"n0 of shape \(2, 3\) does not broadcast to \(3,\)"),
        ({"n0": 1j}, TypeError, "n0 must be real numbers, got complex128"),
        ({"gain": [1, 2]}, ValueError, r"gain of shape \(2,\) does not broadcast to \(3,\)"),
        ({"gain": "1"}, TypeError, "gain must be complex or real numbers"),
        ({"prior": np.zeros((3, 3))}, ValueError, r"prior of shape \(3, 3\) does not broadcast to \(3, 4\)"),
        ({"prior": [1j, 0, 0, 0]}, TypeError, "prior must be real numbers, got complex128"),
        ({"rule": "log-map"}, ValueError, "rule must be 'exact', 'max-log' or 'linear', got 'log-map'"),
        ({"positive_bit": 2}, ValueError, "positive_bit must be 0 or 1, got 2"),
    ],
)
def test_refused(changed, error, message):
    arguments = {"y": np.zeros(3, complex), "n0": 1.0, "c": square_qam(16)} | changed
    with pytest.raises(error, match=message):
        reference.llr(**arguments)
