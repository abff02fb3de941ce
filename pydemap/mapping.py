"""Constellation mappings of open standards, each by its document's own rule, scaled to unit mean energy."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from pydemap.constellation import (
    Constellation,
    integer,
    label_bits,
    rectangular_qam,
    square_qam,
    unit_energy_grid,
)

__all__ = ["available_mappings", "published_mapping"]


def published_mapping(document: str, order: int) -> Constellation:
    """The constellation of an open standard, of unit mean energy.

    ================  =============================  ====================================================
    document          order                          clause
    ================  =============================  ====================================================
    "3GPP TS 38.211"  2, 4, 16, 64, 256, 1024        5.1.2 to 5.1.7; BPSK lies on the diagonal
    "IEEE 802.11"     2, 4, 16, 64, 256, 1024, 4096  17.3.5.8, extended to 256 by 802.11ac, to 1024 by
                                                     802.11ax and to 4096 by 802.11be
    "ITU-T G.9701"    4, 8, 16, 32 ... 32768         10.2.1.4.2; the rule holds for any number of bits and is
                                                     offered up to 15
    ================  =============================  ====================================================

    Parameters
    ----------
    document : str
        The standard, as above.
    order : int
        The number of points.

    Returns
    -------
    Constellation
        Points in label order; b0 is the bit that the standard sends first, which for ITU-T G.9701 is
        v(b-1).

    Raises
    ------
    TypeError
        If the document is not a string or order is not an integer.
    ValueError
        If the document is not known, or has no constellation of that order.
    """
    known = ", ".join(map(repr, _MAPPINGS))
    if not isinstance(document, str):
        raise TypeError(f"document must be a string, one of {known}, got {document!r}")
    if document not in _MAPPINGS:
        raise ValueError(f"document must be one of {known}, got {document!r}")
    orders, rule = _MAPPINGS[document]
    order = integer("order", order)
    if order not in orders:
        raise ValueError(f"order for {document} must be one of {', '.join(map(str, orders))}, got {order}")
    return rule(order)


def available_mappings() -> list[tuple[str, int]]:
    """All pairs (document, order) that `published_mapping` takes."""
    return [(document, order) for document, (orders, _) in _MAPPINGS.items() for order in orders]


def _3gpp_ts_38_211(order: int) -> Constellation:
    """3GPP TS 38.211, clauses 5.1.2 (BPSK) to 5.1.7 (1024QAM)."""
    signs = 1 - 2 * label_bits(np.arange(order), order.bit_length() - 1)
    if order == 2:
        return unit_energy_grid(signs[:, 0], signs[:, 0])

    def level(axis: NDArray[np.int64]) -> NDArray[np.int64]:
        # (1-2b0) [8 - (1-2b2) [4 - (1-2b4) [2 - (1-2b6)]]], from the inside out
        inner = axis[:, -1]
        for k in range(1, axis.shape[1]):
            inner = axis[:, -1 - k] * (2**k - inner)
        return inner

    return unit_energy_grid(level(signs[:, 0::2]), level(signs[:, 1::2]))


def _ieee_802_11(order: int) -> Constellation:
    """IEEE 802.11, clause 17.3.5.8: BPSK on the real axis, else Gray on each axis, I bits first."""
    return rectangular_qam(2, 1) if order == 2 else square_qam(order)


# Clause 10.2.1.4.2: the two top bits (as a number) of X and of Y, for t = v(b-1) ... v(b-5).
_G9701_TOP_X = np.array([int(digit) for digit in "00000000333333331122000033331122"])
_G9701_TOP_Y = np.array([int(digit) for digit in "00003333000033330000121212123333"])
# The same clause, figure for b = 3, by label.
_G9701_8_X = np.array([1, 3, -1, 1, -3, -1, 3, -3])
_G9701_8_Y = np.array([1, -1, -1, -3, -3, 3, 3, 1])


def _itu_t_g9701(order: int) -> Constellation:
    """ITU-T G.9701, clause 10.2.1.4.2: coordinates are two's complement numbers made of label bits."""
    if order == 8:
        return unit_energy_grid(_G9701_8_X, _G9701_8_Y)
    bits = label_bits(np.arange(order), order.bit_length() - 1)
    if bits.shape[1] % 2:
        t = bits[:, :5] @ [16, 8, 4, 2, 1]
        x_top, y_top = label_bits(_G9701_TOP_X[t], 2), label_bits(_G9701_TOP_Y[t], 2)
        x_bits, y_bits = np.hstack([x_top, bits[:, 3::2]]), np.hstack([y_top, bits[:, 4::2]])
    else:
        x_bits, y_bits = bits[:, 0::2], bits[:, 1::2]
    return unit_energy_grid(_odd_twos_complement(x_bits), _odd_twos_complement(y_bits))


def _odd_twos_complement(bits: NDArray[np.int64]) -> NDArray[np.int64]:
    """The two's complement number of these bits, most significant first, with a 1 appended."""
    weights = 2 ** np.arange(bits.shape[1], 0, -1)
    weights[0] *= -1
    return bits @ weights + 1


_MAPPINGS: dict[str, tuple[tuple[int, ...], Callable[[int], Constellation]]] = {
    "3GPP TS 38.211": ((2, 4, 16, 64, 256, 1024), _3gpp_ts_38_211),
    "IEEE 802.11": ((2, 4, 16, 64, 256, 1024, 4096), _ieee_802_11),
    "ITU-T G.9701": (tuple(2**b for b in range(2, 16)), _itu_t_g9701),
}
