from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray


@pytest.fixture
def grey16() -> NDArray[np.uint16]:
    """A picture of random numbers with different sides, so that swapped axes are seen."""
    return np.random.default_rng(11).integers(0, 4000, (48, 40), dtype=np.uint16)


@pytest.fixture
def colours8() -> NDArray[np.uint8]:
    return np.random.default_rng(12).integers(0, 256, (48, 40, 3), dtype=np.uint8)
