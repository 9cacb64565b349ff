"""What peaks off the common lattice are taken for."""

import numpy as np
import pytest

from fringespan.judgement.off_lattice import (
    BESIDE_LATTICE,
    FOLDED_FRINGES,
    MOIRE,
    OFF_LATTICE,
    SUPERLATTICE,
    off_lattice_cautions,
)
from fringespan.lattice import LatticeFit

SHAPE = (300, 200)
BASIS = np.array([(0.031, 0.094), (-0.087, 0.052)])
TURNED = np.array([(0.0697, 0.0741), (-0.0598, 0.0818)])


def lattice(basis, members):
    """Return a lattice that the first peaks lie on, or those marked."""
    n = len(members)
    zeros = np.zeros((n, 2), np.int64)
    return LatticeFit(basis, np.eye(4) * 1e-12, zeros, np.array(members, bool), np.zeros(n), 1.0)


def verdict_on(peak, second=None):
    """Return what the peak is taken for beside two peaks on the lattice and two on the other one."""
    frequency = np.array([*BASIS, *TURNED, peak])
    first = lattice(BASIS, [1, 1, 0, 0, 0])
    return off_lattice_cautions(frequency, first, second, SHAPE)[4]


@pytest.mark.parametrize(
    ("indices", "caution"),
    [
        pytest.param((0.5, 0.5), SUPERLATTICE, id="doubled cell"),
        pytest.param((1.5, 0), SUPERLATTICE, id="half beyond the first point"),
        pytest.param((1 / 3, 2 / 3), SUPERLATTICE, id="tripled cell"),
        pytest.param((0.41, 0.62), OFF_LATTICE, id="anywhere"),
        pytest.param((1.04, 1.03), BESIDE_LATTICE, id="next to a lattice point"),
    ],
)
def test_a_peak_is_judged_by_its_place_in_the_lattice(indices, caution):
    assert verdict_on(np.array(indices) @ BASIS) is caution


@pytest.mark.parametrize(
    ("indices", "folded_by"),
    [((5, 1), (0, -1)), ((1, -6), (-1, 0)), ((5, 2), (0, -1)), ((8, -4), (-1, -1))],
)
def test_a_spacing_finer_than_two_pixels_is_recognised_where_it_folds_to(indices, folded_by):
    # sampling cannot tell frequencies that differ by whole cycles per pixel
    true = np.array(indices) @ BASIS
    seen = true + folded_by
    assert np.abs(true).max() > 0.5 >= np.abs(seen).max()
    assert verdict_on(seen) is FOLDED_FRINGES


def test_a_coarse_difference_of_two_lattices_is_moire():
    both = lattice(TURNED, [0, 0, 1, 1, 0])
    difference = BASIS[0] - TURNED[0]
    assert verdict_on(difference, both) is MOIRE
    assert verdict_on(-difference, both) is MOIRE
    assert verdict_on(difference) is not MOIRE


def test_members_get_no_caution():
    frequency = np.array([*BASIS, (0.02, 0.2)])
    assert set(off_lattice_cautions(frequency, lattice(BASIS, [1, 1, 0]), None, SHAPE)) == {2}
