"""Pictures of constellations: regions, shades, labels, units, and files that come whole or not at all."""

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.collections import PathCollection, PolyCollection
from matplotlib.colors import to_rgb

import pydemap
from pydemap import plot, recording

RNG = np.random.default_rng(5)
CONSTELLATIONS = {
    "16": pydemap.square_qam(16),
    "cross 8": pydemap.cross_qam(8),
    "cross 32": pydemap.cross_qam(32),
    "cross 128": pydemap.cross_qam(128),
    "ITU 32": pydemap.published_mapping("ITU-T G.9701", 32),
    "256": pydemap.square_qam(256),
    "BPSK": pydemap.rectangular_qam(2, 1),
    "ring": pydemap.Constellation(3 * np.exp(2j * np.pi * np.arange(16) / 16), np.arange(16)),
    "random": pydemap.Constellation(RNG.normal(size=(32, 2)) @ [1, 1j], RNG.permutation(32)),
}


def parts(figure):
    """The axes, the regions and the points' places of a picture."""
    (axes,) = figure.axes
    (regions,) = [part for part in axes.collections if isinstance(part, PolyCollection)]
    (points,) = [part for part in axes.collections if type(part) is PathCollection]
    return axes, regions, np.asarray(points.get_offsets()) @ [1, 1j]


def area(corners):
    return (
        abs(np.sum(corners.real * np.roll(corners.imag, -1) - corners.imag * np.roll(corners.real, -1))) / 2
    )


@pytest.mark.parametrize("name", CONSTELLATIONS)
def test_regions_hold_what_is_nearest_to_their_points(name):
    constellation = CONSTELLATIONS[name]
    axes, regions, points = parts(plot.draw(constellation))
    np.testing.assert_allclose(points, constellation.points / np.sqrt(constellation.mean_energy), rtol=1e-12)
    left, right = axes.get_xlim()
    assert left == -right
    assert max(np.abs(points.real).max(), np.abs(points.imag).max()) < right
    paths = regions.get_paths()
    assert len(paths) == constellation.order
    total = sum(area(path.vertices[:-1] @ [1, 1j]) for path in paths)
    assert total == pytest.approx((right - left) ** 2, rel=1e-9)  # none is missing and none overlaps

    probes = RNG.uniform(left, right, (400, 2))
    distance = np.abs((probes @ [1, 1j])[:, None] - points)
    ordered = np.sort(distance, axis=1)
    probes, distance = (each[ordered[:, 1] - ordered[:, 0] > 1e-9] for each in (probes, distance))
    inside = np.array([path.contains_points(probes) for path in paths])
    np.testing.assert_array_equal(inside.argmax(axis=0), distance.argmin(axis=1))
    assert (inside.sum(axis=0) == 1).all()


def test_an_inner_region_of_a_grid_is_a_square_around_its_point():
    c = pydemap.square_qam(16)
    _, regions, points = parts(plot.draw(c))
    for path, point in zip(regions.get_paths(), points, strict=True):
        if max(abs(point.real), abs(point.imag)) < c.min_distance:
            corners = (path.vertices[:-1] @ [1, 1j] - point) / (c.min_distance / 2)
            assert sorted(np.round(corners, 9).tolist(), key=np.angle) == [-1 - 1j, 1 - 1j, 1 + 1j, -1 + 1j]


@pytest.mark.parametrize("bit", [None, 0, 3])
def test_shades_tell_bits(bit):
    c = pydemap.cross_qam(32)
    figure = plot.draw(c, bit=bit)
    axes, regions, _ = parts(figure)
    plain = np.all(regions.get_facecolor()[:, :3] == 1, axis=1)
    ones = c.bits[:, bit] if bit is not None else c.bits.sum(axis=1) % 2
    np.testing.assert_array_equal(plain, ones == 0)
    assert ("b3 = 1" if bit == 3 else "b0 = 1" if bit == 0 else "odd number of ones") in axes.get_title()


def test_gray_labels_make_a_chessboard():
    c = pydemap.square_qam(64)
    _, regions, points = parts(plot.draw(c))
    shaded = regions.get_facecolor()[:, 0] < 1
    column, row = (np.rint(axis / c.min_distance + 3.5) for axis in (points.real, points.imag))
    assert len(set((shaded + column + row) % 2)) == 1


def test_shades_are_told_apart_and_read_on_in_grey():
    """Luminance by ITU-R BT.601: 0.299 R + 0.587 G + 0.114 B."""
    grey = [float(np.dot(to_rgb(colour), [0.299, 0.587, 0.114])) for colour in (plot._SHADE, plot._PLAIN)]
    assert grey[0] < grey[1] - 0.15
    assert grey[0] > 0.7  # black text on it stays readable


@pytest.mark.parametrize(
    "constellation", [pydemap.square_qam(4**k) for k in (1, 2, 3, 4)] + [pydemap.cross_qam(128)], ids=str
)
def test_labels_fit_between_the_points(constellation):
    figure = plot.draw(constellation)
    axes, _, points = parts(figure)
    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    assert [text.get_text().replace("\n", "") for text in axes.texts] == [
        "".join(map(str, bits)) for bits in constellation.bits
    ]
    to_dots = axes.transData.transform
    cell = constellation.min_distance * (to_dots((1, 0)) - to_dots((0, 0)))[0]
    for text, point in zip(axes.texts, points, strict=True):
        box = text.get_window_extent(canvas.get_renderer())
        x, y = to_dots((point.real, point.imag))
        assert box.width < cell
        assert abs((box.x0 + box.x1) / 2 - x) < 0.05 * cell
        assert y - cell / 2 < box.y0 < box.y1 < y
        assert text.get_size() >= 4.5
    assert "labels b0 first" in axes.get_title()


def test_labels_without_room_are_left_out_and_said_to_be():
    axes, _, _ = parts(plot.draw(pydemap.square_qam(1024)))
    assert len(axes.texts) == 0
    assert "labels left out, no room for 10 bits" in axes.get_title()


def test_regions_too_small_are_left_out_and_said_to_be():
    (axes,) = plot.draw(pydemap.cross_qam(8192)).axes
    assert not [part for part in axes.collections if isinstance(part, PolyCollection)]
    assert "decision regions left out" in axes.get_title()


def test_axes_tell_their_unit_and_the_heading_the_name():
    axes, _, _ = parts(plot.draw(pydemap.square_qam(4), name="QPSK of my own"))
    assert axes.get_xlabel() == r"I, in units of $\sqrt{E_s}$"
    assert axes.get_ylabel() == r"Q, in units of $\sqrt{E_s}$"
    assert axes.get_title().startswith("QPSK of my own\n")
    assert axes.get_aspect() == 1


@pytest.mark.parametrize(("name", "start"), [("p.png", b"\x89PNG\r\n\x1a\n"), ("p.svg", b"<?xml")])
def test_saved_pictures_are_the_same_every_time(tmp_path, name, start):
    c = pydemap.cross_qam(32)
    plot.save(c, tmp_path / name)
    first = (tmp_path / name).read_bytes()
    assert first.startswith(start)
    plot.save(c, tmp_path / name)
    assert (tmp_path / name).read_bytes() == first
    assert [path.name for path in tmp_path.iterdir()] == [name]


def test_pictures_refused(tmp_path):
    c = pydemap.square_qam(16)
    (tmp_path / "d.png").mkdir()
    with pytest.raises(recording.RecordingError, match=r"p\.pdf: expected .* \.png or \.svg"):
        plot.save(c, tmp_path / "p.pdf")
    with pytest.raises(recording.RecordingError, match=r"d\.png: cannot be written"):
        plot.save(c, tmp_path / "d.png")
    for bit in (-1, 4):
        with pytest.raises(ValueError, match=f"bit {bit}: expected 0 to 3"):
            plot.save(c, tmp_path / "p.png", bit=bit)
    assert [path.name for path in tmp_path.iterdir()] == ["d.png"]
