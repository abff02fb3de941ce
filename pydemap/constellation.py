"""Constellations: labelled points, the facts that follow from them, and the standard QAM shapes.

Conventions: a label is an integer of n bits; b0, the first bit on the line, is its most significant bit.
A grid's levels are odd multiples of the half-spacing a.
"""

from __future__ import annotations

import math
import operator
from functools import cached_property
from itertools import count
from typing import Any, NoReturn

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["Constellation", "cross_qam", "rectangular_qam", "square_qam"]

MAX_ORDER = 65536

# Distances this close, relatively, count as equal: float32 points of a 65536-point grid differ by 2e-5.
EQUAL_DISTANCE = 1e-4


class Constellation:
    """M = 2^n complex points with an n-bit label each; immutable.

    Two constellations are equal if their points and labels are, in the same order.  Instances can be
    hashed, pickled, and shared between threads; their arrays are read-only.

    Parameters
    ----------
    points : array_like of complex, shape (M,)
        The points, in any unit; M is a power of two from 2 to 65536.
    labels : array_like of int, shape (M,)
        The label of each point: every one of 0 ... M - 1 once.

    Attributes
    ----------
    points : complex128 array, shape (M,)
        As given.
    labels : int64 array, shape (M,)
        As given.

    Raises
    ------
    TypeError
        If points are not numbers or labels not integers.
    ValueError
        If M is out of range, a shape does not fit, a point is not finite, two points coincide, or a label
        is repeated, missing or out of range.
    """

    points: NDArray[np.complex128]
    labels: NDArray[np.int64]

    def __init__(self, points: ArrayLike, labels: ArrayLike) -> None:
        self.__dict__["points"] = _checked_points(points)
        self.__dict__["labels"] = _checked_labels(labels, self.order)

    @property
    def order(self) -> int:
        """The number of points, M."""
        return self.points.size

    @property
    def bits_per_symbol(self) -> int:
        """The number of bits in a label, n = log2 M."""
        return self.order.bit_length() - 1

    @cached_property
    def bits(self) -> NDArray[np.uint8]:
        """The labels' bits, shape (M, n): row i belongs to points[i], column 0 is b0."""
        return _read_only(label_bits(self.labels, self.bits_per_symbol).astype(np.uint8))

    @cached_property
    def mean_energy(self) -> float:
        """The mean of |point|^2, Es."""
        return float(np.mean(_energy(self.points)))

    @cached_property
    def peak_to_mean(self) -> float:
        """The largest |point|^2 over the mean (a ratio, not dB)."""
        return float(_energy(self.points).max()) / self.mean_energy

    @property
    def min_distance(self) -> float:
        """The distance between the closest two points, in the unit of the points."""
        return self._nearest[0]

    @property
    def mean_neighbours(self) -> float:
        """The mean over all points of the number of neighbours at the minimum distance."""
        return 2 * len(self._nearest[1]) / self.order

    @cached_property
    def gray_penalty(self) -> float:
        """The mean number of label bits in which neighbours at the minimum distance differ; 1 if Gray.

        Averaged over the neighbours of a point first, then over the points (those with neighbours), as in
        J. G. Smith, "Odd-bit quadrature amplitude-shift keying", IEEE Trans. Commun. 23(3), 1975.
        """
        _, i, j = self._nearest
        differing = np.count_nonzero(self.bits[i] != self.bits[j], axis=1)
        ends = np.concatenate([i, j])
        neighbours = np.bincount(ends, minlength=self.order)
        bits = np.bincount(ends, np.concatenate([differing, differing]), minlength=self.order)
        return float(np.mean(bits[neighbours > 0] / neighbours[neighbours > 0]))

    def map(self, bits: ArrayLike) -> NDArray[np.complex128]:
        """The points of a bit sequence.

        Parameters
        ----------
        bits : array_like of int or bool, shape (..., n) or (k n,)
            Zeros and ones, b0 of each symbol first.  One dimension is a stream of whole symbols.

        Returns
        -------
        complex128 array, shape (...) or (k,)

        Raises
        ------
        TypeError
            If bits are not integers or booleans.
        ValueError
            If the shape does not fit, or a value is neither 0 nor 1.
        """
        array = np.asarray(bits)
        n = self.bits_per_symbol
        if array.size and array.dtype.kind not in "biu":
            raise TypeError(f"bits must be integers or booleans, got {array.dtype}")
        if array.ndim == 0 or array.shape[-1] % n or (array.ndim > 1 and array.shape[-1] != n):
            raise ValueError(f"bits has shape {array.shape}, expected (..., {n}), or (k * {n},) for a stream")
        wrong = (array != 0) & (array != 1)
        if wrong.any():
            raise ValueError(f"bits must be 0 or 1, got {array[wrong][0]} at index {_first(wrong)}")
        shape = array.shape[:-1] if array.ndim > 1 else (array.size // n,)
        labels = array.reshape(*shape, n).astype(np.int64) @ (1 << np.arange(n)[::-1])
        return self._by_label[labels]

    @cached_property
    def _by_label(self) -> NDArray[np.complex128]:
        return self.points[np.argsort(self.labels)]

    @cached_property
    def _nearest(self) -> tuple[float, NDArray[np.int64], NDArray[np.int64]]:
        """The minimum distance and the pairs (i, j) that have it.

        A sweep: sorted along a direction, a point can be near only to those that follow it within the
        least distance so far, so memory stays proportional to M.  The direction is oblique to the axes, as
        along an axis a whole column of a grid would stand at one place.
        """
        along = math.cos(1) * self.points.real + math.sin(1) * self.points.imag
        order = np.argsort(along)
        points, along = self.points[order], along[order]
        rounding = 4 * np.finfo(float).eps * float(np.abs(self.points).max())
        least = float(np.abs(np.diff(np.sort(self.points))).min())  # on a grid, the minimum at once
        found = []
        first = np.arange(self.order)
        for shift in count(1):
            first = first[first < self.order - shift]
            reach = least * (1 + EQUAL_DISTANCE) + rounding
            first = first[along[first + shift] - along[first] <= reach]
            if not first.size:
                break
            distance = np.abs(points[first + shift] - points[first])
            least = min(least, float(distance.min()))
            near = distance <= least * (1 + EQUAL_DISTANCE)
            found.append((distance[near], first[near], first[near] + shift))
        distances, i, j = (np.concatenate(parts) for parts in zip(*found, strict=True))
        near = distances <= least * (1 + EQUAL_DISTANCE)
        return least, order[i[near]], order[j[near]]

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, Constellation):
            return NotImplemented
        return np.array_equal(self.points, other.points) and np.array_equal(self.labels, other.labels)

    def __hash__(self) -> int:
        return hash((self.points.tobytes(), self.labels.tobytes()))

    def __reduce__(self) -> tuple[type[Constellation], tuple[Any, ...]]:
        return Constellation, (self.points, self.labels)

    def __setattr__(self, name: str, value: object) -> NoReturn:
        raise AttributeError(f"a Constellation cannot be changed: cannot set {name}")

    def __delattr__(self, name: str) -> NoReturn:
        raise AttributeError(f"a Constellation cannot be changed: cannot delete {name}")

    def __repr__(self) -> str:
        return (
            f"<Constellation of {self.order} points: mean energy {self.mean_energy:.6g}, "
            f"minimum distance {self.min_distance:.6g}, Gray penalty {self.gray_penalty:.6g}>"
        )


def square_qam(order: int) -> Constellation:
    """Square QAM of unit mean energy, binary reflected Gray on each axis.

    The first half of the bits is on I, the second on Q; all zeros is the most negative level.

    Parameters
    ----------
    order : int
        4, 16, 64 ... 65536.

    Raises
    ------
    TypeError
        If order is not an integer.
    ValueError
        If order is none of those.
    """
    order = integer("order", order)
    if order not in [4**half for half in range(1, 9)]:
        raise ValueError(f"order of square_qam must be one of 4, 16, 64 ... 65536, got {order}")
    return rectangular_qam(math.isqrt(order), math.isqrt(order))


def rectangular_qam(columns: int, rows: int) -> Constellation:
    """Rectangular QAM of unit mean energy, binary reflected Gray on each axis.

    The first log2(columns) bits are on I, the rest on Q; all zeros is the most negative level.  One row
    makes real amplitude-shift keying: (2, 1) is BPSK with bit 0 at -1.

    Parameters
    ----------
    columns, rows : int
        Levels on I and on Q: powers of two with 2 <= columns * rows <= 65536.

    Raises
    ------
    TypeError
        If columns or rows is not an integer.
    ValueError
        If they are no such powers of two.
    """
    sizes = {"columns": integer("columns", columns), "rows": integer("rows", rows)}
    for name, size in sizes.items():
        if not _is_power_of_two(size):
            raise ValueError(f"{name} must be a power of two, got {size}")
    if not 2 <= columns * rows <= MAX_ORDER:
        raise ValueError(f"columns * rows must be 2 to {MAX_ORDER}, got {columns} * {rows}")
    return unit_energy_grid(*_rectangle(columns, rows))


def cross_qam(order: int) -> Constellation:
    """Cross QAM of unit mean energy, for odd numbers of bits, with quasi-Gray labels.

    From 32 on, a rectangle of 2^(m+1) columns and 2^m rows, M = 2^(2m+1), Gray on each axis, whose outer
    columns are moved above and below, so that nearest neighbours differ in at most two bits (Smith 1975;
    `Constellation.gray_penalty` names the paper).  The mean energy before scaling is (31 M - 32)/48 a^2.

    At 8 the cross has four inner points and one more on each side: the rectangle of 4 columns and 2 rows
    with two opposite corners moved, (3, 1) to (1, 3) and (-3, -1) to (-1, -3), labels going along.  The
    mean energy stays 6 a^2, nearest neighbours become fewer (2 on average instead of 2.5), and the labels
    stay Gray: b0 is the sign of I (0 if negative), b1 is 1 inside and 0 outside, b2 is the sign of Q.  Save
    for exchanged or inverted bits no other Gray labelling of these points exists: the inner four labels form
    a face of the cube of all labels, so that the one edge left at each leads to the label of its outer point.

    Parameters
    ----------
    order : int
        8, 32, 128 ... 32768.

    Raises
    ------
    TypeError
        If order is not an integer.
    ValueError
        If order is none of those.
    """
    order = integer("order", order)
    if order not in [2 * 4**half for half in range(1, 8)]:
        raise ValueError(f"order of cross_qam must be one of 8, 32, 128 ... 32768, got {order}")
    rows = math.isqrt(order // 2)
    x, y = _rectangle(2 * rows, rows)
    if order == 8:
        moved = x * y == 3
        return unit_energy_grid(np.where(moved, y, x), np.where(moved, x, y))
    # The outer columns, |x| > 3s, come in two parts.  Turning each round the corner it leaves keeps the
    # order of its columns or rows next to the seam, which moving them as they are would not.
    s = rows // 2
    kept, outer_rows = np.abs(x) <= 3 * s, np.abs(y) > s
    right, up = np.sign(x), np.sign(y)
    moved_x = right * np.where(outer_rows, np.abs(x) - 2 * s, 4 * s - np.abs(x))
    moved_y = up * np.where(outer_rows, 4 * s - np.abs(y), np.abs(y) + 2 * s)
    return unit_energy_grid(np.where(kept, x, moved_x), np.where(kept, y, moved_y))


def unit_energy_grid(x: NDArray[np.int64], y: NDArray[np.int64]) -> Constellation:
    """The points x + j y, integers in label order, scaled to unit mean energy.

    One factor scales all coordinates, so that they stay a grid up to one rounding each.
    """
    scale = 1 / math.sqrt(float(np.sum(x * x + y * y)) / x.size)
    points = np.empty(x.size, np.complex128)
    points.real = x * scale
    points.imag = y * scale
    return Constellation(points, np.arange(x.size))


def label_bits(labels: NDArray[np.int64], n: int) -> NDArray[np.int64]:
    """The n bits of each label, b0 first, shape (M, n)."""
    return labels[:, None] >> np.arange(n)[::-1] & 1


def integer(name: str, value: object) -> int:
    """The value as an int, or a TypeError that names it."""
    try:
        return operator.index(value)  # type: ignore[arg-type]
    except TypeError:
        raise TypeError(f"{name} must be an integer, got {value!r}") from None


def _rectangle(columns: int, rows: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """The coordinates (x, y) of a Gray-labelled rectangle in half-spacings, by label, x bits first."""
    return np.repeat(_gray_levels(columns), rows), np.tile(_gray_levels(rows), columns)


def _gray_levels(size: int) -> NDArray[np.int64]:
    """The level, in half-spacings, of each binary reflected Gray label."""
    place = np.arange(size)
    levels = np.empty(size, np.int64)
    levels[place ^ place >> 1] = 2 * place - (size - 1)
    return levels


def _is_power_of_two(value: int) -> bool:
    return value > 0 and value & (value - 1) == 0


def _energy(points: NDArray[np.complex128]) -> NDArray[np.float64]:
    energy: NDArray[np.float64] = points.real**2 + points.imag**2
    return energy


def _first(where: NDArray[np.bool_]) -> int | tuple[int, ...]:
    """The index of the first True."""
    index = tuple(int(i) for i in np.argwhere(where)[0])
    return index[0] if len(index) == 1 else index


def _read_only(array: NDArray[Any]) -> NDArray[Any]:
    """A copy that cannot be made writeable again, since its memory is a bytes object's."""
    return np.frombuffer(array.tobytes(), array.dtype).reshape(array.shape)


def _checked_points(points: ArrayLike) -> NDArray[np.complex128]:
    given = np.asarray(points)
    if given.dtype.kind not in "iufc":
        raise TypeError(f"points must be complex numbers, got {given.dtype}")
    if given.ndim != 1:
        raise ValueError(f"points must have one dimension, got shape {given.shape}")
    if not (_is_power_of_two(given.size) and 2 <= given.size <= MAX_ORDER):
        raise ValueError(f"points must number a power of two from 2 to {MAX_ORDER}, got {given.size}")
    array = given.astype(np.complex128) + 0  # + 0 turns -0.0 to 0.0: equal values get equal hashes
    with np.errstate(over="ignore", invalid="ignore"):
        energy = _energy(array)
    bad = ~np.isfinite(energy)
    if bad.any():
        raise ValueError(f"points must be finite, squares too, got {array[bad][0]} at index {_first(bad)}")
    if energy.max() < np.finfo(float).tiny:
        raise ValueError(f"points must reach |point|^2 >= {np.finfo(float).tiny}, got at most {energy.max()}")
    order = np.argsort(array, kind="stable")
    same = array[order[1:]] == array[order[:-1]]
    if same.any():
        i, j = order[_first(same)], order[1:][_first(same)]
        raise ValueError(f"points must differ, got {array[i]} at both index {i} and {j}")
    return _read_only(array)


def _checked_labels(labels: ArrayLike, order: int) -> NDArray[np.int64]:
    given = np.asarray(labels)
    if given.dtype.kind not in "iu":
        raise TypeError(f"labels must be integers, got {given.dtype}")
    if given.shape != (order,):
        raise ValueError(f"labels must have shape ({order},) like points, got {given.shape}")
    outside = (given < 0) | (given >= order)
    if outside.any():
        value = given[outside][0]
        raise ValueError(f"labels must be 0 to {order - 1}, got {value} at index {_first(outside)}")
    array = given.astype(np.int64)
    times = np.bincount(array, minlength=order)
    if (times != 1).any():
        repeated, missing = _first(times > 1), _first(times == 0)
        expected = f"labels must hold each of 0 to {order - 1} once"
        raise ValueError(f"{expected}, got {repeated} repeatedly and no {missing}")
    return _read_only(array)
