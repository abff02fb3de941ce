"""One test for each fault that was found after its kernel was first called done."""

import numpy as np
import pytest

import pydemap
from pydemap import Constellation, SoftDemapper, reference


def gray(i):
    return i ^ (i >> 1)


def grid_with_gaps(columns, labels):
    x, y = np.meshgrid(columns, range(4), indexing="ij")
    i, j = np.meshgrid(range(4), range(4), indexing="ij")
    return Constellation((x + 1j * y).ravel(), labels(i, j).ravel())


@pytest.mark.parametrize("columns", [(0, 1, 3, 4), (0, 1, 2, 4)])
@pytest.mark.parametrize("labels", [lambda i, j: gray(i) << 2 | gray(j), lambda i, j: i << 2 | j])
@pytest.mark.parametrize("rule", ["exact", "max-log"])
def test_a_grid_with_an_empty_column_is_no_full_grid(columns, labels, rule):
    """Its levels were folded as if none were missing, and the nearest one was taken to be occupied."""
    c = grid_with_gaps(columns, labels)
    rng = np.random.default_rng(1)
    y = rng.normal(2, 3, 500) + 1j * rng.normal(2, 3, 500)
    demap = SoftDemapper(c, rule=rule, output="float64")
    for n0 in (1.0, 0.1, 1e-3):
        np.testing.assert_allclose(demap(y, n0), reference.llr(y, n0, c, rule=rule), rtol=1e-9, atol=1e-9)
    nearest = np.argmin(np.abs(y[:, None] - c.points), axis=1)
    np.testing.assert_array_equal(demap.slice(y), c.labels[nearest])


@pytest.mark.parametrize("output, es_n0_db", [("float32", 130), ("float64", 250)])
@pytest.mark.parametrize("order", [128, 1024])
def test_midpoints_far_above_80_db(output, es_n0_db, order):
    """The rounding error of a metric is not small against 1 there: weights became infinite."""
    c = pydemap.cross_qam(128) if order == 128 else pydemap.square_qam(1024)
    n0 = 10 ** (-es_n0_db / 10)
    y = (c.points[:60, None] + c.points[None, :60]).ravel() / 2
    y = y.astype(np.complex64 if output == "float32" else complex)
    exact = SoftDemapper(c, output=output)(y, n0).astype(float)
    max_log = SoftDemapper(c, rule="max-log", output=output)(y, n0).astype(float)
    rounding = 100 * np.finfo(output).eps / n0
    assert np.all(np.abs(exact - max_log) <= 1e-3 * np.abs(max_log) + rounding)


@pytest.mark.parametrize("size", [1e-20, 1e-22, 1e-25, 1e-30, 1e30])
def test_slicing_with_an_extreme_gain(size):
    """N0 / |h|^2 left float32's range, and with it which box is nearest."""
    c = pydemap.cross_qam(32)
    rng = np.random.default_rng(2)
    y = c.points[rng.integers(0, 32, 2000)] + rng.normal(0, 0.05, 2000) + 1j * rng.normal(0, 0.05, 2000)
    got = SoftDemapper(c).slice((y * size).astype(np.complex64), gain=np.complex64(size))
    np.testing.assert_array_equal(got, c.labels[np.argmin(np.abs(y[:, None] - c.points), axis=1)])


@pytest.mark.parametrize("rule", ["exact", "max-log", "linear"])
@pytest.mark.parametrize("extrinsic", [False, True])
def test_a_prior_at_tiny_n0(rule, extrinsic):
    """The factor that brings LLRs back from an N0 held above a floor was put on the prior too."""
    c, y, prior = pydemap.square_qam(16), np.array([0.9 + 0.9j]), np.array([[0, -2e29, 0, 5.0]])
    got = SoftDemapper(c, rule=rule)(y, 1e-32, prior=prior, extrinsic=extrinsic)
    wanted = reference.llr(y, 1e-32, c, rule=rule, prior=prior, extrinsic=extrinsic)
    np.testing.assert_allclose(got, wanted, rtol=1e-5)


def test_nan_has_the_same_bits_at_every_level():
    """The payload of a NaN in the samples came through, by ways that depend on the compiler."""
    y = np.array([0, 1, 2], np.complex64)
    y.view(np.uint32)[[0, 2]] = 0xFFC00123, 0x7F800001
    seen = set()
    used = pydemap.isa()
    try:
        for level in pydemap.available_isas():
            pydemap.use_isa(level)
            results = [
                SoftDemapper(c, rule=rule)(y, 0.1, gain=y)
                for c in (pydemap.square_qam(16), pydemap.cross_qam(32))
                for rule in ("exact", "max-log")
            ]
            assert all(np.isnan(r[:2]).all() for r in results)
            seen.add(b"".join(r.tobytes() for r in results))
    finally:
        pydemap.use_isa(used)
    assert len(seen) == 1


def test_out_may_not_share_memory_with_a_buffer():
    """Only arrays were looked at, not other objects whose memory is used without a copy."""
    out = np.zeros((2, 2), np.float32)
    samples = memoryview(out.reshape(-1).view(np.complex64))
    with pytest.raises(ValueError, match="out overlaps y"):
        SoftDemapper(pydemap.square_qam(4))(samples, 0.1, out=out)
