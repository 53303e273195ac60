"""The tag family 36h11: 587 codes whose least Hamming distance over all rotations is 11.

Source: Olson, "AprilTag: A robust and flexible visual fiducial system", ICRA 2011; Wang & Olson, "AprilTag 2", IROS 2016.
"""

import numpy as np

from vision import pattern


def codes() -> np.ndarray:
    """(587, 36) bits inside the border."""
    return np.stack([pattern.cells(tag_id)[1:-1, 1:-1].ravel() for tag_id in range(pattern.N_CODES)])


def test_there_are_587_codes_each_in_a_black_border() -> None:
    assert len(pattern.family().bytesList) == 587 == pattern.N_CODES
    for tag_id in (0, 40, 586):
        cells = pattern.cells(tag_id)
        border = np.concatenate([cells[0], cells[-1], cells[:, 0], cells[:, -1]])
        assert not border.any()


def test_no_two_codes_differ_in_fewer_than_eleven_cells_at_any_rotation() -> None:
    bits = codes().astype(np.int16)
    grids = bits.reshape(-1, 6, 6)
    least = 36
    for turns in range(4):
        turned = np.rot90(grids, turns, axes=(1, 2)).reshape(-1, 36)
        distance = bits @ (1 - turned.T) + (1 - bits) @ turned.T
        if turns == 0:
            np.fill_diagonal(distance, 36)
        least = min(least, int(distance.min()))
    assert least == 11
