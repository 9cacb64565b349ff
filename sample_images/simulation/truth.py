"""What is true of a picture, and a check of it by a plain windowed Fourier transform of that very picture.

The classes of a reflection are those of `peak_over_background` (power of its peak over the mean power around it):
visible >= 30, marginal >= 10, else invisible; distorted = bright enough, but moved by more than 0.3 of a fringe over
the region even without film and noise, or a weak one (below 1 % of the strongest) that film, noise or a neighbour move
by more than 0.6.
"""

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from ase.data import atomic_numbers
from scipy import ndimage

from .crystals import Crystal, Orientation, zone_reflections
from .specimens import Cloud

VISIBLE, MARGINAL, STRONG = 30.0, 10.0, 0.01
DISTORTED_CYCLES, TOLERANCE_CYCLES = 0.3, 0.6


def polygon_mask(shape: tuple[int, int], vertices_px: np.ndarray) -> np.ndarray:
    """Return which pixel centres lie inside a polygon of (row, column) vertices (even-odd rule)."""
    rows, columns = np.mgrid[: shape[0], : shape[1]]
    inside = np.zeros(shape, bool)
    for (r0, c0), (r1, c1) in zip(vertices_px, np.roll(vertices_px, -1, axis=0), strict=True):
        if r0 != r1:
            crosses = (r0 > rows) != (r1 > rows)
            inside ^= crosses & (columns < c0 + (rows - r0) * (c1 - c0) / (r1 - r0))
    return inside


def whole_picture(shape: tuple[int, int]) -> np.ndarray:
    """Return the outline of the whole picture, (row, column)."""
    bottom, right = shape[0] - 0.5, shape[1] - 0.5
    return np.array([[-0.5, -0.5], [-0.5, right], [bottom, right], [bottom, -0.5]])


@dataclass(frozen=True)
class Patch:
    """Part of a picture under a window: values times weights, and the coordinates of its rows and columns."""

    values: np.ndarray
    rows: np.ndarray
    columns: np.ndarray

    def amplitude(self, g_row: np.ndarray, g_column: np.ndarray) -> np.ndarray:
        """Return the Fourier sum on a grid of frequencies (cycles per pixel), (len(g_row), len(g_column))."""
        left = np.exp(-2j * np.pi * np.outer(g_row, self.rows))
        right = np.exp(-2j * np.pi * np.outer(self.columns, g_column))
        return left @ self.values @ right

    def maximum(self, g: np.ndarray, radius: float, rise: float = 0.0) -> tuple[np.ndarray, float] | None:
        """Return place and power of the highest maximum within a radius of g, or None where there is none inside."""
        offsets = np.linspace(-radius, radius, 41)
        power = np.abs(self.amplitude(g[0] + offsets, g[1] + offsets)) ** 2
        best = ndimage.maximum_filter(power, 3, mode="constant", cval=np.inf) == power
        best &= np.hypot(offsets[:, None], offsets[None, :]) < radius
        if not best.any():
            return None
        i, j = np.unravel_index(np.argmax(np.where(best, power, -1)), power.shape)
        place = np.array([g[0] + offsets[i], g[1] + offsets[j]])
        step = offsets[1] - offsets[0]
        for _ in range(6):  # parabola through three points on each axis, ever finer
            fine = np.array([-step, 0, step])
            local = np.log(np.abs(self.amplitude(place[0] + fine, place[1] + fine)) ** 2)
            row, column = local[:, 1], local[1, :]
            for axis, (low, middle, high) in enumerate((row, column)):
                curvature = low - 2 * middle + high
                if curvature < 0:
                    place[axis] += np.clip(0.5 * (low - high) / curvature, -1, 1) * step
            step /= 2
        return place, float(np.abs(self.amplitude(place[:1], place[1:]))[0, 0] ** 2)


def patch(picture: np.ndarray, mask: np.ndarray, tapered: bool) -> Patch:
    """Return a region of a picture less its mean, weights one or falling smoothly from its middle to its edge."""
    padded = np.pad(mask, 1)
    depth = ndimage.distance_transform_edt(padded)[1:-1, 1:-1]
    weight = np.sin(np.pi / 2 * depth / depth.max()) ** 2 if tapered else mask.astype(float)
    rows, columns = np.flatnonzero(mask.any(axis=1)), np.flatnonzero(mask.any(axis=0))
    cut = np.ix_(rows, columns)
    mean = np.sum(weight * picture) / weight.sum()
    return Patch((weight * (picture - mean))[cut], rows - rows.mean(), columns - columns.mean())


def _background(region: Patch, g: np.ndarray, extent_px: float, points: np.ndarray) -> float:
    """Mean power in a ring around g, the neighbourhood of every lattice point of the region left out."""
    offsets = np.arange(-10, 10.1, 0.5) / extent_px
    power = np.abs(region.amplitude(g[0] + offsets, g[1] + offsets)) ** 2
    grid = np.stack(np.meshgrid(g[0] + offsets, g[1] + offsets, indexing="ij"), axis=-1)
    radius = np.hypot(offsets[:, None], offsets[None, :])
    everywhere = np.concatenate([points, -points, np.zeros((1, 2))])
    nearest = np.min(np.linalg.norm(grid[:, :, None] - everywhere, axis=-1), axis=-1)
    for clearance in (3.0, 2.0, 1.5):
        ring = (radius > 3 / extent_px) & (radius < 10 / extent_px) & (nearest > clearance / extent_px)
        if ring.sum() >= 40:
            return float(power[ring].mean())
    return float(np.median(power))


def _rounded(values: Any, digits: int) -> Any:
    return np.round(np.asarray(values, float), digits).tolist()


def pixel_size(stated: tuple[float, float] | None, true: tuple[float, float]) -> dict[str, Any]:
    """Return what the file says of the pixel size beside what is true."""
    return {
        "order": "row, column",
        "stated_in_file_nm": stated,
        "true_nm": true,
        "true_over_stated": None if stated is None else [round(t / s, 6) for t, s in zip(true, stated, strict=True)],
    }


@dataclass(frozen=True)
class Grain:
    """A crystal in a picture, its region drawn there, and what is known of it."""

    name: str
    crystal: Crystal
    orientation: Orientation
    vertices_px: np.ndarray
    kind: str = "polygon"
    cloud: Cloud | None = None
    particle: dict[str, Any] | None = None


def describe_grain(
    grain: Grain,
    picture: np.ndarray,
    ideal: np.ndarray,
    true_pixel_nm: tuple[float, float],
    stated_pixel_nm: tuple[float, float],
    d_min_nm: float,
    others: tuple[Grain, ...] = (),
) -> dict[str, Any]:
    """Return the truth of one grain as plain values: cell, orientation, outline, reflections, and the check of them.

    `ideal` is the picture without film and noise, `others` are the grains whose reflections are no background.
    """
    crystal, orientation = grain.crystal, grain.orientation
    view = _View(picture, ideal, grain.vertices_px, np.asarray(true_pixel_nm), np.asarray(stated_pixel_nm))
    hkl, g = zone_reflections(crystal, orientation, d_min_nm)
    amplitude, centring = crystal.relative_amplitude(hkl), crystal.centring_absent(hkl)
    other_g = [zone_reflections(o.crystal, o.orientation, d_min_nm)[1] for o in others]
    lengths = np.linalg.norm(hkl @ crystal.reciprocal_per_nm, axis=1)
    absent = [
        "centring" if off else "symmetry" if weak else None
        for off, weak in zip(centring, amplitude < 1e-4, strict=True)
    ]
    reflections = view.reflections(hkl, g, 1 / lengths, absent, np.concatenate([g, *other_g]))
    result = {
        **_outlined(grain.name, grain.kind, view),
        "phase": crystal.id,
        "phase_name": crystal.name,
        "space_group": crystal.space_group,
        "cell_nm_deg": [round(edge, 7) for edge in crystal.cell],
        "cell_source": crystal.source,
        "zone": list(orientation.zone),
        "reference_hkl": list(orientation.reference_hkl),
        "reference_direction_deg": orientation.direction_deg,
        "tilt_deg": orientation.tilt_deg,
        "tilt_axis_deg": orientation.tilt_axis_deg,
        "particle": grain.particle,
        "reflections": reflections,
        "check": _check(reflections),
    }
    if grain.cloud is not None:
        extent_nm = view.extent_px * float(view.true_px.mean())
        result["check"]["projected_atoms_worst_cycles"] = _atoms_check(grain.cloud, g, hkl, crystal, extent_nm)
    return result


@dataclass(frozen=True)
class Stack:
    """Layers with one spacing (nm) and no other order among them; normal at `direction_deg` in the region's middle."""

    name: str
    phase_name: str
    spacing_nm: float
    direction_deg: float
    vertices_px: np.ndarray
    facts: dict[str, Any]


def describe_stack(
    stack: Stack,
    picture: np.ndarray,
    ideal: np.ndarray,
    true_pixel_nm: tuple[float, float],
    stated_pixel_nm: tuple[float, float],
    others: tuple[Stack, ...] = (),
) -> dict[str, Any]:
    """Return the truth of a stack of layers; its reflections 00l count two layers to a cell, as in graphite."""
    view = _View(picture, ideal, stack.vertices_px, np.asarray(true_pixel_nm), np.asarray(stated_pixel_nm))
    orders = np.arange(1, 4)
    hkl = np.outer(2 * orders, [0, 0, 1])
    g = [_family(one, orders) for one in (stack, *others)]
    reflections = view.reflections(hkl, g[0], stack.spacing_nm / orders, [None] * len(orders), np.concatenate(g))
    return {
        **_outlined(stack.name, "polygon", view),
        "phase": None,
        "phase_name": stack.phase_name,
        "layer_spacing_nm": stack.spacing_nm,
        "reference_hkl": [0, 0, 2],
        "reference_direction_deg": stack.direction_deg,
        "layers": stack.facts,
        "reflections": reflections,
        "check": _check(reflections),
    }


def _family(stack: Stack, orders: np.ndarray) -> np.ndarray:
    angle = np.radians(stack.direction_deg % 180)
    towards = np.array([-np.sin(angle), np.cos(angle)])
    if towards[1] < 0:
        towards = -towards
    return np.outer(orders / stack.spacing_nm, towards)


def _outlined(name: str, kind: str, view: "_View") -> dict[str, Any]:
    return {
        "name": name,
        "kind": kind,
        "vertices_px": _rounded(view.vertices_px, 2),
        "extent_nm": round(view.extent_px * float(np.sqrt(np.prod(view.true_px))), 3),
        "box_px": (np.ptp(np.argwhere(view.mask), axis=0) + 1).tolist(),
    }


@dataclass(frozen=True)
class _View:
    """A region of a picture, with and without noise, in which reflections of known place are looked at."""

    picture: np.ndarray
    ideal: np.ndarray
    vertices_px: np.ndarray
    true_px: np.ndarray
    stated_px: np.ndarray

    @cached_property
    def mask(self) -> np.ndarray:
        return polygon_mask(self.picture.shape, self.vertices_px)

    @property
    def extent_px(self) -> float:
        return float(np.sqrt(self.mask.sum()))

    def reflections(
        self, hkl: np.ndarray, g: np.ndarray, d_lattice: np.ndarray, absent: list[str | None], lattice_g: np.ndarray
    ) -> list[dict[str, Any]]:
        """Return the truth of each reflection; `lattice_g` are all places (1/nm) that are no background."""
        window, plain = patch(self.picture, self.mask, True), patch(self.ideal, self.mask, False)
        ideal_window = patch(self.ideal, self.mask, True)
        result = []
        for index in np.flatnonzero(np.abs(g * self.true_px).max(axis=1) <= 0.5):
            g_px = g[index] * self.true_px
            g_file = g_px / self.stated_px
            found = window.maximum(g_px, 1.3 / self.extent_px)
            background = _background(window, g_px, self.extent_px, lattice_g * self.true_px)
            power = found[1] if found else float(np.abs(window.amplitude(g_px[:1], g_px[1:]))[0, 0] ** 2)
            ratio = power / background
            pulled = _cycles_along(plain, g_px, self.extent_px)
            pulled_window = _cycles_along(ideal_window, g_px, self.extent_px)
            moved = pulled is None or abs(pulled) > DISTORTED_CYCLES or found is None
            bright = "distorted" if moved else "visible" if ratio >= VISIBLE else "marginal"
            entry: dict[str, Any] = {
                "hkl": hkl[index].tolist(),
                "d_lattice_nm": round(float(d_lattice[index]), 7),
                "g_true_per_nm": _rounded(g[index], 6),
                "d_true_nm": round(float(1 / np.linalg.norm(g[index])), 7),
                "g_per_nm": _rounded(g_file, 6),
                "d_nm": round(float(1 / np.linalg.norm(g_file)), 7),
                "direction_deg": round(float(np.degrees(np.arctan2(-g_file[0], g_file[1])) % 180), 4),
                "absent": absent[index],
                "peak_over_background": round(ratio, 1),
                "seen": bright if ratio >= MARGINAL else "invisible",
            }
            if ratio >= MARGINAL:
                entry["shape_error_cycles"] = None if pulled is None else round(pulled, 4)
                entry["window_error_cycles"] = None if pulled_window is None else round(pulled_window, 4)
            if found and entry["seen"] in ("visible", "distorted"):
                deviation = np.linalg.norm(g_file) / np.linalg.norm(found[0] / self.stated_px) - 1
                entry["check_d_deviation"] = round(float(deviation), 6)
                entry["check_cycles"] = round(float(np.linalg.norm(found[0] - g_px) * self.extent_px), 3)
            result.append(entry)
        brightest = max(entry["peak_over_background"] for entry in result)
        for entry in result:
            if entry.get("check_cycles", 0) > TOLERANCE_CYCLES and entry["peak_over_background"] < STRONG * brightest:
                entry["seen"] = "distorted"
        return result


def _cycles_along(region: Patch, g: np.ndarray, extent_px: float) -> float | None:
    """How far the fringes of a picture move |g|, in cycles over the region; None where they have no maximum near g."""
    found = region.maximum(g, 1.3 / extent_px)
    if found is None:
        return None
    return float((np.linalg.norm(found[0]) - np.linalg.norm(g)) * extent_px)


def _atoms_check(cloud: Cloud, g: np.ndarray, hkl: np.ndarray, crystal: Crystal, extent_nm: float) -> float:
    """Largest distance, in cycles, of a peak of the bare projected atoms (free of optics and noise) from its place."""
    z = np.array([atomic_numbers[symbol] for symbol in cloud.symbols], float)
    right, up = (cloud.positions[:, :2] - cloud.positions[:, :2].mean(axis=0)).T
    strong = crystal.relative_amplitude(hkl) > 0.2
    worst, steps = 0.0, np.linspace(-0.5, 0.5, 11) / extent_nm
    for g_row, g_column in g[strong][:12]:
        place = np.array([g_row, g_column])
        for scale in (1.0, 0.1, 0.02):
            left = np.exp(2j * np.pi * np.outer(place[0] + scale * steps, up))
            turn = np.exp(-2j * np.pi * np.outer(right, place[1] + scale * steps))
            power = np.abs((left * z) @ turn) ** 2
            i, j = np.unravel_index(np.argmax(power), power.shape)
            place = place + scale * np.array([steps[i], steps[j]])
        worst = max(worst, float(np.hypot(place[0] - g_row, place[1] - g_column) * extent_nm))
    return round(worst, 3)


def _check(reflections: list[dict[str, Any]]) -> dict[str, Any]:
    """Whether the peaks of a plain windowed Fourier transform sit where the truth says."""
    visible = [r for r in reflections if r["seen"] == "visible"]
    if not visible:
        return {"visible": 0, "outcome": "no visible reflection to check"}
    brightest = max(r["peak_over_background"] for r in reflections)
    strong = [r for r in visible if r["peak_over_background"] >= STRONG * brightest]
    if not strong:
        return {"visible": len(visible), "strong": 0, "outcome": "no strong reflection to check"}
    cycles = max(r["check_cycles"] for r in strong)
    return {
        "visible": len(visible),
        "strong": len(strong),
        "worst_d_deviation_of_strong": max(abs(r["check_d_deviation"]) for r in strong),
        "worst_cycles_of_strong": cycles,
        "tolerance_cycles": TOLERANCE_CYCLES,
        "outcome": "agrees" if cycles <= TOLERANCE_CYCLES else "differs",
    }
