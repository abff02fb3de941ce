"""Pictures of constellations: points, labels and decision regions, by matplotlib (the extra ``cli``)."""

from __future__ import annotations

import os
from math import ceil, sqrt
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from pydemap.constellation import Constellation
from pydemap.recording import RecordingError, replacing

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["draw", "save"]

_FIGURE_INCHES = 8.0
_DOTS_PER_INCH = 200.0  # digits have a whole number of dots, and the smallest are still even
_AXES_POINTS = 480.0  # about what titles and ticks leave of the width, in printer's points
_SMALLEST_TEXT = 4.5  # printer's points; a smaller one cannot be read in print
_LARGEST_TEXT = 12.0
_MOST_REGIONS = 4096  # beyond, a region has fewer than 8 by 8 dots of the picture
_SHADE, _PLAIN = "#b9d3ea", "#ffffff"  # told apart in grey too


def draw(constellation: Constellation, *, bit: int | None = None, name: str | None = None) -> Figure:
    """Draw a constellation: points with their labels, b0 first, and the region nearest to each point.

    Without ``bit``, regions whose labels have an odd number of ones are shaded: neighbours that differ in
    one bit then have different shades, so a break in the chessboard is a break of the Gray labelling.

    Parameters
    ----------
    constellation : Constellation
    bit : int, optional
        Shade the regions of the points with b_bit = 1 instead.
    name : str, optional
        A heading; the number of points by default.

    Returns
    -------
    matplotlib.figure.Figure
        Axes in units of the root mean energy, sqrt(Es). Labels without room for legible text and the regions
        of more than 4096 points are left out, and the heading says so.

    Raises
    ------
    ValueError
        ``bit`` is none of the constellation's.
    ModuleNotFoundError
        matplotlib is not installed.
    """
    # Not pyplot: a Figure of its own needs no display and leaves no state behind.
    from matplotlib.collections import PolyCollection
    from matplotlib.figure import Figure

    n = constellation.bits_per_symbol
    if bit is not None and not 0 <= bit < n:
        raise ValueError(f"bit {bit}: expected 0 to {n - 1} for labels of {n} bits")
    unit = sqrt(constellation.mean_energy)
    points = constellation.points / unit
    distance = constellation.min_distance / unit
    outermost = float(max(np.abs(points.real).max(), np.abs(points.imag).max()))
    reach = outermost + max(0.75 * distance, 0.05 * outermost)
    spacing = _AXES_POINTS * distance / (2 * reach)  # of the closest points, in printer's points
    mean_spacing = _AXES_POINTS / sqrt(constellation.order)
    shaded = constellation.bits[:, bit] == 1 if bit is not None else constellation.bits.sum(axis=1) % 2 == 1
    notes = [f"shaded: b{bit} = 1" if bit is not None else "shaded: labels with an odd number of ones"]

    figure = Figure(figsize=(_FIGURE_INCHES, _FIGURE_INCHES), dpi=_DOTS_PER_INCH, layout="constrained")
    axes = figure.add_subplot(aspect="equal", xlim=(-reach, reach), ylim=(-reach, reach))
    axes.set_xlabel(r"I, in units of $\sqrt{E_s}$")
    axes.set_ylabel(r"Q, in units of $\sqrt{E_s}$")
    if constellation.order <= _MOST_REGIONS:
        axes.add_collection(
            PolyCollection(
                [np.column_stack([region.real, region.imag]) for region in _nearest_regions(points, reach)],
                facecolors=[_SHADE if odd else _PLAIN for odd in shaded],
                edgecolors="#808080",
                linewidths=min(0.8, mean_spacing / 30),
            )
        )
    else:
        notes = ["decision regions left out, too small to be seen"]
    size = min(30.0, (mean_spacing / 6) ** 2)
    axes.scatter(points.real, points.imag, s=size, color="#16365c", linewidths=0, zorder=2)

    lines, text_size = _label_layout(n, spacing)
    if text_size < _SMALLEST_TEXT:
        notes.append(f"labels left out, no room for {n} bits")
    else:
        notes.append("labels b0 first")
        row = ceil(n / lines)
        for point, bits in zip(points, constellation.bits, strict=True):
            digits = "".join(map(str, bits))
            axes.annotate(
                "\n".join(digits[first : first + row] for first in range(0, n, row)),
                (point.real, point.imag),
                xytext=(0, -spacing / 10),
                textcoords="offset points",
                ha="center",
                va="top",
                family="monospace",
                size=text_size,
                linespacing=1.0,
            )
    axes.set_title(f"{name or f'{constellation.order} points'}\n{'; '.join(notes)}", size=11)
    return figure


def save(
    constellation: Constellation,
    path: str | os.PathLike[str],
    *,
    bit: int | None = None,
    name: str | None = None,
) -> None:
    """Draw a constellation as `draw` does into a file, ``.png`` or ``.svg``; the same bytes every time.

    Raises
    ------
    RecordingError
        The name ends otherwise, or the file cannot be written; nothing is then written.
    ValueError, ModuleNotFoundError
        As in `draw`.
    """
    path = Path(path)
    if path.suffix not in (".png", ".svg"):
        raise RecordingError(f"{path}: expected the name of a picture to end in .png or .svg")
    figure = draw(constellation, bit=bit, name=name)
    from matplotlib import rc_context

    with replacing(path) as (file,), rc_context({"svg.hashsalt": "pydemap"}):
        if path.suffix == ".svg":
            figure.savefig(file, format="svg", metadata={"Date": None})
        else:
            figure.savefig(file, format="png")


def _label_layout(n: int, spacing: float) -> tuple[int, float]:
    """Number of lines for n digits below a point, and the text size that fits, in printer's points."""

    def size(lines: int) -> float:
        # A monospace digit is 0.6 of the text size wide; a line takes 1.2 of it.
        return min(0.85 * spacing / (0.6 * ceil(n / lines)), 0.38 * spacing / (1.2 * lines), _LARGEST_TEXT)

    lines = max((1, 2, 3), key=size)
    return lines, size(lines)


def _nearest_regions(points: NDArray[np.complex128], reach: float) -> list[NDArray[np.complex128]]:
    """Corners of the part of the square -reach ... reach nearest to each point.

    The square is cut along the bisectors to the other points, nearest first. A point further away than
    twice the furthest corner left cannot cut any more, so that a few dozen cuts do.
    """
    square = np.array([complex(x, y) * reach for x, y in ((-1, -1), (1, -1), (1, 1), (-1, 1))], np.complex128)
    regions = []
    for point in points:
        corners = square
        distances = np.abs(points - point)
        for other in np.argsort(distances)[1:]:
            if distances[other] > 2 * np.abs(corners - point).max():
                break
            corners = _cut(corners, points[other] - point, (points[other] + point) / 2)
        regions.append(corners)
    return regions


def _cut(corners: NDArray[np.complex128], normal: complex, through: complex) -> NDArray[np.complex128]:
    """Keep the part of a convex polygon behind the line with this normal through that point."""
    ahead = ((corners - through) * np.conj(normal)).real
    if ahead.max() <= 1e-9 * abs(normal) ** 2:  # a line through a corner must not shave off a sliver
        return corners
    kept = []
    for here, there, a, b in zip(corners, np.roll(corners, -1), ahead, np.roll(ahead, -1), strict=True):
        if a <= 0:
            kept.append(here)
        if (a <= 0) != (b <= 0):
            kept.append(here + (there - here) * a / (a - b))
    return np.array(kept)
