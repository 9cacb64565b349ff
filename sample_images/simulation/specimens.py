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


def graphene(length: float, depth: float, turn_deg: float, rng: np.random.Generator) -> np.ndarray:
    """Return one layer of graphite as points (n, 2) = (along, with the beam), nm, about (0, 0), turned in its plane."""
    bond = 0.142
    axes = bond * np.sqrt(3) * np.array([[1.0, 0.0], [0.5, np.sqrt(3) / 2]])
    reach = int(np.ceil(np.hypot(length, depth) / bond))
    nodes = np.stack(np.meshgrid(*[np.arange(-reach, reach + 1)] * 2), axis=-1).reshape(-1, 2) + rng.uniform(0, 1, 2)
    points = np.concatenate([nodes, nodes + 1 / 3]) @ axes
    turn = np.radians(turn_deg)
    points = points @ np.array([[np.cos(turn), np.sin(turn)], [-np.sin(turn), np.cos(turn)]])
    return points[(np.abs(points[:, 0]) <= length / 2) & (np.abs(points[:, 1]) <= depth / 2)]


def flat_stack(
    layers: int, spacing: float, length: float, depth: float, normal_deg: float, rng: np.random.Generator
) -> Cloud:
    """Return flat graphitic layers about the origin, edge-on, turned at random against each other (turbostratic)."""
    angle = np.radians(normal_deg)
    normal, along = np.array([np.cos(angle), np.sin(angle)]), np.array([-np.sin(angle), np.cos(angle)])
    positions = []
    for index in range(layers):
        sheet = graphene(length, depth, rng.uniform(0, 60), rng)
        across = (index - (layers - 1) / 2) * spacing
        positions.append(np.column_stack([sheet[:, :1] * along + across * normal, sheet[:, 1]]))
    return Cloud(np.full(sum(map(len, positions)), "C"), np.concatenate(positions))


def bent_stack(
    layers: int, spacing: float, inner_radius: float, arc_deg: tuple[float, float], depth: float,
    rng: np.random.Generator,
) -> Cloud:  # fmt: skip
    """Return graphitic layers bent to arcs about the origin, edge-on, turned at random against each other."""
    first, last = np.radians(arc_deg)
    positions = []
    for index in range(layers):
        radius = inner_radius + index * spacing
        sheet = graphene(radius * (last - first), depth, rng.uniform(0, 60), rng)
        angle = (first + last) / 2 + sheet[:, 0] / radius
        positions.append(np.column_stack([radius * np.cos(angle), radius * np.sin(angle), sheet[:, 1]]))
    return Cloud(np.full(sum(map(len, positions)), "C"), np.concatenate(positions))
