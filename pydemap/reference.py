"""The log-likelihood ratio by its definition: for reading and for checking, not for speed."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pydemap.constellation import Constellation

__all__ = ["llr"]

# What an infinite prior counts as: infinity itself could not be taken off again.
CERTAIN = 2.0**900


def llr(
    y: ArrayLike,
    n0: ArrayLike,
    c: Constellation,
    *,
    rule: str = "exact",
    gain: ArrayLike | None = None,
    prior: ArrayLike | None = None,
    extrinsic: bool = False,
    positive_bit: int = 0,
) -> NDArray[np.float64]:
    """LLRs of the received samples y = h s + w, in plain float64.

    With the metric m(s) = -|y - h s|^2 / N0 + ln P(s) of every point s, up to a common constant:

    * "exact":   ln sum_{s: b_k = 0} e^{m(s)} - ln sum_{s: b_k = 1} e^{m(s)}
    * "max-log": max_{s: b_k = 0} m(s) - max_{s: b_k = 1} m(s)
    * "linear":  4 a d |h|^2 / N0, with d the distance along the bit's axis from y/h to its nearest decision
      threshold and a the half-spacing of the levels, signed by the bit of the nearest level, plus the prior

    Parameters
    ----------
    y : array_like of complex, any shape
        Received samples.
    n0 : array_like of float, broadcastable to y
        Noise variance E|w|^2, both dimensions together.
    c : Constellation
    rule : {"exact", "max-log", "linear"}
        "linear" needs a full rectangular grid of evenly spaced levels with each bit on one axis.
    gain : array_like of complex, broadcastable to y, optional
        The known channel gain h; 1 if left out.
    prior : array_like of float, broadcastable to y.shape + (n,), optional
        LLRs known beforehand, of the same sign convention; beyond +-2^900 they count as that.
    extrinsic : bool
        Take the prior off the result again.
    positive_bit : {0, 1}
        The bit value that a positive LLR stands for.

    Returns
    -------
    float64 array, shape y.shape + (n,)
        Bit b0 first.  NaN for a symbol whose y or gain is not finite, whose prior holds a NaN, or whose
        squared distances over N0 exceed the range of float64; the prior, or 0, where the gain is 0.

    Raises
    ------
    TypeError
        If y is not complex, or another argument not of the type above.
    ValueError
        If a shape does not broadcast, N0 is not finite and positive, or the rule or positive bit is not known
        or the rule does not fit the constellation.
    """
    if rule not in ("exact", "max-log", "linear"):
        raise ValueError(f"rule must be 'exact', 'max-log' or 'linear', got {rule!r}")
    if positive_bit not in (0, 1):
        raise ValueError(f"positive_bit must be 0 or 1, got {positive_bit!r}")
    y = np.asarray(y)
    if y.dtype.kind != "c":
        raise TypeError(f"y must be complex, got {y.dtype}")
    y = y.astype(np.complex128)
    h = _spread("gain", 1 if gain is None else gain, y.shape, "iufc")
    noise = _spread("n0", n0, y.shape, "iuf")
    bad = ~(np.isfinite(n0) & (np.asarray(n0) > 0))
    if bad.any():
        index = tuple(map(int, np.argwhere(bad)[0]))
        raise ValueError(f"n0 must be finite and positive, got {np.asarray(n0)[index]} at index {index}")
    turn = -1 if positive_bit else 1
    known = turn * _spread("prior", 0 if prior is None else prior, (*y.shape, c.bits_per_symbol), "iuf")

    usable = np.isfinite(y) & np.isfinite(h) & ~np.isnan(known).any(axis=-1)
    y, h, known = np.where(usable, y, 0), np.where(usable, h, 0), np.where(usable[..., None], known, 0)
    known = np.clip(known, -CERTAIN, CERTAIN)
    if rule == "linear":
        result = _linear(y, h, noise, c) + known
    else:
        distance = np.where(h == 0, 0, y)[..., None] - h[..., None] * c.points
        # ln P(s): each bit that contradicts its prior costs |prior|, up to a common constant.
        contradiction = np.maximum(-known, 0) @ (1 - c.bits.T) + np.maximum(known, 0) @ c.bits.T
        metric = -(distance.real**2 + distance.imag**2) / noise[..., None] - contradiction
        combine = np.max if rule == "max-log" else _log_sum_exp
        sides = ((metric[..., bit == 0], metric[..., bit == 1]) for bit in c.bits.T)
        result = np.stack([combine(zero, axis=-1) - combine(one, axis=-1) for zero, one in sides], axis=-1)
    if extrinsic:
        result = result - known
    result[~usable] = np.nan
    turned: NDArray[np.float64] = turn * result
    return turned


def _log_sum_exp(metric: NDArray[np.float64], axis: int) -> NDArray[np.float64]:
    """ln sum e^metric, taken relative to the largest term, which the plain form would overflow or lose."""
    largest = np.max(metric, axis=axis, keepdims=True)
    total: NDArray[np.float64] = largest.squeeze(axis) + np.log(np.exp(metric - largest).sum(axis=axis))
    return total


def _linear(
    y: NDArray[np.complex128], h: NDArray[np.complex128], n0: NDArray[np.float64], c: Constellation
) -> NDArray[np.float64]:
    u = y / np.where(h == 0, 1, h)
    peak = float(np.abs(c.points).max())
    axes = [(*_levels(c.points.real, peak), u.real), (*_levels(c.points.imag, peak), u.imag)]
    if axes[0][0].size * axes[1][0].size != c.order:
        raise ValueError(f"rule 'linear' needs a full rectangular grid, got {c!r}")
    result = []
    for bit_of_point in c.bits.T:
        for levels, place, v in axes:
            bit = np.zeros(levels.size, np.int64)
            bit[place] = bit_of_point
            if (bit[place] != bit_of_point).any():  # points of one level differ: the bit is not on this axis
                continue
            middle = (levels[:-1] + levels[1:]) / 2
            d = np.abs(v[..., None] - middle[bit[:-1] != bit[1:]]).min(axis=-1)
            sign = 1 - 2 * bit[np.searchsorted(middle, v)]
            a = (levels[1] - levels[0]) / 2
            result.append(sign * 4 * a * d * np.abs(h) ** 2 / n0)
    if len(result) < c.bits_per_symbol:
        raise ValueError(f"rule 'linear' needs each bit on one axis, got {c!r}")
    return np.stack(result, axis=-1)


def _levels(coordinate: NDArray[np.float64], peak: float) -> tuple[NDArray[np.float64], NDArray[np.intp]]:
    """The different levels of an axis, ascending, and the place of each point among them."""
    unit = 1e-9 * peak  # of both axes: on one axis all coordinates may be rounding errors of 0
    _, first, place = np.unique(np.round(coordinate / unit), return_index=True, return_inverse=True)
    levels = coordinate[first]
    if levels.size > 2 and not np.allclose(np.diff(levels), levels[1] - levels[0], rtol=1e-6, atol=0):
        raise ValueError(f"rule 'linear' needs evenly spaced levels, got {levels}")
    return levels, place


def _spread(name: str, value: ArrayLike, shape: tuple[int, ...], kinds: str) -> NDArray[Any]:
    """The value in double precision, broadcast to the shape."""
    array = np.asarray(value)
    if array.dtype.kind not in kinds:
        expected = "complex or real" if "c" in kinds else "real"
        raise TypeError(f"{name} must be {expected} numbers, got {array.dtype}")
    try:
        return np.broadcast_to(array.astype(np.complex128 if "c" in kinds else np.float64), shape)
    except ValueError:
        raise ValueError(f"{name} of shape {array.shape} does not broadcast to {shape}") from None
