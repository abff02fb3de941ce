"""LLRs and hard decisions against the reference, closed forms, published vectors and error rates."""

import csv
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from outside import DVB_C_32_QUADRANT_I, DVB_C_32_QUADRANTS, GOLDEN_TOLERANCE

import pydemap
from pydemap import SoftDemapper, Word, reference

rng_seeds = st.integers(0, 2**32 - 1)
quick = settings(derandomize=True, deadline=None, max_examples=200)


def rings(counts, radii, seed):
    points = np.concatenate(
        [r * np.exp(2j * np.pi * np.arange(n) / n) for n, r in zip(counts, radii, strict=True)]
    )
    return pydemap.Constellation(points, np.random.default_rng(seed).permutation(points.size))


def scattered(order, seed):
    rng = np.random.default_rng(seed)
    points = rng.standard_normal(order) + 1j * rng.standard_normal(order)
    return pydemap.Constellation(points, rng.permutation(order))


def moved_grid(c, factor, shift):
    return pydemap.Constellation(c.points * factor + shift, c.labels)


def relabelled(c, change):
    """The same points, each label turned by a bijection of 0 .. M-1."""
    return pydemap.Constellation(c.points, change(np.asarray(c.labels)))


CONSTELLATIONS = [
    pydemap.Constellation([-1, 1], [0, 1]),
    *(pydemap.square_qam(m) for m in (4, 16, 64, 256, 1024)),
    pydemap.rectangular_qam(4, 2),
    pydemap.rectangular_qam(2, 16),
    pydemap.rectangular_qam(16, 8),
    *(pydemap.cross_qam(m) for m in (8, 32, 128, 512)),
    pydemap.published_mapping("3GPP TS 38.211", 64),
    pydemap.published_mapping("IEEE 802.11", 256),
    *(pydemap.published_mapping("ITU-T G.9701", m) for m in (8, 32, 64, 128)),
    moved_grid(pydemap.square_qam(16), 3.7, 0.5 - 1.25j),
    moved_grid(pydemap.cross_qam(32), 1e-3, 0),
    relabelled(pydemap.square_qam(64), lambda label: label ^ 0b101101),
    relabelled(pydemap.square_qam(16), lambda label: (label * 5 + 3) % 16),
    rings([8], [1.0], 1),
    rings([4, 12], [0.5, 1.2], 2),
    scattered(2, 3),
    scattered(8, 4),
    scattered(128, 5),
]
FOLD = [c for c in CONSTELLATIONS if SoftDemapper(c).family == "fold"]

EPS = {"float32": 2.0**-23, "float64": 2.0**-52}


def real_type(output):
    return "float64" if output == "float64" else "float32"


def complex_normal(rng, shape):
    return rng.standard_normal(shape) + 1j * rng.standard_normal(shape)


def received(c, es_n0_db, count, seed):
    """Transmitted point numbers, received samples, N0."""
    rng = np.random.default_rng(seed)
    n0 = c.mean_energy * 10 ** (-es_n0_db / 10)
    sent = rng.integers(0, c.order, count)
    return sent, c.points[sent] + np.sqrt(n0 / 2) * complex_normal(rng, count), n0


def largest_metric(c, y, n0, gain=1.0):
    """max over points of |y - h x|^2 / N0: what the terms of an LLR are made of."""
    distance = np.asarray(y)[..., None] - np.asarray(gain)[..., None] * c.points
    return (np.abs(distance) ** 2).max(-1) / n0


# Kernels against the definition.


@st.composite
def layouts(draw, array):
    """The same values in another memory layout."""
    array = np.asarray(array)
    kind = draw(st.sampled_from(["plain", "fortran", "reversed", "strided", "padded"]))
    if kind == "fortran" and array.ndim:
        return np.asfortranarray(array)
    if kind == "reversed" and array.ndim:
        return np.ascontiguousarray(array[::-1])[::-1]
    if kind in ("strided", "padded") and array.ndim:
        step = 3 if kind == "strided" else 1
        base = np.full(array.shape[:-1] + (array.shape[-1] * step + 2,), np.nan, array.dtype)
        view = base[..., 1 : 1 + array.shape[-1] * step : step]
        view[...] = array
        return view
    return array


@st.composite
def broadcastable(draw, shape):
    """A shape that broadcasts to the given one."""
    kept = draw(st.integers(0, len(shape)))
    return tuple(size if draw(st.booleans()) else 1 for size in shape[len(shape) - kept :])


@st.composite
def calls(draw, constellations=CONSTELLATIONS, rules=("exact", "max-log", "linear")):
    """A demapper's constellation and settings, and the arguments of a call."""
    c = draw(st.sampled_from(constellations))
    rule = draw(st.sampled_from([r for r in rules if r != "linear" or c in FOLD]))
    output = draw(st.sampled_from(list(EPS)))
    shape = draw(st.sampled_from([(), (1,), (7,), (33,), (3, 5), (2, 1, 4), (0,), (2, 0)]))
    rng = np.random.default_rng(draw(rng_seeds))
    real = draw(st.sampled_from(list(EPS)))

    def array(values, dtype):
        return draw(layouts(np.asarray(values).astype(dtype)))

    n0_shape, gain_shape = draw(broadcastable(shape)), draw(broadcastable(shape))
    n0 = c.mean_energy * 10 ** (-rng.uniform(-25, 45, n0_shape) / 10)
    gain = complex_normal(rng, gain_shape) if draw(st.booleans()) else None
    y = rng.choice(c.points, shape) * (1 if gain is None else gain) + np.sqrt(n0 / 2) * complex_normal(
        rng, shape
    )
    prior = None
    if draw(st.booleans()):
        prior = array(rng.normal(0, 5, draw(broadcastable((*shape, c.bits_per_symbol)))), real)
    return (
        c,
        {"rule": rule, "output": output, "positive_bit": draw(st.sampled_from([0, 1]))},
        array(y, np.result_type(real, np.complex64)),
        array(n0, real),
        {
            "gain": None if gain is None else array(gain, np.result_type(real, np.complex64)),
            "prior": prior,
            "extrinsic": draw(st.booleans()),
        },
    )


@quick
@given(calls())
def test_equals_reference(call):
    """Within a few roundings of the largest term of the sums, whatever the shapes and layouts."""
    c, how, y, n0, more = call
    llr = SoftDemapper(c, **how)(y, n0, **more)
    assert llr.dtype == how["output"] and llr.shape == (*y.shape, c.bits_per_symbol)
    expected = reference.llr(y, n0, c, rule=how["rule"], positive_bit=how["positive_bit"], **more)
    prior = 0 if more["prior"] is None else np.abs(np.broadcast_to(more["prior"], llr.shape)).sum(-1)
    gain = 1.0 if more["gain"] is None else more["gain"].astype(complex)
    scale = 1 + largest_metric(c, y.astype(complex), n0.astype(float), gain) + prior
    error = np.abs(llr - expected) / (EPS[how["output"]] * scale[..., None])
    assert error.max(initial=0) < 8, f"{error.max()} roundings, {c}, {how}"


@quick
@given(calls(), st.data())
def test_out_is_filled_and_returned(call, data):
    c, how, y, n0, more = call
    demapper = SoftDemapper(c, **how)
    out = np.full((*y.shape, c.bits_per_symbol), np.nan, how["output"])
    assert demapper(y, n0, out=out, **more) is out
    assert np.array_equal(out, demapper(y, n0, **more))


@quick
@given(calls(), st.integers(0, 33), st.integers(2, 5))
def test_split_equals_whole(call, cut, threads):
    """The same bits for a part as for the whole, for any number of threads, and for each symbol alone."""
    c, how, y, n0, more = call
    demapper = SoftDemapper(c, **how)
    whole = demapper(y, n0, **more)
    assert np.array_equal(demapper(y, n0, threads=threads, **more), whole)
    if y.ndim == 1:
        n0 = np.broadcast_to(n0, y.shape)
        gain = None if more["gain"] is None else np.broadcast_to(more["gain"], y.shape)
        prior = None if more["prior"] is None else np.broadcast_to(more["prior"], whole.shape)
        for part in (slice(None, cut), slice(cut, None)):
            of_part = {
                "gain": None if gain is None else gain[part],
                "prior": None if prior is None else prior[part],
                "extrinsic": more["extrinsic"],
            }
            assert np.array_equal(demapper(y[part], n0[part], **of_part), whole[part])


@pytest.mark.parametrize("threads", [2, 3, 64])
@pytest.mark.parametrize("output", ["float32", "float64", Word(6, 0.5)])
def test_threads_share_a_long_call(output, threads):
    """Enough symbols for every thread to have a share, all arguments given for each symbol or for all."""
    c = pydemap.cross_qam(128)
    count = 30_011
    rng = np.random.default_rng(1)
    y, gain = complex_normal(rng, (2, count))
    n0 = rng.uniform(0.01, 1, count)
    prior = rng.normal(0, 3, (count, 7))
    demapper = SoftDemapper(c, rule="max-log", output=output)
    for n0_given, gain_given in ((n0, gain), (n0, 1.5j), (0.1, gain)):
        one, many = (
            demapper(y, n0_given, gain=gain_given, prior=prior, extrinsic=True, threads=t)
            for t in (1, threads)
        )
        assert np.array_equal(one, many)


@quick
@given(calls(rules=("exact", "max-log")), rng_seeds)
def test_extrinsic_is_posterior_less_prior(call, seed):
    c, how, y, n0, more = call
    demapper = SoftDemapper(c, **how)
    prior = np.random.default_rng(seed).normal(0, 4, (*y.shape, c.bits_per_symbol)).astype(how["output"])
    posterior = demapper(y, n0, gain=more["gain"], prior=prior)
    extrinsic = demapper(y, n0, gain=more["gain"], prior=prior, extrinsic=True)
    np.testing.assert_array_equal(extrinsic, posterior - prior)


@quick
@given(calls(rules=("exact", "max-log")))
def test_prior_of_zero_is_none(call):
    """An absent prior and one that knows nothing agree to a rounding of the largest term."""
    c, how, y, n0, more = call
    demapper = SoftDemapper(c, **how)
    zeros = np.zeros((*y.shape, c.bits_per_symbol), how["output"])
    none, zero = (demapper(y, n0, gain=more["gain"], prior=p).astype(float) for p in (None, zeros))
    gain = 1.0 if more["gain"] is None else more["gain"].astype(complex)
    scale = 1 + largest_metric(c, y.astype(complex), n0.astype(float), gain)
    assert (np.abs(none - zero) <= 8 * EPS[how["output"]] * scale[..., None]).all()


@quick
@given(calls())
def test_positive_bit_turns_every_sign(call):
    c, how, y, n0, more = call
    zero, one = (SoftDemapper(c, **{**how, "positive_bit": bit}) for bit in (0, 1))
    turned = {**more, "prior": None if more["prior"] is None else -more["prior"]}
    assert np.array_equal(one(y, n0, **turned), -zero(y, n0, **more))


@quick
@given(calls(), st.integers(2, 16), st.sampled_from([0.01, 0.125, 0.3, 1.0, 7.5]))
def test_words_are_rounded_float32(call, bits, step):
    """rint(llr / step) of the float32 LLR, saturated at +-(2^(bits-1) - 1), an erasure where y is NaN."""
    c, how, y, n0, more = call
    y = np.ascontiguousarray(y).reshape(y.shape)
    y.reshape(-1)[-1:] = np.nan
    word = Word(bits, step)
    counts = SoftDemapper(c, **{**how, "output": word})(y, n0, **more)
    llr = SoftDemapper(c, **{**how, "output": "float32"})(y, n0, **more)
    limit = 2 ** (bits - 1) - 1
    expected = np.nan_to_num(np.clip(np.rint(llr / np.float32(step)), -limit, limit))
    assert counts.dtype == word.dtype == ("int8" if bits <= 8 else "int16") and word.limit == limit
    assert np.array_equal(counts, expected)


@pytest.mark.parametrize("bits", [2, 5, 8, 12, 16])
def test_words_round_half_to_even_and_saturate_at_both_rails(bits):
    """BPSK with N0 = 4 has the LLR y: every half step and far beyond both rails."""
    demapper = SoftDemapper(pydemap.Constellation([-1, 1], [1, 0]), rule="max-log", output=Word(bits, 0.5))
    limit = 2 ** (bits - 1) - 1
    wanted = np.arange(-2 * limit - 6, 2 * limit + 7) / 2
    counts = demapper((wanted * 0.5).astype(np.complex64), 4.0)[:, 0]
    assert np.array_equal(counts, np.clip(np.rint(wanted), -limit, limit))
    assert counts.min() == -limit and counts.max() == limit


@quick
@given(calls(rules=("max-log",)))
def test_slice_is_nearest_point_and_max_log_sign(call):
    """The label of the nearest point, whose bits are the signs of the max-log LLRs: away from ties, where a
    rounding may choose."""
    c, how, y, n0, more = call
    label = SoftDemapper(c, **how).slice(y, gain=more["gain"])
    assert label.shape == y.shape and label.dtype.kind in "iu"
    gain = np.broadcast_to(1.0 if more["gain"] is None else more["gain"].astype(complex), y.shape)
    distance = np.abs(y.astype(complex)[..., None] - gain[..., None] * c.points) ** 2
    nearest = np.asarray(c.labels)[distance.argmin(-1)]
    first, second = np.moveaxis(np.sort(distance, axis=-1)[..., :2], -1, 0)
    clear = second - first > 1e-5 * distance.max(-1)
    assert np.array_equal(label[clear], nearest[clear])
    llr = SoftDemapper(c, **{**how, "positive_bit": 0})(y, n0, gain=more["gain"])
    bits = nearest[..., None] >> np.arange(c.bits_per_symbol)[::-1] & 1
    assert np.array_equal((llr < 0)[clear], bits[clear] == 1)


@pytest.mark.parametrize("family", ["square", "cross"])
def test_large_orders_equal_reference(family):
    """The largest constellations, a few symbols each."""
    for order in {"square": (4096, 16384, 65536), "cross": (2048, 8192, 32768)}[family]:
        c = getattr(pydemap, f"{family}_qam")(order)
        _, y, n0 = received(c, 25, 5, order)
        scale = 1 + largest_metric(c, y, n0)
        for rule in ("exact", "max-log"):
            expected = reference.llr(y, n0, c, rule=rule)
            for output, eps in EPS.items():
                y_given = y.astype(np.result_type(output, np.complex64))
                error = (
                    np.abs(SoftDemapper(c, rule=rule, output=output)(y_given, n0) - expected) / scale[:, None]
                )
                assert error.max() < 8 * eps, (order, rule, output)


# Exact and max-log: how far apart, and how they meet.


@quick
@given(calls(rules=("exact",)))
def test_max_log_is_within_n_minus_1_times_ln_2(call):
    """Each sum of 2^(n-1) terms exceeds its largest by 0 to (n - 1) ln 2, priors or not (textbook bound)."""
    c, how, y, n0, more = call
    exact, max_log = (SoftDemapper(c, **{**how, "rule": r})(y, n0, **more) for r in ("exact", "max-log"))
    gain = 1.0 if more["gain"] is None else more["gain"].astype(complex)
    slack = 8 * EPS[how["output"]] * (1 + largest_metric(c, y.astype(complex), n0.astype(float), gain))
    slack = (
        slack
        + 8 * EPS[how["output"]] * (0 if more["prior"] is None else np.abs(more["prior"]).max(initial=0)) * 10
    )
    limit = (c.bits_per_symbol - 1) * np.log(2)
    assert (np.abs(exact.astype(float) - max_log) <= limit + slack[..., None]).all()


def test_max_log_reaches_the_bound():
    """At the centre of a ring that holds all points with b0 = 0, those with b0 = 1 far away: the one sum is
    2^(n-1) times its largest term, the other little more than its own."""
    ring = np.exp(2j * np.pi * np.arange(8) / 8)
    far = 4 + np.arange(8)
    c = pydemap.Constellation(np.concatenate([ring, far]), np.arange(16))
    exact, max_log = (
        SoftDemapper(c, rule=r, output="float64")(np.zeros(1, complex), 0.01) for r in ("exact", "max-log")
    )
    np.testing.assert_allclose(exact[0, 0] - max_log[0, 0], 3 * np.log(2), rtol=1e-10)


@pytest.mark.parametrize("c", CONSTELLATIONS, ids=str)
def test_exact_tends_to_max_log_at_the_analytic_rate(c):
    """exact - max-log = ln(1 + sum of e^-(gap / N0)) of the one side less the other: as N0 falls, the
    next-nearest points' e^-(gap / N0) are all that is left (analysis: the first term of the series)."""
    rng = np.random.default_rng(4)
    spacing = c.min_distance
    y = rng.choice(c.points, 400) + 0.6 * spacing * complex_normal(rng, 400)
    n0 = spacing**2 / 8
    for _ in range(3):
        n0 = n0 / 2
        exact, max_log = (SoftDemapper(c, rule=r, output="float64")(y, n0) for r in ("exact", "max-log"))
        metric = np.abs(y[:, None] - c.points) ** 2 / n0
        for k, bit in enumerate(c.bits.T):
            terms = []
            for value in (0, 1):
                side = np.sort(metric[:, bit == value], axis=1)
                terms.append(np.exp(side[:, :1] - side[:, 1:]).sum(1))
            first_order = terms[0] - terms[1]
            second_order = terms[0] ** 2 + terms[1] ** 2
            roundings = 100 * EPS["float64"] * (1 + metric.max(1))
            assert (np.abs(exact[:, k] - max_log[:, k] - first_order) <= second_order + roundings).all()


# Closed forms, with a = 1 and noise variance N0 on the integer grid.


def on_grid(c, a):
    """A demapper of the library's unit-energy grid driven in coordinates with half-spacing 1."""

    def llr(y, n0, rule):
        return SoftDemapper(c, rule=rule, output="float64")(np.asarray(y) * a, n0 * a * a)

    return llr


LINE = np.linspace(-12, 12, 997) + 0.0007


@pytest.mark.parametrize("rule", ["exact", "max-log"])
def test_two_points_on_the_real_axis(rule):
    """BPSK: 4 sqrt(Es) Re(y) / N0 (textbook)."""
    c = pydemap.Constellation([-1.5, 1.5], [1, 0])
    y = LINE + 0.3j * LINE[::-1]
    llr = SoftDemapper(c, rule=rule, output="float64")(y, 0.7)[:, 0]
    np.testing.assert_allclose(llr, 4 * 1.5 * LINE / 0.7, rtol=1e-14, atol=1e-15)


@pytest.mark.parametrize("rule", ["exact", "max-log"])
def test_two_points_on_the_diagonal(rule):
    """3GPP TS 38.211 clause 5.1.2 BPSK, on the diagonal: 2 sqrt 2 (Re y + Im y) / N0 (textbook)."""
    c = pydemap.published_mapping("3GPP TS 38.211", 2)
    y = LINE + 0.3j * LINE[::-1]
    expected = 2 * np.sqrt(2) * (y.real + y.imag) / 0.7
    llr = SoftDemapper(c, rule=rule, output="float64")(y, 0.7)[:, 0]
    np.testing.assert_allclose(llr, expected, rtol=1e-14, atol=1e-14 * np.abs(expected).max())


@pytest.mark.parametrize("rule", ["exact", "max-log"])
def test_four_points(rule):
    """3GPP TS 38.211 QPSK: 2 sqrt 2 sqrt(Es) Re(y) / N0, and Im(y) for b1; exact = max-log (textbook)."""
    c = pydemap.published_mapping("3GPP TS 38.211", 4)
    y = LINE + 0.3j * LINE[::-1]
    expected = 2 * np.sqrt(2) * np.stack([y.real, y.imag], -1) / 0.7
    np.testing.assert_allclose(
        SoftDemapper(c, rule=rule, output="float64")(y, 0.7), expected, rtol=1e-14, atol=1e-15
    )


@pytest.mark.parametrize("n0", [0.3, 2.0, 30.0])
def test_exact_16_qam(n0):
    """3GPP TS 38.211 16QAM, bits b0 and b2 of Re y, b1 and b3 of Im y (computed: four exponentials a bit)."""
    llr = on_grid(pydemap.published_mapping("3GPP TS 38.211", 16), 10**-0.5)
    i, q = LINE, LINE[::-1] * 0.7
    for axis, y in enumerate((i, q)):
        first = np.logaddexp(2 * y / n0, (6 * y - 8) / n0) - np.logaddexp(-2 * y / n0, (-6 * y - 8) / n0)
        second = 8 / n0 + np.logaddexp(2 * y / n0, -2 * y / n0) - np.logaddexp(6 * y / n0, -6 * y / n0)
        got = llr(i + 1j * q, n0, "exact")
        np.testing.assert_allclose(got[:, axis], first, rtol=1e-13, atol=1e-12 * 72 / n0)
        np.testing.assert_allclose(got[:, axis + 2], second, rtol=1e-13, atol=1e-12 * 72 / n0)


def outermost(y, levels):
    """N0 times the max-log LLR of the bit that is the sign, on an axis of `levels` levels."""
    k = np.minimum(np.floor(np.abs(y) / 2), levels / 2 - 1)
    return 4 * (k + 1) * (y - k * np.sign(y))


@pytest.mark.parametrize("order", [16, 64, 256, 1024])
def test_max_log_by_pieces(order):
    """Straight pieces of each bit, 3GPP TS 38.211 labels (computed; in line with Tosato and Bisaglia, ICC
    2002, whose abstract alone was read)."""
    side = round(order**0.5)
    llr = on_grid(pydemap.published_mapping("3GPP TS 38.211", order), (2 * (order - 1) / 3) ** -0.5)
    y = LINE * side / 4
    a = np.abs(y)
    pieces = [outermost(y, side)]
    if order == 16:
        pieces.append(4 * (2 - a))
    if order == 64:
        pieces.append(np.select([a <= 2, a <= 6], [8 * (3 - a), 4 * (4 - a)], 8 * (5 - a)))
        pieces.append(np.where(a <= 4, 4 * (a - 2), 4 * (6 - a)))
    if order == 256:
        pieces.append(outermost(8 - a, 8))
    n0 = 0.9
    for axis, got in enumerate((llr(y + 0.1j, n0, "max-log"), llr(0.1 + 1j * y, n0, "max-log"))):
        for depth, piece in enumerate(pieces):
            np.testing.assert_allclose(n0 * got[:, 2 * depth + axis], piece, rtol=1e-12, atol=1e-12 * side**2)


@pytest.mark.parametrize("order", [4, 16, 64, 256, 1024, 4096, 16384, 65536])
def test_max_log_of_the_sign_bits(order):
    """The first bit of each axis at every order, all zeros the most negative level (computed, as above)."""
    side = round(order**0.5)
    llr = on_grid(pydemap.square_qam(order), (2 * (order - 1) / 3) ** -0.5)
    got = llr(LINE * side / 4 * (1 + 1j), 0.9, "max-log")
    for k in (0, side.bit_length() - 1):
        np.testing.assert_allclose(
            0.9 * got[:, k], -outermost(LINE * side / 4, side), rtol=1e-12, atol=1e-12 * side**2
        )


# Vectors of 80-digit arithmetic; outside.py says how they were computed.

GOLDEN = Path(__file__).parent / "golden"


def unit_grid(c):
    """The same labels on odd integer coordinates."""
    a = c.min_distance / 2
    return pydemap.Constellation(np.rint(c.points.real / a) + 1j * np.rint(c.points.imag / a), c.labels)


VECTORS = {
    "16qam": pydemap.published_mapping("3GPP TS 38.211", 16),
    "64qam": pydemap.published_mapping("3GPP TS 38.211", 64),
    "32cross": pydemap.cross_qam(32),
}
VECTORS |= {f"{name}_grid": unit_grid(VECTORS[name]) for name in ("16qam", "32cross")}


@pytest.mark.parametrize("rule", ["exact", "max-log"])
@pytest.mark.parametrize("output", EPS)
@pytest.mark.parametrize("name", VECTORS)
def test_golden_vectors(name, output, rule):
    """float64 as the vectors stand.  float32 is given y and N0 rounded to float32: N0 moves every term by
    half an eps of itself, y by no more, so one unit is added."""
    c = VECTORS[name]
    rows = list(csv.DictReader((GOLDEN / f"golden_{name}.csv").read_text().splitlines()))
    assert len(rows) == 40
    y = np.array([complex(float(r["y_re"]), float(r["y_im"])) for r in rows])
    n0 = np.array([float(r["N0"]) for r in rows])
    column = {"exact": "llr", "max-log": "maxlog"}[rule]
    expected = np.array([[float(r[f"{column}{k}"]) for k in range(c.bits_per_symbol)] for r in rows])
    llr = SoftDemapper(c, rule=rule, output=output)(y, n0)
    error = np.abs(llr - expected) / (EPS[output] * (1 + largest_metric(c, y, n0)))[:, None]
    row, bit = np.unravel_index(error.argmax(), error.shape)
    bound = GOLDEN_TOLERANCE[name.removesuffix("_grid")] + (output == "float32")
    assert error[row, bit] <= bound, (
        f"{rows[row]}: bit {bit} is {llr[row, bit]}, error {error[row, bit]} of {bound}"
    )


# Consistency of exact LLRs, and its failure where they are not exact (analysis: p(l | 1) = e^-l p(l | 0)
# holds for the LLR's own density, so with x = 1 - 2 b  E[e^-L | b = 0] = 1,  E[x tanh(L/2)] = E[tanh^2(L/2)],
# P(sign error) = E[1 / (1 + e^|L|)]).


def plane(c, n0, step):
    """Samples y all over the plane, `step` sqrt(N0) apart, and the probability of each given each point: sums
    over y are integrals by the trapezoidal rule, which converges geometrically for these densities."""
    reach = np.abs(c.points).max() + 7 * np.sqrt(n0)
    axis = np.arange(-reach, reach, step * np.sqrt(n0))
    y = (axis[:, None] + 1j * axis).ravel()
    return y, np.exp(-(np.abs(y[:, None] - c.points) ** 2) / n0) * (step**2 / np.pi)


def consistency(c, es_n0_db, rule, n0_factor=1.0, factor=1.0):
    """The three identities of each bit as (left, right)."""
    n0 = c.mean_energy * 10 ** (-es_n0_db / 10)
    y, given_point = plane(c, n0, 0.2)
    llr = factor * SoftDemapper(c, rule=rule, output="float64")(y, n0 * n0_factor)
    found = []
    for bit, value in zip(c.bits.T, llr.T, strict=True):
        zero, one = given_point[:, bit == 0].mean(1), given_point[:, bit == 1].mean(1)
        found.append(((np.exp(-value) * zero).sum(), 1.0))
        found.append(
            (((zero - one) * np.tanh(value / 2)).sum(), ((zero + one) * np.tanh(value / 2) ** 2).sum())
        )
        wrong = np.where(value < 0, zero, one).sum()
        found.append((wrong, ((zero + one) / (1 + np.exp(np.abs(value)))).sum()))
    return np.array(found).reshape(-1, 3, 2)


CONSISTENT = {
    "16-QAM": (pydemap.square_qam(16), 6.0),
    "64-QAM": (pydemap.square_qam(64), 11.0),
    "32-cross": (pydemap.cross_qam(32), 7.0),
    "ITU-T 32": (pydemap.published_mapping("ITU-T G.9701", 32), 7.0),
    "16 scattered": (scattered(16, 6), 8.0),
}


@pytest.mark.parametrize("name", CONSISTENT)
def test_exact_llrs_are_consistent(name):
    found = consistency(*CONSISTENT[name], "exact")
    np.testing.assert_allclose(found[..., 0], found[..., 1], rtol=1e-11)


@pytest.mark.parametrize("name", CONSISTENT)
@pytest.mark.parametrize(
    "how",
    [{"rule": "max-log"}, {"rule": "exact", "factor": 0.8}, {"rule": "exact", "n0_factor": 1.25}],
    ids=str,
)
def test_inexact_llrs_are_not_consistent(name, how):
    """max-log, LLRs scaled, N0 off by 1 dB: each identity breaks for some bit."""
    found = consistency(*CONSISTENT[name], **how)
    assert (np.abs(found[..., 0] / found[..., 1] - 1).max(axis=0) > 1e-3).all()


# Error rates of the hard decisions, by slice() and by the signs of max-log LLRs.


def dvb_32():
    """The 32-QAM of DVB-C, whose labels are Gray inside a quadrant only."""
    pairs = [
        (complex(*place) * 1j**turn, int(quadrant + rest, 2))
        for turn, quadrant in enumerate(DVB_C_32_QUADRANTS)
        for place, rest in DVB_C_32_QUADRANT_I.items()
    ]
    points, labels = zip(*pairs, strict=True)
    return pydemap.Constellation(points, labels)


# Constellation, Es/N0 in dB, symbol error rate, bit error rate; all computed (mpmath, 30 digits, by two
# methods that agree).  Square: SER of Proakis and Salehi, "Communication Systems Engineering", eq. 7.6.68 to
# 70, BER of Cho and Yoon, IEEE Trans. Commun. 50(7), July 2002 (formula from memory, verified by
# enumeration).  Cross: SER and BER by integrals over the decision regions; the problem of Vitthaladevuni,
# Alouini and Kieffer, IEEE Trans. Wireless Commun. 4(6), 2005.
RATES = [
    ("square", 4, 4, 0.1097988843789719, 0.05649530174936167),
    ("square", 4, 10, 0.00156478963694521, 0.0007827011290012748),
    ("square", 16, 5, 0.5373851324942463, 0.1641726291645355),
    ("square", 16, 10, 0.2220308502724379, 0.05899272526791439),
    ("square", 16, 18, 0.0005726413192270235, 0.0001431808305569949),
    ("square", 64, 15, 0.3476243000472486, 0.06415873265427751),
    ("square", 64, 24, 0.0009502883149668999, 0.0001584190307117541),
    ("square", 256, 20, 0.4534295308314359, 0.06542294654652229),
    ("square", 256, 30, 0.001131512610087933, 0.0001414791089375232),
    ("square", 4096, 26, 0.8235639925618553, 0.1136270321606028),
    ("square", 4096, 36, 0.1651631965930217, 0.01438437469993791),
    ("cross", 32, 0, 0.8563713529357018, 0.3308390887878359),
    ("cross", 32, 10, 0.4530927431177198, 0.1168117413957431),
    ("cross", 32, 20, 0.002542501397241231, 0.000587007783008093),
    ("cross", 128, 10, 0.8112786062591777, 0.2038258832353233),
    ("cross", 128, 20, 0.2032253347109717, 0.03270176064009392),
    ("cross", 128, 26, 0.003319213533745736, 0.0005072740325385437),
    ("cross", 512, 30, 0.02617780428182459, None),
    ("ITU-T", 32, 10, 0.4530927431177198, 0.1840260770218519),
    ("ITU-T", 32, 18, 0.01943446788616898, 0.006913503886633229),
    ("ITU-T", 128, 22, 0.087384697611286, 0.02292292119161491),
    ("DVB", 32, 10, 0.4530927431177198, 0.1473554785491093),
    ("DVB", 32, 18, 0.01943446788616898, 0.005702896672052458),
]


def of_name(name, order):
    return {
        "square": pydemap.square_qam,
        "cross": pydemap.cross_qam,
        "ITU-T": lambda m: pydemap.published_mapping("ITU-T G.9701", m),
        "DVB": lambda m: dvb_32(),
    }[name](order)


@pytest.mark.parametrize("name, order, es_n0_db, symbol_errors, bit_errors", RATES)
def test_published_error_rates(name, order, es_n0_db, symbol_errors, bit_errors):
    """Within the 99.9 % confidence interval of a run with a few hundred errors or more."""
    c = of_name(name, order)
    count = 600_000 if symbol_errors < 0.01 else 150_000
    sent, y, n0 = received(c, es_n0_db, count, order + es_n0_db)
    demapper = SoftDemapper(c, rule="max-log")
    sigmas = 3.2905  # two-sided 99.9 % of a normal distribution

    y = y.astype(np.complex64)
    wrong = demapper.slice(y) != np.asarray(c.labels)[sent]
    interval = sigmas * np.sqrt(symbol_errors * (1 - symbol_errors) / count)
    assert wrong.sum() > 250 and abs(wrong.mean() - symbol_errors) < interval

    llr = demapper(y, n0)
    flips = ((llr < 0) != c.bits[sent]).mean(1)
    differ = (flips > 0) != wrong  # only where a rounding decides
    assert (np.abs(llr[differ]).min(1) < 8 * EPS["float32"] * (1 + largest_metric(c, y[differ], n0))).all()
    if bit_errors is not None:
        assert abs(flips.mean() - bit_errors) < sigmas * flips.std() / np.sqrt(count)


@pytest.mark.parametrize(
    "name, order, es_n0_db, bit_errors",
    [
        ("square", 16, 5, 0.1641726291645355),
        ("square", 64, 10, 0.1525464332754716),
        ("cross", 32, 0, 0.3308390887878359),
        ("cross", 32, 5, 0.2236209921971948),
        ("ITU-T", 32, 0, 0.4143843882608095),
        ("ITU-T", 32, 5, 0.324492339165304),
        ("DVB", 32, 0, 0.3572439843148342),
    ],
)
def test_signs_of_exact_llrs_err_less_at_low_snr(name, order, es_n0_db, bit_errors):
    """Signs of exact LLRs are bitwise maximum a posteriori decisions, whose error rate is E[1 / (1 + e^|L|)]:
    below the rate of nearest-point decisions (sources as above) by 0.1 to 6 % here, and the integral is good
    to 0.02 %."""
    c = of_name(name, order)
    n0 = c.mean_energy * 10 ** (-es_n0_db / 10)
    y, given_point = plane(c, n0, 0.1)
    llr = SoftDemapper(c, output="float64")(y, n0)
    rate = (given_point.mean(1)[:, None] / (1 + np.exp(np.abs(llr)))).sum(0).mean()
    assert 0.9 * bit_errors < rate < (1 - 5e-4) * bit_errors
