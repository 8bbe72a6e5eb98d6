"""Neighbours and cells through time, against scikit-image and hand-made cases."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import ndimage
from skimage.graph import RAG
from skimage.segmentation import relabel_sequential

from tfm.images import LabelFollower, cells_cut_by_edge, follow_labels, touching_groups


def image(text: str) -> np.ndarray:
    return np.array([[int(c) for c in row] for row in text.split()], dtype=np.int32)


@pytest.mark.parametrize(
    ("text", "groups"),
    [
        ("000 000", ()),
        ("102 102", ((1,), (2,))),
        ("112 112", ((1, 2),)),
        ("100 020 003", ((1, 2, 3),)),  # by a corner: 8-neighbourhood
        ("003 020 100", ((1, 2, 3),)),
        ("1 2 3 0 7", ((1, 2, 3), (7,))),
        ("905 900 002", ((2,), (5,), (9,))),
    ],
)
def test_touching_groups_by_hand(text: str, groups: tuple[tuple[int, ...], ...]) -> None:
    assert touching_groups(image(text)) == groups


def test_touching_groups_against_scikit_image() -> None:
    import networkx

    rng = np.random.default_rng(0)
    for _ in range(5):
        blobs = ndimage.label(ndimage.gaussian_filter(rng.random((60, 60)), 2) > 0.5)[0]
        cut = np.where(blobs > 0, blobs * 4 + (np.add.outer(np.arange(60) // 17, np.arange(60) // 23) % 4), 0)
        labels, _, _ = relabel_sequential(cut)
        labels = labels.astype(np.int32)
        graph = RAG(labels, connectivity=2)
        graph.remove_node(0)
        expected = tuple(sorted(tuple(sorted(map(int, part))) for part in networkx.connected_components(graph)))
        assert touching_groups(labels) == expected


def test_every_cell_is_in_one_group_and_numbers_may_have_gaps() -> None:
    labels = image("1100 0090 2009")
    assert sorted(cell for group in touching_groups(labels) for cell in group) == [1, 2, 9]


def test_cells_cut_by_edge() -> None:
    assert cells_cut_by_edge(image("00000 01100 00005 00000")) == {5}
    assert cells_cut_by_edge(image("10000 00300 00000 20004")) == {1, 2, 4}
    assert cells_cut_by_edge(np.zeros((5, 5), np.int32)) == set()


def disc(shape: tuple[int, int], y: float, x: float, r: float) -> np.ndarray:
    rows, columns = np.mgrid[: shape[0], : shape[1]]
    return (rows - y) ** 2 + (columns - x) ** 2 < r**2


def test_shuffled_numbers_are_restored() -> None:
    rng = np.random.default_rng(1)
    # on a grid, so that no cell ever covers another one
    centres = np.stack(np.meshgrid([30, 100, 170], [25, 75, 125, 175]), axis=-1).reshape(12, 2).astype(float)
    drift = rng.uniform(-0.9, 0.9, (12, 2))
    truth, shuffled = [], []
    for t in range(15):
        labels = np.zeros((200, 200), np.int32)
        for cell, (y, x) in enumerate(centres + t * drift, start=1):
            labels[disc(labels.shape, y, x, 9) & (labels == 0)] = cell
        truth.append(labels)
        order = np.concatenate([[0], rng.permutation(12) + 1]) if t else np.arange(13)
        shuffled.append(order[labels].astype(np.int32))
    np.testing.assert_array_equal(follow_labels(shuffled), np.stack(truth))


def test_a_cell_that_comes_back_keeps_its_number_and_a_new_one_gets_a_free_one() -> None:
    frames = [image("110220000"), image("110000000"), image("110220033"), image("110220033")]
    frames[2] = np.where(frames[2] == 3, 1, np.where(frames[2] == 1, 3, frames[2])).astype(np.int32)
    followed = follow_labels(frames)
    np.testing.assert_array_equal(followed[2], image("110220033"))
    np.testing.assert_array_equal(followed[3], image("110220033"))


def test_a_number_is_never_given_twice() -> None:
    # cell 1 leaves for good, another cell called 1 turns up elsewhere
    followed = follow_labels([image("110000220"), image("000000220"), image("000110220")])
    assert followed[2].tolist() == image("000330220").tolist()


def test_consistent_numbers_are_left_alone() -> None:
    frames = [np.roll(image("1110002220000"), t, axis=1) for t in range(4)]
    np.testing.assert_array_equal(follow_labels(frames), np.stack(frames))


def test_a_neighbour_that_moves_in_does_not_inherit() -> None:
    # cell 2 overlaps the old place of cell 1 by a pixel; both must keep their numbers
    followed = follow_labels([image("1111022220"), image("1110222200")])
    assert followed[1].tolist() == image("1110222200").tolist()


def test_division_gives_the_number_to_the_larger_half() -> None:
    followed = follow_labels([image("1111111100"), image("1111102200")])
    assert followed[1].tolist() == image("1111102200").tolist()


def test_empty_frames_pass() -> None:
    follower = LabelFollower()
    assert follower.step(image("0000")) == {}
    assert follower.step(image("0550")) == {5: 5}
    assert follower.step(image("0000")) == {}
    assert follower.step(image("0220")) == {2: 5}
