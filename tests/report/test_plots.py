"""Pictures say what the numbers say: positions, directions, scales, regions and colours."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from matplotlib import colormaps
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Polygon
from matplotlib.path import Path as Outline
from matplotlib.text import Annotation
from skimage.color import rgb2lab

from tfm.report import plots
from tfm.report.checks import unexplained_ground
from tfm.report.fielddata import FieldArrays, read_arrays
from tfm.report.files import thumbnail
from tfm.report.results import FieldResult, read_results
from tfm.report.style import MARKS, PAPER, SIGN_MAP, SIZE_MAP, TRACTION_MAP


@pytest.fixture
def ax() -> Axes:
    axes = Figure().add_subplot()
    plots.frame_axes(axes, (0.0, 80e-6), (0.0, 80e-6))
    return axes


def _tips(ax: Axes) -> list[tuple[np.ndarray, np.ndarray]]:
    """Start and end (um) of every arrow head drawn by an annotation."""
    found = [c for c in ax.get_children() if isinstance(c, Annotation) and c.arrow_patch is not None]
    return [(np.array(c.xyann, dtype=float), np.array(c.xy, dtype=float)) for c in found]


@pytest.mark.parametrize(("major", "sign"), [(-1.0e-12, -1.0), (1.0e-12, 1.0)])
def test_heads_point_inwards_for_a_cell_that_pulls(ax: Axes, major: float, sign: float) -> None:
    centre = np.array([40.0, 30.0])
    plots.draw_dipole(ax, centre * 1e-6, [major, 0.0, 0.1 * major], scale=20e-6 / 1e-12)
    along_x = [(a, b) for a, b in _tips(ax) if abs(a[1] - centre[1]) < 1e-9 and abs(b[1] - centre[1]) < 1e-9]
    assert len(along_x) == 2
    for start, end in along_x:
        grows = np.hypot(*(end - centre)) - np.hypot(*(start - centre))
        assert np.sign(grows) == sign


def test_half_axes_have_the_stated_length_and_direction(ax: Axes) -> None:
    # 45 degrees from +x towards +y runs to the lower right: (1, 1) in a frame whose y points down.
    plots.draw_dipole(ax, [40e-6, 40e-6], [-1e-12, -0.5e-12, -1e-12], scale=10e-6 / 1e-12)
    ends = np.array([line.get_xydata()[-1] for line in ax.lines if len(line.get_xydata()) == 2]) - 40.0
    longest = ends[np.argmax(np.hypot(*ends.T))]
    assert np.hypot(*longest) == pytest.approx(15.0, rel=1e-12)  # principal values -1.5 and -0.5 pN m
    assert abs(longest[0]) == pytest.approx(abs(longest[1]), rel=1e-9)
    assert longest[0] * longest[1] > 0
    assert ax.yaxis_inverted()


def test_tip_regions_hold_what_the_covariance_says(ax: Axes) -> None:
    """Tips of tensors drawn from the covariance fall into the region as often as two independent 95 % ranges would."""
    rng = np.random.default_rng(5)
    mean = np.array([-1.0, -0.25, -0.4])
    covariance = np.array([[4e-4, 1e-4, 0.0], [1e-4, 2e-4, -5e-5], [0.0, -5e-5, 3e-4]])
    plots.draw_dipole(ax, [0.0, 0.0], mean * 1e-12, covariance * 1e-24, scale=1e-6 / 1e-12)
    region = Outline(next(p for p in ax.patches if isinstance(p, Polygon)).get_xy())
    shares = 0
    for xx, xy, yy in rng.multivariate_normal(mean, covariance, size=4000):
        values, vectors = np.linalg.eigh([[xx, xy], [xy, yy]])
        k = int(np.argmax(np.abs(values)))
        tip = abs(values[k]) * vectors[:, k]
        shares += region.contains_point(tip) or region.contains_point(-tip)
    # An ellipse of 1.96 standard deviations in two independent directions holds 1 - exp(-1.96^2 / 2) = 85 %.
    assert shares / 4000 == pytest.approx(1 - np.exp(-(1.96**2) / 2), abs=0.02)


def test_arrows_are_measured_vectors(ax: Axes) -> None:
    x = np.arange(5, 80, 2) * 1e-6
    u = np.random.default_rng(1).normal(0, 1e-6, (2, len(x), len(x)))
    u[:, 3, 3] = np.nan
    drawn = plots.draw_displacement(ax, x, x, u, arrows=12)
    ratio = np.hypot(drawn.U, drawn.V) / (drawn.get_array() * 1.0)
    assert np.allclose(ratio, ratio[0], rtol=1e-9, atol=0)  # one scale for all
    known = {tuple(np.round(v, 9)) for v in u.reshape(2, -1).T * 1e6 if np.isfinite(v).all()}
    for vx, vy in zip(drawn.U, drawn.V, strict=True):
        assert tuple(np.round([vx / ratio[0], vy / ratio[0]], 9)) in known
    assert len(drawn.U) <= 13**2


def test_noise_is_drawn_as_dots_without_a_direction(ax: Axes) -> None:
    x = np.arange(5, 80, 4) * 1e-6
    u = np.full((2, len(x), len(x)), 0.01e-6)
    u[0, 5, 5] = 1e-6
    drawn = plots.draw_displacement(ax, x, x, u, noise=0.05e-6)
    assert len(drawn.U) == 1


@pytest.mark.parametrize("name", [SIZE_MAP, TRACTION_MAP])
def test_maps_of_sizes_rise_evenly_in_grey(name: str) -> None:
    lightness = rgb2lab(colormaps[name](np.linspace(0, 1, 64))[None, :, :3])[0, :, 0]
    steps = np.diff(lightness)
    assert (steps > 0).all()
    assert steps.max() < 3 * steps.min() + 0.5


def test_signs_stay_apart_for_colour_blind_readers() -> None:
    # Linear-light simulation of red and green blindness: Vienot, Brettel & Mollon, Color Res. Appl. 24:243, 1999.
    to_lms = np.array([[17.8824, 43.5161, 4.11935], [3.45565, 27.1554, 3.86714], [0.0299566, 0.184309, 1.46709]])
    blind = {
        "protan": np.array([[0, 2.02344, -2.52581], [0, 1, 0], [0, 0, 1]]),
        "deutan": np.array([[1, 0, 0], [0.494207, 0, 1.24827], [0, 0, 1]]),
    }
    ends = colormaps[SIGN_MAP](np.array([0.12, 0.5, 0.88]))[:, :3]
    for matrix in blind.values():
        seen = np.clip((np.linalg.inv(to_lms) @ matrix @ to_lms @ (ends.T**2.2)).T, 0, 1) ** (1 / 2.2)
        lab = rgb2lab(seen[None])[0]
        for i, j in ((0, 1), (1, 2), (0, 2)):
            assert np.linalg.norm(lab[i] - lab[j]) > 25  # ten times a just noticeable difference


def test_marks_differ_in_shape_and_have_contrast() -> None:
    def light(colour: str) -> float:
        parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
        linear = [c / 12.92 if c <= 0.03928 else ((c + 0.055) / 1.055) ** 2.4 for c in parts]
        return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]

    assert len({shape for shape, _ in MARKS.values()}) == len(MARKS)
    for _, colour in MARKS.values():
        assert (light(PAPER) + 0.05) / (light(colour) + 0.05) >= 4.5


def test_outlines_lie_around_the_cell_in_the_images_frame(ax: Axes) -> None:
    labels = np.zeros((20, 30), np.int32)
    labels[4:8, 10:25] = 3
    xs, ys = np.arange(30) * 2e-6, np.arange(20) * 2e-6
    plots.draw_outlines(ax, xs, ys, labels)
    points = np.vstack([line.get_xydata() for line in ax.lines])
    assert points[:, 0].min() == pytest.approx(19.0)
    assert points[:, 0].max() == pytest.approx(49.0)
    assert points[:, 1].min() == pytest.approx(7.0)
    assert points[:, 1].max() == pytest.approx(15.0)
    assert any(text.get_text() == "3" for text in ax.texts)


def test_the_moment_density_integrates_to_the_moment(ax: Axes) -> None:
    """Two balanced pulls: the map's integral is force times distance, whatever the map's colours."""
    x = np.arange(40) * 1e-6
    labels = np.ones((40, 40), np.int32)
    traction = np.zeros((2, 40, 40))
    traction[0, 20, 5], traction[0, 20, 35] = 300.0, -300.0
    shown = plots.draw_contraction(ax, x, x, traction, labels)
    total = float(np.sum(np.asarray(shown.get_array()))) * 1e-3 * (1e-6) ** 2  # nN/um = 1e-3 N/m
    assert total == pytest.approx(300.0 * 1e-12 * 30e-6, rel=1e-9)
    low, high = shown.get_clim()
    assert low == -high


def test_noise_alone_leaves_little_unexplained() -> None:
    rng = np.random.default_rng(2)
    x = np.arange(5, 200, 1) * 1e-6
    zero = np.zeros((2, 100, 100))
    labels = np.zeros((100, 100), np.int32)
    labels[45:55, 45:55] = 1
    lattice = np.arange(100) * 2e-6
    arrays = FieldArrays(0, 1, x=x, y=x, u=rng.normal(0, 2e-8, (2, len(x), len(x))), xt=lattice, yt=lattice,
                         traction=zero, predicted=zero, labels=labels)  # fmt: skip
    row = {"frame": "0", "status": "ok", "displacement_noise_um": "0.02"}
    share = unexplained_ground(FieldResult("a", 0, "a", "ok", "", frames=(row,)), arrays)
    assert share is not None
    assert share == pytest.approx(100 * np.exp(-8), abs=0.03)  # Rayleigh: P(r > 4 sd) = exp(-8)


def test_thumbnails_are_small_and_keep_their_shape(built: Path) -> None:
    from io import BytesIO

    from PIL import Image

    field = read_results(built).fields[0]
    assert field.data is not None
    content = thumbnail(read_arrays(field.data))
    assert content is not None
    picture = Image.open(BytesIO(content))
    assert picture.format == "WEBP"
    assert max(picture.size) == 256
    assert len(content) < 20_000


def test_frames_of_a_series_are_read_one_by_one(make_folder: Callable[..., Path], tmp_path: Path) -> None:
    root = make_folder(tmp_path / "results", fields=5, bad=0)
    field = read_results(root).fields[4]
    assert field.data is not None
    first, last = read_arrays(field.data, frame=0), read_arrays(field.data, frame=4)
    assert first.frames == 5
    assert first.traction is not None
    assert last.traction is not None
    assert np.allclose(last.traction, 1.6 * first.traction, rtol=1e-5, atol=0)


def test_pictures_inside_vector_files_are_small_and_unchanged() -> None:
    """Whatever colours a picture has, packing it tighter does not change one pixel."""
    import base64
    import io
    import re

    from PIL import Image

    from tfm.report.files import svg_text
    from tfm.report.style import drawing, new_figure

    rng = np.random.default_rng(4)
    values = rng.integers(0, 200, (64, 64)) / 199
    kinds = {"gray": "L", "viridis": "P", "any": "RGBA"}
    with drawing():
        for name, mode in kinds.items():
            figure = new_figure(2, 2)
            axes = figure.add_axes((0, 0, 1, 1))
            axes.set_axis_off()
            image = rng.random((64, 64, 3)) if name == "any" else values
            axes.imshow(image, cmap=None if name == "any" else name, vmin=0, vmax=1)
            packed = re.search(r"data:image/png;base64,([^\"]+)", svg_text(figure, title="a"))
            assert packed is not None
            picture = Image.open(io.BytesIO(base64.b64decode(packed.group(1))))
            assert picture.mode == mode
            expected = image if name == "any" else colormaps[name](values)[..., :3]
            seen = np.asarray(picture.convert("RGB"), dtype=float) / 255
            assert np.abs(np.sort(seen.ravel()) - np.sort(expected.ravel())).max() < 2.5 / 255
