"""Observations made from a zone-axis pattern, turned, scaled, and with noise."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence

import numpy as np
import pytest

from fringespan.crystal.library import load_phase
from fringespan.crystal.phase import Phase
from fringespan.crystal.zone import zone_pattern
from fringespan.ranking.observation import Observation, ObservedReflection

Observe = Callable[..., Observation]


def observe_zone(
    phase: str | Phase,
    zone: Sequence[int],
    hkl: Sequence[tuple[int, int, int]],
    *,
    rotation_deg: float = 20.0,
    scale: float = 1.0,
    noise: float = 0.001,
    told: float | tuple[float, float] | None = 0.01,
    roles: Sequence[str] = (),
    strengths: Sequence[float] = (),
    extra: Sequence[tuple[float, float]] = (),
    seed: int = 5,
) -> Observation:
    """Return what a picture of this zone shows if its true pixel size is `scale` times the nominal one.

    `extra` are further peaks as (d in nm, direction in degrees).
    """
    rng = np.random.default_rng(seed)
    structure = load_phase(phase) if isinstance(phase, str) else phase
    spots = {s.hkl: complex(s.g_per_nm[1], -s.g_per_nm[0]) for s in zone_pattern(structure, zone, d_min_nm=0.07).spots}
    q = [spots[h] * scale * np.exp(1j * math.radians(rotation_deg)) for h in hkl]
    q += [np.exp(1j * math.radians(direction)) / d for d, direction in extra]
    reflections = []
    for i, g in enumerate(q):
        sigma = noise * abs(g)
        g = g + sigma * complex(*rng.normal(size=2))
        reflections.append(
            ObservedReflection(
                g_per_nm=(-g.imag, g.real),
                covariance_per_nm2=((sigma**2, 0.0), (0.0, sigma**2)),
                signal_to_noise=strengths[i] if i < len(strengths) else 100.0 - i,
                role=roles[i] if i < len(roles) else "reflection",
            )
        )
    return Observation(reflections=tuple(reflections), pixel_size_relative_uncertainty=told)


@pytest.fixture(scope="session")
def observe() -> Observe:
    return observe_zone


@pytest.fixture(autouse=True, scope="session")
def _own_cache(tmp_path_factory: pytest.TempPathFactory) -> Iterator[None]:
    # tables of these tests don't belong in the user's cache
    patch = pytest.MonkeyPatch()
    patch.setenv("FRINGESPAN_CACHE", str(tmp_path_factory.mktemp("tables")))
    yield
    patch.undo()
