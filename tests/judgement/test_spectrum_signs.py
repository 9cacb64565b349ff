"""Signs in the spectrum: even the smallest region that may be measured has them."""

import numpy as np
import pytest

import fringespan as fs
from fringespan.region import SMALLEST_WIDTH_PX


@pytest.mark.parametrize("width", range(SMALLEST_WIDTH_PX, SMALLEST_WIDTH_PX + 9))
def test_the_smallest_regions_are_measured(width):
    pixels = np.random.default_rng(0).normal(100, 10, (64, 64)).astype(np.float32)
    region = fs.Region.rectangle("small", 0, 0, SMALLEST_WIDTH_PX - 1, width - 1)
    assert len(fs.measure(fs.Micrograph(pixels), region).peaks) <= 1
