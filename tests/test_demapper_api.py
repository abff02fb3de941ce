"""What Python promises around the kernels: the way back, noise estimates, immutable objects, array types."""

import copy
import itertools
import math
import pickle
import threading
import warnings
from dataclasses import FrozenInstanceError
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import chi2

import pydemap
from pydemap import Constellation, SoftDemapper, Word, estimate_noise_variance, soft_symbols

LARGEST = np.finfo(np.float32).max


def scattered(order, seed):
    rng = np.random.default_rng(seed)
    points = rng.standard_normal(order) + 1j * rng.standard_normal(order)
    return Constellation(points, rng.permutation(order))


CONSTELLATIONS = {
    "2 points": Constellation([0.3 + 0.1j, -1], [1, 0]),
    "square 16": pydemap.square_qam(16),
    "cross 32": pydemap.cross_qam(32),
    "16 points": scattered(16, 3),
}
each_constellation = pytest.mark.parametrize("c", CONSTELLATIONS.values(), ids=CONSTELLATIONS)
OUTPUTS = ["float32", "float64", Word(6, 0.5), Word(12, 0.03125)]


def noise(rng, n0, shape):
    return np.sqrt(n0 / 2) * (rng.standard_normal(shape) + 1j * rng.standard_normal(shape))


def same(a, b):
    """Equal in shape, type and every bit."""
    return a.shape == b.shape and a.dtype == b.dtype and a.tobytes() == b.tobytes()


# soft_symbols


def expectation(c, llr):
    """Mean and variance by the definition: each point with the product of its bits' probabilities."""
    mean, square = 0.0, 0.0
    for point, bits in zip(c.points.tolist(), c.bits.tolist(), strict=True):
        probability = 1.0
        for value, bit in zip(llr, bits, strict=True):
            probability *= 1 / (1 + math.exp(value if bit else -value))
        mean += probability * point
        square += probability * abs(point) ** 2
    return mean, square - abs(mean) ** 2


@each_constellation
@pytest.mark.parametrize("spread", [0.1, 2.0, 20.0])
def test_soft_symbols_by_definition(c, spread):
    llr = np.random.default_rng(1).normal(0, spread, (3, 7, c.bits_per_symbol))
    mean, variance = soft_symbols(c, llr)
    assert (mean.dtype, mean.shape) == (np.complex128, (3, 7))
    assert (variance.dtype, variance.shape) == (np.float64, (3, 7))
    for index in np.ndindex(3, 7):
        expected_mean, expected_variance = expectation(c, llr[index].tolist())
        assert mean[index] == pytest.approx(expected_mean, rel=1e-12, abs=1e-13)
        assert variance[index] == pytest.approx(expected_variance, rel=1e-9, abs=1e-12)


@each_constellation
def test_soft_symbols_know_nothing_at_zero(c):
    """No information: the mean of all points, and their mean squared distance from it."""
    mean, variance = soft_symbols(c, np.zeros(c.bits_per_symbol))
    assert mean == pytest.approx(c.points.mean(), abs=1e-15)
    assert variance == pytest.approx(np.mean(np.abs(c.points - c.points.mean()) ** 2), rel=1e-14)


@each_constellation
@pytest.mark.parametrize("certain", [800.0, 1e300, np.inf])
def test_soft_symbols_of_certain_bits(c, certain):
    """Every label's own point and no variance, and no warning on the way."""
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        mean, variance = soft_symbols(c, np.where(c.bits == 0, certain, -certain))
    np.testing.assert_array_equal(mean, c.points)
    np.testing.assert_array_equal(variance, 0)


def test_soft_symbols_of_one_certain_bit():
    """The other bits unknown: the mean of the half of the points that is left."""
    c = CONSTELLATIONS["cross 32"]
    for k, value in itertools.product(range(5), (0, 1)):
        llr = np.zeros(5)
        llr[k] = -np.inf if value else np.inf
        mean, _ = soft_symbols(c, llr)
        assert mean == pytest.approx(c.points[c.bits[:, k] == value].mean(), abs=1e-15)


def test_soft_symbols_of_nan():
    llr = np.zeros((3, 4))
    llr[1, 2] = np.nan
    mean, variance = soft_symbols(CONSTELLATIONS["square 16"], llr)
    np.testing.assert_array_equal(np.isnan(mean), [False, True, False])
    np.testing.assert_array_equal(np.isnan(variance), [False, True, False])


@each_constellation
def test_soft_symbols_positive_bit(c):
    llr = np.random.default_rng(2).normal(0, 3, (20, c.bits_per_symbol))
    for one, other in zip(soft_symbols(c, llr), soft_symbols(c, -llr, positive_bit=1), strict=True):
        np.testing.assert_array_equal(one, other)


@pytest.mark.parametrize("dtype", ["int8", "int64", "float16", "float32", ">f4"])
def test_soft_symbols_types(dtype):
    llr = np.array([[3, -2, 0, 7], [1, 1, -5, 0]])
    c = CONSTELLATIONS["square 16"]
    for got, expected in zip(soft_symbols(c, llr.astype(dtype)), soft_symbols(c, llr * 1.0), strict=True):
        np.testing.assert_array_equal(got, expected)


def test_soft_symbols_of_a_large_constellation_are_those_of_each_symbol_alone():
    """More probabilities than are held at a time."""
    c = pydemap.square_qam(4096)
    llr = np.random.default_rng(3).normal(0, 4, (700, 12))
    mean, variance = soft_symbols(c, llr)
    for i in (0, 255, 256, 511, 512, 699):
        one_mean, one_variance = soft_symbols(c, llr[i])
        assert mean[i] == pytest.approx(complex(one_mean), rel=1e-12)
        assert variance[i] == pytest.approx(float(one_variance), rel=1e-12)


@pytest.mark.parametrize("shape", [(0, 4), (3, 0, 4)])
def test_soft_symbols_of_nothing(shape):
    mean, variance = soft_symbols(CONSTELLATIONS["square 16"], np.zeros(shape))
    assert mean.shape == variance.shape == shape[:-1]


@pytest.mark.parametrize(
    "llr, more, error, message",
    [
        (np.zeros((4, 5)), {}, ValueError, r"llr must have shape \(\.\.\., 4\) .* got \(4, 5\)"),
        (0.0, {}, ValueError, r"llr must have shape \(\.\.\., 4\) .* got \(\)"),
        (np.zeros(4, complex), {}, TypeError, "llr must be real numbers, got dtype complex128"),
        (["a"] * 4, {}, TypeError, "llr must be real numbers"),
        (np.zeros(4), {"positive_bit": 2}, ValueError, "positive_bit must be 0 or 1, got 2"),
    ],
)
def test_soft_symbols_refuse(llr, more, error, message):
    with pytest.raises(error, match=message):
        soft_symbols(CONSTELLATIONS["square 16"], llr, **more)


def posterior(c, y, n0):
    """Mean and variance of the point sent, given y: Bayes' rule over all points."""
    weight = np.exp(-(np.abs(y[:, None] - c.points) ** 2) / n0)
    weight /= weight.sum(axis=1, keepdims=True)
    mean = weight @ c.points
    return mean, np.sum(weight * np.abs(c.points - mean[:, None]) ** 2, axis=1)


@pytest.mark.parametrize(
    "c",
    [pydemap.square_qam(4), pydemap.rectangular_qam(2, 1), pydemap.published_mapping("3GPP TS 38.211", 4)],
    ids=repr,
)
@pytest.mark.parametrize("n0", [0.2, 1.0, 10.0])
def test_there_and_back_is_the_posterior(c, n0):
    """With one bit an axis, the bits of a received symbol are independent, so that nothing is lost."""
    rng = np.random.default_rng(4)
    y = rng.choice(c.points, 200) + noise(rng, n0, 200)
    mean, variance = soft_symbols(c, SoftDemapper(c, output="float64")(y, n0))
    expected_mean, expected_variance = posterior(c, y, n0)
    np.testing.assert_allclose(mean, expected_mean, rtol=0, atol=1e-13)
    np.testing.assert_allclose(variance, expected_variance, rtol=1e-9, atol=1e-13)


def test_more_bits_an_axis_are_not_independent():
    """Exact LLRs then lose a little on the way there and back, max-log LLRs more."""
    c, n0 = CONSTELLATIONS["square 16"], 0.3
    rng = np.random.default_rng(5)
    y = rng.choice(c.points, 2000) + noise(rng, n0, 2000)
    best, _ = posterior(c, y, n0)
    lost = {}
    for rule in ("exact", "max-log"):
        mean, _ = soft_symbols(c, SoftDemapper(c, rule=rule, output="float64")(y, n0))
        lost[rule] = np.mean(np.abs(mean - best) ** 2)
    assert 1e-6 < lost["exact"] < lost["max-log"]


@each_constellation
def test_prior_there_and_back(c):
    """Without a gain the LLRs are the prior, and so the mean is that of the prior."""
    prior = np.random.default_rng(6).normal(0, 3, (10, c.bits_per_symbol))
    llr = SoftDemapper(c, output="float64")(np.ones(10, complex), 1.0, gain=0, prior=prior)
    np.testing.assert_allclose(soft_symbols(c, llr)[0], soft_symbols(c, prior)[0], rtol=0, atol=1e-14)


@each_constellation
def test_at_high_snr_the_mean_is_the_point_sent(c):
    llr = SoftDemapper(c)(c.points, 1e-6)
    mean, variance = soft_symbols(c, llr)
    np.testing.assert_allclose(mean, c.points, rtol=0, atol=1e-9)
    np.testing.assert_allclose(variance, 0, atol=1e-9)


# estimate_noise_variance


def known_interval(n0, count):
    """Where the mean of `count` |w|^2 lies but once in 10^6 runs: 2 count estimate / N0 is chi-square."""
    return n0 * chi2.ppf([5e-7, 1 - 5e-7], 2 * count) / (2 * count)


@pytest.mark.parametrize("n0", [1e-6, 0.02, 1.0, 300.0])
@pytest.mark.parametrize("gain", [None, 0.5 - 2j, "fading"])
def test_noise_variance_of_known_symbols(n0, gain):
    c = CONSTELLATIONS["cross 32"]
    rng = np.random.default_rng(7)
    shape = (50, 100)
    h = noise(rng, 1, shape) if gain == "fading" else gain
    sent = rng.choice(c.points, shape)
    w = noise(rng, n0, shape)
    estimate = estimate_noise_variance((1 if h is None else h) * sent + w, c, known=sent, gain=h)
    assert isinstance(estimate, float)
    assert estimate == pytest.approx(np.mean(np.abs(w) ** 2), rel=1e-9)
    low, high = known_interval(n0, w.size)
    assert low < estimate < high


@pytest.mark.parametrize("gain", [None, 3j, "fading"])
@pytest.mark.parametrize("name, n0", [("square 16", 1e-3), ("cross 32", 1e-4), ("2 points", 1e-2)])
def test_blind_noise_variance_at_high_snr(name, n0, gain):
    """Decisions are certain there, so the blind estimate is as sharp as that of known symbols."""
    c = CONSTELLATIONS[name]
    rng = np.random.default_rng(8)
    h = np.exp(2j * np.pi * rng.random(4000)) * rng.uniform(0.8, 2, 4000) if gain == "fading" else gain
    w = noise(rng, n0, 4000)
    y = (1 if h is None else h) * rng.choice(c.points, 4000) + w
    estimate = estimate_noise_variance(y, c, gain=h)
    assert isinstance(estimate, float)
    assert estimate == pytest.approx(np.mean(np.abs(w) ** 2), rel=1e-3)
    low, high = known_interval(n0, 4000)
    assert low < estimate < high


@pytest.mark.parametrize("es_n0_db", [0, 8, 14])
def test_blind_noise_variance_is_the_maximum_of_likelihood(es_n0_db):
    """No value a little above or below is more likely."""
    c, n0 = CONSTELLATIONS["square 16"], 10 ** (-es_n0_db / 10)
    rng = np.random.default_rng(9)
    y = rng.choice(c.points, 2000) + noise(rng, n0, 2000)

    def log_likelihood(value):
        metric = -(np.abs(y[:, None] - c.points) ** 2) / value
        return np.sum(np.logaddexp.reduce(metric, axis=1) - np.log(value))

    estimate = estimate_noise_variance(y, c)
    best = log_likelihood(estimate)
    assert best > max(log_likelihood(estimate * 1.002), log_likelihood(estimate / 1.002))


@pytest.mark.parametrize("es_n0_db", [0, 8, 14])
def test_blind_noise_variance_reaches_the_information_bound(es_n0_db):
    """Over many runs the mean is N0, and the spread that of Fisher's information on ln N0, for one sample

        E[(E[|y - s|^2 | y] / N0 - 1)^2]                                            (computed),

    1 at high Es/N0.  Both within 4 standard deviations of their own.
    """
    c, n0, count, runs = CONSTELLATIONS["square 16"], 10 ** (-es_n0_db / 10), 1500, 100
    rng = np.random.default_rng(10)

    def received(size):
        return rng.choice(c.points, size) + noise(rng, n0, size)

    distance = np.abs(received(100_000)[:, None] - c.points) ** 2
    weight = np.exp(-distance / n0)
    score = np.sum(weight * distance, axis=1) / np.sum(weight, axis=1) / n0 - 1
    spread = 1 / np.sqrt(count * np.mean(score**2))
    found = np.array([estimate_noise_variance(received(count), c) for _ in range(runs)]) / n0 - 1
    assert abs(found.mean()) < 4 * spread / np.sqrt(runs)
    assert abs(found.std(ddof=1) / spread - 1) < 4 / np.sqrt(2 * (runs - 1))


def test_noise_variance_leaves_out_what_is_not_finite():
    c, n0 = CONSTELLATIONS["square 16"], 0.01
    rng = np.random.default_rng(11)
    sent = rng.choice(c.points, 500)
    y = sent + noise(rng, n0, 500)
    h = np.ones(500, complex)
    spoilt, lost = y.copy(), h.copy()
    spoilt[[3, 70, 71]] = [np.nan, np.inf, complex(0, np.nan)]
    lost[200] = np.nan
    left = np.delete(np.arange(500), [3, 70, 71, 200])
    for known in (None, sent):
        estimate = estimate_noise_variance(spoilt, c, gain=lost, known=known)
        assert estimate == estimate_noise_variance(y[left], c, known=None if known is None else sent[left])


def test_noise_variance_types_and_broadcasting():
    c = CONSTELLATIONS["square 16"]
    rng = np.random.default_rng(12)
    sent = rng.choice(c.points, 20)
    y = (2 * sent + noise(rng, 0.1, (30, 20))).astype(np.complex64)
    expected = np.mean(np.abs(y - 2 * sent) ** 2)
    for gain in (2, 2.0, 2 + 0j, np.full((30, 1), 2, np.int8)):
        assert estimate_noise_variance(y, c, known=sent, gain=gain) == pytest.approx(expected, rel=1e-6)
    swapped = y.astype(">c8")
    assert estimate_noise_variance(swapped, c, gain=2) == estimate_noise_variance(y, c, gain=2)


def test_noise_variance_looks_at_so_many_samples():
    """Evenly picked: where the noise is small at every tenth symbol, a tenth of the samples see just that."""
    c = CONSTELLATIONS["square 16"]
    rng = np.random.default_rng(13)
    n0 = np.where(np.arange(10_001) % 10 == 0, 1e-6, 1e-2)
    y = rng.choice(c.points, 10_001) + np.sqrt(n0) * noise(rng, 1, 10_001)
    assert estimate_noise_variance(y, c, max_samples=1001) == pytest.approx(1e-6, rel=0.2)
    assert estimate_noise_variance(y, c, max_samples=10**9) == pytest.approx(0.9e-2, rel=0.1)


@pytest.mark.parametrize(
    "y, more, error, message",
    [
        ([1.0, 2.0], {}, TypeError, "y must be complex, got dtype float64"),
        ([], {}, TypeError, "y must be complex"),
        (np.empty(0, complex), {}, ValueError, "y must hold at least one finite sample"),
        ([complex(np.nan, 0)], {}, ValueError, "y must hold at least one finite sample"),
        ([1j], {"gain": np.nan}, ValueError, "y must hold at least one finite sample"),
        ([1j], {"gain": "x"}, TypeError, "gain must be real or complex numbers"),
        ([1j], {"gain": [1, 2]}, ValueError, r"gain of shape \(2,\) does not broadcast to \(1,\)"),
        ([1j], {"known": "x"}, TypeError, "known must be complex symbols"),
        ([1j], {"known": [1, 2]}, ValueError, r"known of shape \(2,\) does not broadcast to \(1,\)"),
        ([1j], {"max_samples": 0}, ValueError, "max_samples must be an integer >= 1, got 0"),
    ],
)
def test_noise_variance_refuses(y, more, error, message):
    with pytest.raises(error, match=message):
        estimate_noise_variance(y, CONSTELLATIONS["square 16"], **more)


# Words and demappers are values


def test_word():
    assert [(w.limit, w.dtype) for w in (Word(2, 1), Word(8, 1), Word(9, 1), Word(16, 1))] == [
        (1, np.int8),
        (127, np.int8),
        (255, np.int16),
        (32767, np.int16),
    ]
    word = Word(np.int64(6), np.float32(0.5))
    assert word == Word(6, 0.5) and hash(word) == hash(Word(6, 0.5))
    assert (type(word.bits), type(word.step)) == (int, float)
    assert repr(word) == "Word(bits=6, step=0.5)" and eval(repr(word)) == word
    assert word != Word(7, 0.5) and word != Word(6, 0.25) and word != (6, 0.5)
    with pytest.raises(FrozenInstanceError):
        word.step = 1.0
    with pytest.raises(FrozenInstanceError):
        del word.bits


def demappers():
    """Every combination of settings, no two alike."""
    for c, output, bit in itertools.product(CONSTELLATIONS.values(), OUTPUTS, (0, 1)):
        for rule in ("exact", "max-log"):
            yield SoftDemapper(c, rule=rule, output=output, positive_bit=bit)


def test_demappers_are_equal_by_value():
    for (i, one), (j, other) in itertools.product(enumerate(demappers()), enumerate(demappers())):
        assert (one == other) == (i == j)
        assert (one != other) == (i != j)
        if i == j:
            assert one is not other and hash(one) == hash(other)
    assert len(set(demappers()) | set(demappers())) == len(list(demappers()))
    assert SoftDemapper(CONSTELLATIONS["square 16"]) != "exact"
    same_points = Constellation(CONSTELLATIONS["cross 32"].points, CONSTELLATIONS["cross 32"].labels)
    assert SoftDemapper(same_points) == SoftDemapper(CONSTELLATIONS["cross 32"])


def test_demapper_attributes():
    demapper = SoftDemapper(
        CONSTELLATIONS["cross 32"], rule="max-log", output=Word(6, 0.5), positive_bit=True
    )
    assert demapper.constellation is CONSTELLATIONS["cross 32"]
    assert (demapper.rule, demapper.output, demapper.positive_bit) == ("max-log", Word(6, 0.5), 1)
    assert (demapper.dtype, demapper.family, demapper.boxes) == (np.dtype(np.int8), "boxes", 2)
    assert SoftDemapper(CONSTELLATIONS["16 points"]).boxes == 0
    assert [SoftDemapper(CONSTELLATIONS["square 16"], output=o).dtype for o in OUTPUTS] == [
        np.float32,
        np.float64,
        np.int8,
        np.int16,
    ]


def test_demapper_is_immutable():
    demapper = SoftDemapper(CONSTELLATIONS["square 16"])
    for name in (
        "constellation",
        "rule",
        "output",
        "positive_bit",
        "dtype",
        "family",
        "boxes",
        "_plan",
        "new",
    ):
        with pytest.raises(AttributeError, match="immutable"):
            setattr(demapper, name, None)
        with pytest.raises(AttributeError, match="immutable"):
            delattr(demapper, name)
    assert demapper == SoftDemapper(CONSTELLATIONS["square 16"])
    with pytest.raises(ValueError, match="read-only"):
        demapper.constellation.points[0] = 0


def test_demapper_repr():
    demapper = SoftDemapper(CONSTELLATIONS["square 16"], output=Word(6, 0.5))
    assert (
        repr(demapper)
        == f"SoftDemapper({demapper.constellation!r}, rule='exact', output=Word(bits=6, step=0.5))"
    )
    assert repr(SoftDemapper(CONSTELLATIONS["square 16"], positive_bit=1)).endswith(", positive_bit=1)")


@pytest.mark.parametrize(
    "clone",
    [
        copy.copy,
        copy.deepcopy,
        *(lambda d, p=p: pickle.loads(pickle.dumps(d, p)) for p in range(pickle.HIGHEST_PROTOCOL + 1)),
    ],
)
def test_copies_of_a_demapper_give_the_same_bits(clone):
    rng = np.random.default_rng(14)
    y = noise(rng, 1, 100)
    for demapper in demappers():
        twin = clone(demapper)
        assert twin == demapper and hash(twin) == hash(demapper)
        assert same(twin(y, 0.1), demapper(y, 0.1))


def test_a_demapper_outlives_what_it_was_made_of():
    points = np.array([1, 1j, -1, -1j])
    demapper = SoftDemapper(Constellation(points, [0, 1, 3, 2]))
    expected = demapper([0.3 + 0.2j], 0.5)
    points[:] = np.nan
    assert same(demapper([0.3 + 0.2j], 0.5), expected)


@pytest.mark.parametrize("output", OUTPUTS, ids=str)
@pytest.mark.parametrize("name", ["square 16", "cross 32", "16 points"])
def test_threads_share_a_demapper(name, output):
    """Each thread with data of its own, all at once, gets the bits it gets alone."""
    c = CONSTELLATIONS[name]
    shared = SoftDemapper(c, output=output)
    count, calls = 8, 5
    rng = np.random.default_rng(15)
    tasks = []
    for i in range(count):
        size = 3000 + 17 * i
        prior = rng.normal(0, 2, (size, c.bits_per_symbol))
        tasks.append((noise(rng, 1, size), rng.uniform(0.01, 1, size), noise(rng, 1, size), prior))
    alone = [
        (
            SoftDemapper(c, output=output)(y, n0, gain=h, prior=la),
            SoftDemapper(c, output=output).slice(y, gain=h),
        )
        for y, n0, h, la in tasks
    ]
    start = threading.Barrier(count)
    found = [[] for _ in range(count)]

    def work(i):
        y, n0, h, la = tasks[i]
        start.wait()
        for _ in range(calls):
            found[i].append((shared(y, n0, gain=h, prior=la, threads=1 + i % 2), shared.slice(y, gain=h)))

    workers = [threading.Thread(target=work, args=(i,)) for i in range(count)]
    for worker in workers:
        worker.start()
    for worker in workers:
        worker.join()
    for got, (llr, labels) in zip(found, alone, strict=True):
        assert len(got) == calls
        assert all(same(a, llr) and same(b, labels) for a, b in got)


# What the arrays may be


@pytest.mark.parametrize("output", OUTPUTS, ids=str)
def test_byte_order_does_not_matter(output):
    demapper = SoftDemapper(CONSTELLATIONS["cross 32"], output=output)
    rng = np.random.default_rng(16)
    real, cplx = ("f8", "c16") if output == "float64" else ("f4", "c8")
    y, h = noise(rng, 1, 50).astype(cplx), noise(rng, 1, 50).astype(cplx)
    n0, prior = rng.uniform(0.01, 1, 50).astype(real), rng.normal(0, 2, (50, 5)).astype(real)
    expected = demapper(y, n0, gain=h, prior=prior)
    for order in "<>":
        ys, hs = y.astype(order + cplx), h.astype(order + cplx)
        got = demapper(ys, n0.astype(order + real), gain=hs, prior=prior.astype(order + real))
        assert same(got, expected)
        assert same(demapper.slice(ys, gain=hs), demapper.slice(y, gain=h))


@pytest.mark.parametrize("name", ["square 16", "cross 32", "16 points"])
@pytest.mark.parametrize("rule", ["exact", "max-log"])
def test_samples_beyond_float32_saturate(name, rule):
    """A complex128 sample or gain that complex64 cannot hold counts as its largest; no NaN, no warning."""
    c = CONSTELLATIONS[name]
    demapper = SoftDemapper(c, rule=rule)
    y = np.array([1e300, -1e39j, complex(1e200, -1e308), complex(-1e39, 1e-320), 1e-310, 0.5 + 0.5j])
    held = np.array(
        [LARGEST, -1j * LARGEST, complex(LARGEST, -LARGEST), -LARGEST, 0, 0.5 + 0.5j], np.complex64
    )
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for more, held_more in (
            ({}, {}),
            ({"gain": y}, {"gain": held}),
            ({"gain": y[::-1]}, {"gain": held[::-1]}),
        ):
            llr = demapper(y, 0.1, **more)
            assert np.isfinite(llr).all()
            assert same(llr, demapper(held, 0.1, **held_more))
            assert same(demapper.slice(y, **more), demapper.slice(held, **held_more))
    lost = demapper(np.array([complex(np.inf, 1e300), complex(1e300, np.nan)]), 0.1)
    assert np.isnan(lost).all()


@pytest.mark.parametrize("output", ["float32", Word(6, 0.5)], ids=str)
@pytest.mark.parametrize("name", ["square 16", "cross 32", "16 points"])
def test_noise_variances_beyond_float32(name, output):
    """What float32 would make 0 or infinite stays noise: certain bits, or none at all, and never an error."""
    c = CONSTELLATIONS[name]
    demapper = SoftDemapper(c, output=output)
    most = output.limit if isinstance(output, Word) else LARGEST
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for n0 in (5e-324, 1e-300, 1e-46):
            for given in (n0, np.full(c.order, n0)):
                np.testing.assert_array_equal(demapper(c.points, given), np.where(c.bits == 0, most, -most))
        for n0 in (1e39, 1.7e308):
            for given in (n0, np.full(c.order, n0)):
                np.testing.assert_allclose(demapper(c.points, given), 0, atol=1e-37)
    assert np.isfinite(demapper(c.points, np.geomspace(5e-324, 1.7e308, c.order))).all()


@pytest.mark.parametrize("output", OUTPUTS, ids=str)
def test_real_gains_and_whole_numbers(output):
    """Integer and float gains, N0 and priors are the numbers that they are."""
    demapper = SoftDemapper(CONSTELLATIONS["square 16"], output=output)
    rng = np.random.default_rng(17)
    y = noise(rng, 4, (6, 5))
    expected = demapper(y, 2.0, gain=np.full((6, 5), -2 + 0j))
    for gain in (
        -2,
        -2.0,
        np.float32(-2),
        np.int8(-2),
        np.full(5, -2),
        np.full((6, 1), -2, np.int16),
        [-2.0] * 5,
    ):
        assert same(demapper(y, 2, gain=gain), expected)
        assert same(demapper.slice(y, gain=gain), demapper.slice(y, gain=np.full((6, 5), -2 + 0j)))
    for n0 in (np.uint8(2), np.full(5, 2), np.full((6, 1), 2, np.float16), [[2]] * 6):
        assert same(demapper(y, n0, gain=-2), expected)
    whole = rng.integers(-9, 10, (6, 5, 4))
    expected = demapper(y, 2.0, prior=whole.astype(float), extrinsic=True)
    for prior in (
        whole,
        whole.astype(np.int8),
        whole.astype(">i4"),
        whole.astype(np.float16),
        whole.tolist(),
    ):
        assert same(demapper(y, 2.0, prior=prior, extrinsic=True), expected)
    row = whole[0, 0]
    expected = demapper(y, 2.0, prior=np.broadcast_to(row, (6, 5, 4)).astype(float))
    assert same(demapper(y, 2.0, prior=row), expected)
    assert same(demapper(y, 2.0, prior=3), demapper(y, 2.0, prior=np.full((6, 5, 4), 3.0)))


@pytest.mark.parametrize("output", OUTPUTS, ids=str)
@pytest.mark.parametrize("name", ["square 16", "cross 32", "16 points"])
def test_one_symbol_without_a_dimension(name, output):
    c = CONSTELLATIONS[name]
    n = c.bits_per_symbol
    demapper = SoftDemapper(c, output=output)
    expected = demapper(np.array([0.3 + 0.9j]), 0.1, gain=[2j], prior=np.ones((1, n)))[0]
    for y in (0.3 + 0.9j, np.complex128(0.3 + 0.9j), np.array(0.3 + 0.9j)):
        llr = demapper(y, np.array(0.1), gain=np.array(2j), prior=np.ones(n))
        assert same(llr, expected)
        out = np.empty(n, demapper.dtype)
        assert demapper(y, 0.1, gain=2j, prior=1, out=out, threads=3) is out
        assert same(out, expected)
        label = demapper.slice(y, gain=2j)
        assert label.shape == () and label.dtype == np.uint16
        assert label == c.labels[np.abs(y - 2j * c.points).argmin()]


@pytest.mark.parametrize("output", OUTPUTS, ids=str)
@pytest.mark.parametrize("shape", [(0,), (0, 3), (3, 0)])
def test_no_symbols(shape, output):
    demapper = SoftDemapper(CONSTELLATIONS["cross 32"], output=output)
    y = np.empty(shape, np.complex64)
    out = np.empty((*shape, 5), demapper.dtype)
    for n0 in (0.1, np.full(shape, 0.1)):
        for more in ({}, {"gain": 1j, "prior": 0.5}, {"gain": np.ones(shape), "prior": np.ones((*shape, 5))}):
            assert same(demapper(y, n0, threads=4, **more), out)
            assert demapper(y, n0, out=out, **more) is out
    assert same(demapper.slice(y), np.empty(shape, np.uint16))


# The library itself


def test_levels_there_and_back():
    levels = pydemap.available_isas()
    assert levels[-1] == "baseline" and len(set(levels)) == len(levels)
    before = pydemap.isa()
    assert before in levels
    try:
        for name in levels:
            assert pydemap.use_isa(name) is None
            assert pydemap.isa() == name
            with pytest.raises(ValueError, match="instruction-set level must be one of 'auto', "):
                pydemap.use_isa("none such")
            assert pydemap.isa() == name
        pydemap.use_isa("auto")
        assert pydemap.isa() == levels[0]
    finally:
        pydemap.use_isa(before)


@pytest.mark.parametrize("name", [None, 3, b"v3"])
def test_a_level_is_named_by_a_string(name):
    with pytest.raises(ValueError, match="instruction-set level must be one of"):
        pydemap.use_isa(name)


def test_include_directory():
    directory = pydemap.get_include()
    assert isinstance(directory, str) and Path(directory).is_absolute()
    assert (Path(directory) / "pydemap.h").is_file()
    assert (Path(directory).parent / "src" / "kernels.c").is_file()


def test_all_names_exist_and_are_documented():
    for name in pydemap.__all__:
        assert getattr(pydemap, name).__doc__
