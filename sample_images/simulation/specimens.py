"""Specimens made of atoms: particles cut to a shape, amorphous carbon film, graphitic layers. Frame: see package."""

from collections.abc import Callable
from dataclasses import dataclass
from itertools import permutations, product

import numpy as np
from scipy.spatial import ConvexHull, cKDTree

from .crystals import Crystal, Orientation

Inside = Callable[[np.ndarray], np.ndarray]
"""Takes points (n, 3) in nm from the particle's centre, (right, up, towards the viewer); returns which are inside."""


@dataclass(frozen=True)
class Cloud:
    """Atoms: symbols (n,), positions (n, 3) in nm in the frame (right, up, towards the viewer)."""

    symbols: np.ndarray
    positions: np.ndarray

    def moved(self, shift: tuple[float, float, float]) -> "Cloud":
        """Return the same atoms elsewhere."""
        return Cloud(self.symbols, self.positions + np.asarray(shift))

    def shaken(self, rms_nm: float, rng: np.random.Generator) -> "Cloud":
        """Return the atoms displaced at random, Gaussian, `rms_nm` along each axis: one moment of thermal motion."""
        return Cloud(self.symbols, self.positions + rng.normal(0, rms_nm, self.positions.shape))


def together(*clouds: Cloud) -> Cloud:
    """Return all atoms of several clouds."""
    return Cloud(
        np.concatenate([cloud.symbols for cloud in clouds]), np.concatenate([cloud.positions for cloud in clouds])
    )


def particle(
    crystal: Crystal, orientation: Orientation, inside: Inside, reach_nm: float, rng: np.random.Generator
) -> Cloud:
    """Return the atoms of a crystal inside a shape; where the cell's origin falls is left to chance."""
    matrix = orientation.matrix(crystal)
    axes = crystal.axes_nm @ matrix.T
    counts = np.ceil(np.linalg.norm(np.linalg.inv(axes), axis=0) * reach_nm).astype(int) + 1
    grids = np.meshgrid(*[np.arange(-n, n + 1) for n in counts], indexing="ij")
    nodes = np.stack([grid.ravel() for grid in grids], axis=1) + rng.uniform(0, 1, 3)
    fractions = crystal.atoms.get_scaled_positions()
    symbols = np.array(crystal.atoms.get_chemical_symbols())
    points = ((nodes[:, None, :] + fractions[None]) @ axes).reshape(-1, 3)
    chosen = inside(points)
    return Cloud(np.tile(symbols, len(nodes))[chosen], points[chosen])


def _footprint(points: np.ndarray, width: float, length: float, turn_deg: float) -> tuple[np.ndarray, np.ndarray]:
    turn = np.radians(turn_deg)
    x = np.cos(turn) * points[:, 0] + np.sin(turn) * points[:, 1]
    y = -np.sin(turn) * points[:, 0] + np.cos(turn) * points[:, 1]
    return x / (width / 2), y / (length / 2)


def dome(width: float, length: float, height: float, turn_deg: float = 0.0, lean: float = 0.0) -> Inside:
    """Half an ellipsoid lying on the film; `lean` moves its top sideways by so many half-widths."""

    def inside(points: np.ndarray) -> np.ndarray:
        z = points[:, 2] / height
        x, y = _footprint(points, width, length, turn_deg)
        return (z >= 0) & ((x - lean * z) ** 2 + y**2 + z**2 <= 1)

    return inside


def slab(width: float, length: float, height: float, turn_deg: float = 0.0, slope: float = 0.0) -> Inside:
    """Elliptical slab of constant height; a wedge with `slope`, the change of height over the width as a fraction."""

    def inside(points: np.ndarray) -> np.ndarray:
        x, y = _footprint(points, width, length, turn_deg)
        top = height * (1 + slope * x / 2)
        return (points[:, 2] >= 0) & (points[:, 2] <= top) & (x**2 + y**2 <= 1)

    return inside


def facetted(
    crystal: Crystal, orientation: Orientation, faces: tuple[tuple[tuple[int, int, int], float], ...]
) -> Inside:
    """Polyhedron bounded by forms of faces of a cubic crystal, each at its distance (nm) from the centre."""
    normals, distances = [], []
    for form, distance in faces:
        for hkl in _cubic_form(form):
            normal = np.asarray(hkl) @ crystal.reciprocal_per_nm @ orientation.matrix(crystal).T
            normals.append(normal / np.linalg.norm(normal))
            distances.append(distance)

    def inside(points: np.ndarray) -> np.ndarray:
        result = np.ones(len(points), bool)
        for normal, distance in zip(normals, distances, strict=True):
            result &= points @ normal <= distance
        return result

    return inside


def _cubic_form(hkl: tuple[int, int, int]) -> set[tuple[int, int, int]]:
    return {
        tuple(sign * index for sign, index in zip(signs, order, strict=True))
        for order in permutations(hkl)
        for signs in product((1, -1), repeat=3)
    }


def outline(cloud: Cloud, scale: float) -> np.ndarray:
    """Return the convex hull of the atoms in the picture, shrunk about its centre: (n, 2) = (right, up), nm."""
    flat = cloud.positions[:, :2]
    corners = flat[ConvexHull(flat).vertices]
    centre = (corners.min(axis=0) + corners.max(axis=0)) / 2
    return centre + scale * (corners - centre)


def bounding_box(cloud: Cloud, border: float) -> np.ndarray:
    """Return the box around the atoms as the picture shows them, widened by a border: (4, 2) = (right, up), nm."""
    low = cloud.positions[:, :2].min(axis=0) - border
    high = cloud.positions[:, :2].max(axis=0) + border
    return np.array([[low[0], high[1]], [high[0], high[1]], [high[0], low[1]], [low[0], low[1]]])


def carbon_film(size: tuple[float, float], thickness: float, rng: np.random.Generator) -> Cloud:
    """Return amorphous carbon: atoms at random, 100 per nm3 (2 g/cm3), none closer than 0.13 nm; periodic sideways."""
    box = np.array([*size, thickness + 0.2])  # the added height keeps the periodic top and bottom apart
    wanted = int(100 * size[0] * size[1] * thickness)
    points = np.empty((0, 3))
    while len(points) < wanted:
        fresh = rng.uniform(0, 1, (wanted - len(points) + 100, 3)) * [size[0], size[1], thickness]
        if len(points):
            distance, _ = cKDTree(points, boxsize=box).query(fresh)
            fresh = fresh[distance > 0.13]
        close = cKDTree(fresh, boxsize=box).query_pairs(0.13, output_type="ndarray")
        keep = np.ones(len(fresh), bool)
        if len(close):
            keep[close.max(axis=1)] = False
        points = np.concatenate([points, fresh[keep]])
    return Cloud(np.full(wanted, "C"), points[:wanted])
