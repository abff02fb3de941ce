"""Published mappings against their documents' tables."""

import csv
from pathlib import Path

import numpy as np
import pytest
from outside import (
    G9701_8_POINTS,
    G9701_32_LABELS,
    G9701_EXPANSION,
    G9701_PENALTIES,
    IEEE_802_11_AXIS,
    IEEE_802_11_ENERGY,
    TS_38_211_AXIS,
)
from test_constellation import grid, label_at, mean_over_pairs, table

from pydemap import available_mappings, cross_qam, published_mapping, square_qam

GOLDEN = Path(__file__).parent / "golden"
TS_38_211, IEEE_802_11, G9701 = "3GPP TS 38.211", "IEEE 802.11", "ITU-T G.9701"


def bits_of(label, n):
    return [int(bit) for bit in f"{label:0{n}b}"]


@pytest.mark.parametrize(
    "name, c",
    [
        ("16qam_3gpp", published_mapping(TS_38_211, 16)),
        ("64qam_3gpp", published_mapping(TS_38_211, 64)),
        ("32cross_itu", published_mapping(G9701, 32)),
        ("32cross_fold", cross_qam(32)),
        ("128cross_fold", cross_qam(128)),
    ],
)
def test_label_tables(name, c):
    """Whole tables, computed (see outside.py)."""
    rows = list(csv.DictReader((GOLDEN / f"labels_{name}.csv").read_text().splitlines()))
    assert all(int(row["bits_msb_first"], 2) == int(row["label"]) for row in rows)
    assert label_at(c) == {(int(row["x"]), int(row["y"])): int(row["label"]) for row in rows}


@pytest.mark.parametrize("document, order", available_mappings())
def test_every_mapping(document, order):
    c = published_mapping(document, order)
    assert c.order == order
    assert c.mean_energy == pytest.approx(1, abs=1e-14)
    assert np.array_equal(c.labels, np.arange(order))
    assert c == published_mapping(document, order)


def test_available_mappings():
    assert available_mappings() == [
        *((TS_38_211, m) for m in (2, 4, 16, 64, 256, 1024)),
        *((IEEE_802_11, m) for m in (2, 4, 16, 64, 256, 1024, 4096)),
        *((G9701, 2**b) for b in range(2, 16)),
    ]


# 3GPP TS 38.211


def test_ts_38_211_bpsk_and_qpsk():
    """Clause 5.1.2: [(1 - 2 b0) + j (1 - 2 b0)]/sqrt 2; clause 5.1.3: [(1 - 2 b0) + j (1 - 2 b1)]/sqrt 2."""
    root = 2**-0.5
    np.testing.assert_allclose(
        published_mapping(TS_38_211, 2).points, root * np.array([1 + 1j, -1 - 1j]), rtol=1e-15
    )
    qpsk = root * np.array([1 + 1j, 1 - 1j, -1 + 1j, -1 - 1j])
    np.testing.assert_allclose(published_mapping(TS_38_211, 4).points, qpsk, rtol=1e-15)


@pytest.mark.parametrize("order", TS_38_211_AXIS)
def test_ts_38_211_axes(order):
    """Even bits on I, odd bits on Q."""
    level = {}
    for place, word in enumerate(TS_38_211_AXIS[order].split()):
        level[word] = 2 * place + 1
        level["1" + word[1:]] = -(2 * place + 1)
    n = order.bit_length() - 1
    words = [f"{label:0{n}b}" for label in range(order)]
    assert grid(published_mapping(TS_38_211, order)) == [
        (level[word[0::2]], level[word[1::2]]) for word in words
    ]


@pytest.mark.parametrize("order", [4, 16, 64, 256, 1024])
def test_ts_38_211_is_binary_reflected(order):
    """Computed: an axis's complemented bits are the binary reflected code with all zeros most negative."""
    label = label_at(published_mapping(TS_38_211, order))
    n = order.bit_length() - 1
    for point, other in label_at(square_qam(order)).items():
        bits, axes = bits_of(label[point] ^ (order - 1), n), bits_of(other, n)
        assert bits[0::2] + bits[1::2] == axes


# IEEE 802.11


def test_ieee_802_11_bpsk():
    """Clause 17.3.5.8 (from memory): bit 0 at -1, bit 1 at +1."""
    assert published_mapping(IEEE_802_11, 2).points.tolist() == [-1, 1]


@pytest.mark.parametrize("order", IEEE_802_11_AXIS)
def test_ieee_802_11_axes(order):
    level = IEEE_802_11_AXIS[order]
    n = order.bit_length() - 1
    words = [f"{label:0{n}b}" for label in range(order)]
    assert grid(published_mapping(IEEE_802_11, order)) == [
        (level[w[: n // 2]], level[w[n // 2 :]]) for w in words
    ]


@pytest.mark.parametrize("order", IEEE_802_11_ENERGY)
def test_ieee_802_11_scale(order):
    c = published_mapping(IEEE_802_11, order)
    side = round(order**0.5)
    assert c.points[0] == pytest.approx(-(1 + 1j) * (side - 1) / IEEE_802_11_ENERGY[order] ** 0.5, rel=1e-15)
    assert c.gray_penalty == 1


# ITU-T G.9701


def test_g9701_tables():
    assert grid(published_mapping(G9701, 4)) == [(1, 1), (1, -1), (-1, 1), (-1, -1)]  # X = (v1 1), Y = (v0 1)
    expected = {point: int(word) for point, word in table(G9701_32_LABELS).items()}
    assert label_at(published_mapping(G9701, 32)) == expected


def test_g9701_three_bits():
    """Points on every second place of the grid: E = 10, d_min^2 = 8 in the figure's units (computed)."""
    c = published_mapping(G9701, 8)
    np.testing.assert_allclose(c.points, [complex(*p) / 10**0.5 for p in G9701_8_POINTS], rtol=1e-15)
    assert c.min_distance**2 == pytest.approx(8 / 10, rel=1e-14)


@pytest.mark.parametrize("bits", [2, 4, 5, 6, 7, 8, 9, 10, 11, 12, 13])
def test_g9701_expansion(bits):
    smaller = grid(published_mapping(G9701, 2**bits))
    larger = grid(published_mapping(G9701, 2 ** (bits + 2)))
    for label, (x, y) in enumerate(smaller):
        for low, (right, up) in G9701_EXPANSION.items():
            assert larger[4 * label + low] == (2 * x + right, 2 * y + up)


@pytest.mark.parametrize("bits", [b for b in range(2, 16) if b != 3])
def test_g9701_shapes(bits):
    """Each map fills the square or the cross exactly (computed)."""
    shape = cross_qam(2**bits) if bits % 2 else square_qam(2**bits)
    assert set(grid(published_mapping(G9701, 2**bits))) == set(grid(shape))


@pytest.mark.parametrize("order", G9701_PENALTIES)
def test_g9701_is_not_gray(order):
    penalty, over_pairs, most = G9701_PENALTIES[order]
    c = published_mapping(G9701, order)
    assert c.gray_penalty == pytest.approx(float(penalty), rel=1e-13)
    assert mean_over_pairs(c) == (over_pairs, most)


@pytest.mark.parametrize(
    "document, order, error, message",
    [
        ("3GPP", 16, ValueError, "document must be one of '3GPP TS 38.211', .* got '3GPP'"),
        (None, 16, TypeError, "document must be a string, one of '3GPP TS 38.211', .* got None"),
        ([G9701], 16, TypeError, r"document must be a string, .* got \['ITU-T G.9701'\]"),
        (
            TS_38_211,
            32,
            ValueError,
            "order for 3GPP TS 38.211 must be one of 2, 4, 16, 64, 256, 1024, got 32",
        ),
        (IEEE_802_11, 8, ValueError, "order for IEEE 802.11 must be one of .* got 8"),
        (G9701, 2, ValueError, "order for ITU-T G.9701 must be one of .* got 2"),
        (G9701, 16.0, TypeError, "order must be an integer, got 16.0"),
    ],
)
def test_refused(document, order, error, message):
    with pytest.raises(error, match=message):
        published_mapping(document, order)
