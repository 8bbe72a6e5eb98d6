"""Automatic outlines: on images that scikit-image's wheel carries, and on invented cells of known shape."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import tifffile
from scipy import ndimage
from skimage import data
from skimage.draw import ellipse

from tfm.errors import InputError, MeasurementError
from tfm.images import read_outline_stack, read_outlines
from tfm.images.automatic import segment_cells

Ellipse = tuple[float, float, float, float, float]


def mask_of(cell: Ellipse, n: int = 400) -> np.ndarray:
    y, x, a, b, angle = cell
    mask = np.zeros((n, n), bool)
    mask[ellipse(y, x, b, a, shape=(n, n), rotation=-angle)] = True
    return mask


def fluorescence(*cells: tuple[Ellipse, float], seed: int = 0, ground: float = 100.0, n: int = 400) -> np.ndarray:
    """Invented cells with uneven staining, blurred by optics, with photon noise."""
    rng = np.random.default_rng(seed)
    image = np.zeros((n, n))
    for cell, brightness in cells:
        texture = 1 + 6 * ndimage.gaussian_filter(rng.standard_normal((n, n)), 6)
        image += mask_of(cell, n) * brightness * np.clip(texture, 0.3, None)
    return rng.poisson(ndimage.gaussian_filter(image, 2) + ground).astype(np.float32)


def overlap(first: np.ndarray, second: np.ndarray) -> float:
    """Intersection over union."""
    return float(np.count_nonzero(first & second) / np.count_nonzero(first | second))


def test_every_coin_of_the_scikit_image_sample() -> None:
    # skimage.data.coins: 24 Greek coins on an unevenly lit ground; the number is common knowledge.
    outlines = segment_cells(data.coins())
    assert len(outlines.cells) == 24
    assert outlines.source == "automatic"


def test_the_cell_of_the_scikit_image_sample() -> None:
    # skimage.data.cell: one round cell with a dark halo on a ground full of fringes; it spans about 80 px in the image.
    outlines = segment_cells(data.cell())
    assert outlines.cells == (1,)
    rows, columns = np.argwhere(outlines.labels == 1).T
    assert rows.size == pytest.approx(np.pi / 4 * 110**2, rel=0.35)
    assert np.ptp(rows) == pytest.approx(np.ptp(columns), rel=0.1)


CELL: Ellipse = (200, 200, 120, 50, 0.4)


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("brightness", [20.0, 300.0, 5000.0])
def test_one_cell_is_found_at_its_place(brightness: float, seed: int) -> None:
    outlines = segment_cells(fluorescence((CELL, brightness), seed=seed))
    assert outlines.cells == (1,)
    assert overlap(outlines.labels == 1, mask_of(CELL)) > 0.85


def test_a_dim_cell_beside_a_bright_one_counts() -> None:
    dim, bright = (120, 120, 70, 45, 0.4), (280, 280, 70, 45, 0.6)
    outlines = segment_cells(fluorescence((dim, 60), (bright, 900)))
    assert len(outlines.cells) == 2
    for cell in (dim, bright):
        number = outlines.labels[int(cell[0]), int(cell[1])]
        assert overlap(outlines.labels == number, mask_of(cell)) > 0.85


def test_uneven_ground_is_taken_off() -> None:
    image = fluorescence((CELL, 150.0)) + np.linspace(0, 150, 400, dtype=np.float32)[None, :]
    outlines = segment_cells(image)
    assert outlines.cells == (1,)
    assert overlap(outlines.labels == 1, mask_of(CELL)) > 0.85


@pytest.mark.parametrize("count", [2, 4])
def test_touching_cells_are_parted(count: int) -> None:
    cells = [(100 + 50 * i, 100 + 60 * i, 40, 32, 0.0) for i in range(count)]
    outlines = segment_cells(fluorescence(*((cell, 300.0) for cell in cells)))
    assert len(outlines.cells) == count
    numbers = {int(outlines.labels[int(cell[0]), int(cell[1])]) for cell in cells}
    assert numbers == set(range(1, count + 1))


@pytest.mark.parametrize("angles", [(0.4,), (0.2, 1.3, 2.4)], ids=["spindle", "star"])
def test_long_and_branched_cells_stay_whole(angles: tuple[float, ...]) -> None:
    cells = [((200.0, 200.0, 150.0, 18.0, angle), 300.0) for angle in angles]
    assert segment_cells(fluorescence(*cells)).cells == (1,)


@pytest.mark.parametrize("seed", range(6))
def test_nothing_is_found_in_noise(seed: int) -> None:
    with pytest.raises(MeasurementError) as error:
        segment_cells(fluorescence(seed=seed), file="empty.tif")
    assert error.value.code == "no-cell-found"
    assert "draw the outlines" in str(error.value)


@pytest.mark.parametrize("value", [0.0, 7.0, -3.0])
def test_nothing_is_found_in_a_uniform_image(value: float) -> None:
    with pytest.raises(MeasurementError, match="uniform"):
        segment_cells(np.full((100, 100), value, np.float32))


def test_pixels_that_are_not_finite_are_refused() -> None:
    image = fluorescence((CELL, 300.0))
    image[5, 5] = np.nan
    with pytest.raises(MeasurementError) as error:
        segment_cells(image)
    assert error.value.code == "not-finite"


def test_auto_in_the_sheet(tmp_path: Path) -> None:
    tifffile.imwrite(tmp_path / "actin.tif", fluorescence((CELL, 300.0)).astype(np.uint16))
    for text in ("auto:actin.tif", " auto: actin.tif "):
        outlines = read_outlines(text, (400, 400), base=tmp_path)
        assert outlines.source == "automatic"
        assert overlap(outlines.labels == 1, mask_of(CELL)) > 0.85
    with pytest.raises(InputError) as error:
        read_outlines("auto:actin.tif", (400, 401), base=tmp_path)
    assert error.value.code == "outline-shape"
    with pytest.raises(InputError) as error:
        read_outlines("auto:", (400, 400), base=tmp_path)
    assert error.value.code == "outline-format"


def test_auto_on_a_movie_with_an_empty_frame(tmp_path: Path) -> None:
    frames = [fluorescence((CELL, 300.0)), fluorescence(), fluorescence((CELL, 300.0))]
    tifffile.imwrite(tmp_path / "movie.tif", np.stack(frames).astype(np.uint16), imagej=True, metadata={"axes": "TYX"})
    outlines = read_outline_stack("auto:movie.tif", (400, 400), base=tmp_path, n_frames=3)
    assert outlines.at(2).cells == (1,)
    with pytest.raises(MeasurementError) as error:
        outlines.at(1)
    assert error.value.code == "no-cell-found"


def test_auto_on_a_movie_follows_the_cells(tmp_path: Path) -> None:
    frames = []
    for t in range(3):
        pair = ((100 + 20 * t, 120, 50, 30, 0.2), 300.0), ((300 - 20 * t, 280, 50, 30, 0.2), 300.0)
        frames.append(fluorescence(*pair, seed=t))
    tifffile.imwrite(tmp_path / "movie.tif", np.stack(frames).astype(np.uint16), imagej=True, metadata={"axes": "TYX"})
    outlines = read_outline_stack("auto:movie.tif", (400, 400), base=tmp_path, n_frames=3)
    for t in range(3):
        labels = outlines.at(t).labels
        assert (labels[100 + 20 * t, 120], labels[300 - 20 * t, 280]) == (1, 2)
