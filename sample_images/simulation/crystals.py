"""Crystals (cells with their sources), and how they stand in the picture."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from ase import Atoms
from ase.spacegroup import crystal as build_crystal


@dataclass(frozen=True)
class Crystal:
    """One crystalline phase: conventional cell (nm, degrees), atom sites in fractions of it, where the cell is from."""

    id: str
    name: str
    space_group: str
    number: int
    cell: tuple[float, float, float, float, float, float]
    sites: tuple[tuple[str, tuple[float, float, float]], ...]
    source: str
    setting: int = 1

    @cached_property
    def atoms(self) -> Atoms:
        """The conventional cell with all its atoms, lengths in angstrom."""
        a, b, c, *angles = self.cell
        return build_crystal(
            [symbol for symbol, _ in self.sites],
            [position for _, position in self.sites],
            spacegroup=self.number,
            setting=self.setting,
            cellpar=[10 * a, 10 * b, 10 * c, *angles],
        )

    @cached_property
    def axes_nm(self) -> np.ndarray:
        """Direct axes as rows, nm."""
        return np.asarray(self.atoms.cell) / 10

    @cached_property
    def reciprocal_per_nm(self) -> np.ndarray:
        """Reciprocal axes as rows, 1/nm, no 2 pi."""
        return np.linalg.inv(self.axes_nm).T

    def relative_amplitude(self, hkl: np.ndarray) -> np.ndarray:
        """|sum Z exp(2 pi i h x)| over that of (000): zero where centring or symmetry puts a reflection out."""
        z = self.atoms.get_atomic_numbers()
        phases = np.exp(2j * np.pi * np.atleast_2d(hkl) @ self.atoms.get_scaled_positions().T)
        return np.abs(phases @ z) / z.sum()

    def centring_absent(self, hkl: np.ndarray) -> np.ndarray:
        """True where the centring of the cell alone puts a reflection out."""
        h, k, l = np.atleast_2d(hkl).T  # noqa: E741 - Miller indices
        match self.space_group[0]:
            case "F":
                return ~((h % 2 == k % 2) & (k % 2 == l % 2))
            case "I":
                return (h + k + l) % 2 != 0
            case "P":
                return np.zeros(h.shape, bool)
        raise ValueError(f"no rule for the centring of {self.space_group}")


def cubic(a: float) -> tuple[float, float, float, float, float, float]:
    """Return the cell of a cubic crystal."""
    return (a, a, a, 90.0, 90.0, 90.0)


def _fcc(id: str, name: str, symbol: str, a: float, source: str) -> Crystal:
    return Crystal(id, name, "F m -3 m", 225, cubic(a), ((symbol, (0, 0, 0)),), source)


def _rock_salt(id: str, name: str, metal: str, other: str, a: float, source: str) -> Crystal:
    return Crystal(id, name, "F m -3 m", 225, cubic(a), ((metal, (0, 0, 0)), (other, (0.5, 0.5, 0.5))), source)


# Cells at room temperature. Citations and figures from memory unless said otherwise; what matters to the pictures is
# that they are made from exactly these numbers.
_NBS = "Swanson & Tatge, NBS Circular 539, vol. I (1953)"
CRYSTALS = {
    crystal.id: crystal
    for crystal in (
        _fcc("au", "gold", "Au", 0.40786, _NBS),
        _fcc("ag", "silver", "Ag", 0.40862, _NBS),
        _fcc("cu", "copper", "Cu", 0.3615, _NBS),
        _fcc("pt", "platinum", "Pt", 0.39231, _NBS),
        _fcc("pd", "palladium", "Pd", 0.38902, "powder diffraction file 46-1043"),
        Crystal("ge", "germanium", "F d -3 m", 227, cubic(0.56575), (("Ge", (0, 0, 0)),), _NBS),
        _rock_salt("mgo", "magnesia", "Mg", "O", 0.42112, "powder diffraction file 45-946"),
        _rock_salt("nio", "nickel oxide", "Ni", "O", 0.41771, "powder diffraction file 47-1049"),
        _rock_salt("tin", "titanium nitride", "Ti", "N", 0.42417, "powder diffraction file 38-1420"),
        Crystal(
            "ceo2",
            "ceria",
            "F m -3 m",
            225,
            cubic(0.54113),
            (("Ce", (0, 0, 0)), ("O", (0.25, 0.25, 0.25))),
            "powder diffraction file 34-394",
        ),
        Crystal(
            "zns",
            "zinc blende",
            "F -4 3 m",
            216,
            cubic(0.54093),
            (("Zn", (0, 0, 0)), ("S", (0.25, 0.25, 0.25))),
            "Skinner, Am. Mineral. 46 (1961) 1399",
        ),
        Crystal(
            "cu2o",
            "cuprite",
            "P n -3 m",
            224,
            cubic(0.42696),
            (("O", (0, 0, 0)), ("Cu", (0.25, 0.25, 0.25))),
            "powder diffraction file 5-667",
        ),
        Crystal(
            "srtio3",
            "strontium titanate",
            "P m -3 m",
            221,
            cubic(0.3905),
            (("Sr", (0, 0, 0)), ("Ti", (0.5, 0.5, 0.5)), ("O", (0.5, 0.5, 0))),
            "powder diffraction file 35-734",
        ),
        Crystal(
            "tio2_r",
            "rutile",
            "P 42/m n m",
            136,
            (0.45937, 0.45937, 0.29587, 90.0, 90.0, 90.0),
            (("Ti", (0, 0, 0)), ("O", (0.3048, 0.3048, 0))),
            "Howard, Sabine & Dickson, Acta Cryst. B47 (1991) 462",
        ),
        Crystal(
            "sno2",
            "cassiterite",
            "P 42/m n m",
            136,
            (0.47374, 0.47374, 0.31864, 90.0, 90.0, 90.0),
            (("Sn", (0, 0, 0)), ("O", (0.3056, 0.3056, 0))),
            "Bolzan et al., Acta Cryst. B53 (1997) 373",
        ),
        Crystal(
            "zno",
            "zinc oxide",
            "P 63 m c",
            186,
            (0.32498, 0.32498, 0.52066, 90.0, 90.0, 120.0),
            (("Zn", (1 / 3, 2 / 3, 0)), ("O", (1 / 3, 2 / 3, 0.3821))),
            "Kisi & Elcombe, Acta Cryst. C45 (1989) 1867",
        ),
        Crystal(
            "cdse",
            "cadmium selenide",
            "P 63 m c",
            186,
            (0.42985, 0.42985, 0.70152, 90.0, 90.0, 120.0),
            (("Cd", (1 / 3, 2 / 3, 0)), ("Se", (1 / 3, 2 / 3, 0.3767))),
            "Freeman, Mair & Barnea, Acta Cryst. B33 (1977) 1188",
        ),
    )
}


@dataclass(frozen=True)
class Orientation:
    """How a crystal stands: zone axis towards the viewer, a reflection of that zone at an angle on the screen.

    `direction_deg` counts counter-clockwise from the picture's right; `tilt_deg` turns the standing crystal about the
    in-plane axis at `tilt_axis_deg`.
    """

    zone: tuple[int, int, int]
    reference_hkl: tuple[int, int, int]
    direction_deg: float
    tilt_deg: float = 0.0
    tilt_axis_deg: float = 0.0

    def matrix(self, crystal: Crystal) -> np.ndarray:
        """Return the rotation from the crystal's Cartesian frame to (right, up, towards the viewer)."""
        if np.dot(self.zone, self.reference_hkl) != 0:
            raise ValueError(f"{self.reference_hkl} does not belong to the zone {self.zone}")
        towards = np.asarray(self.zone) @ crystal.axes_nm
        towards /= np.linalg.norm(towards)
        along = np.asarray(self.reference_hkl) @ crystal.reciprocal_per_nm
        along /= np.linalg.norm(along)
        across = np.cross(towards, along)
        angle = np.radians(self.direction_deg)
        standing = np.array(
            [
                np.cos(angle) * along - np.sin(angle) * across,
                np.sin(angle) * along + np.cos(angle) * across,
                towards,
            ]
        )
        return rotation(self.tilt_deg, self.tilt_axis_deg) @ standing


def rotation(tilt_deg: float, axis_deg: float) -> np.ndarray:
    """Return the rotation by an angle about an axis in the plane of the picture (Rodrigues' formula)."""
    tilt, axis = np.radians([tilt_deg, axis_deg])
    x, y = np.cos(axis), np.sin(axis)
    cross = np.array([[0, 0, y], [0, 0, -x], [-y, x, 0]])
    return np.eye(3) + np.sin(tilt) * cross + (1 - np.cos(tilt)) * cross @ cross


def screen_g(crystal: Crystal, orientation: Orientation, hkl: np.ndarray) -> np.ndarray:
    """Return g of reflections as the picture shows them, (n, 2) = (row, column) in 1/nm: projected on the picture."""
    g = np.atleast_2d(hkl) @ crystal.reciprocal_per_nm @ orientation.matrix(crystal).T
    return np.stack([-g[:, 1], g[:, 0]], axis=1)


def zone_reflections(crystal: Crystal, orientation: Orientation, d_min_nm: float) -> tuple[np.ndarray, np.ndarray]:
    """Return all lattice points of the zone down to a spacing, one of each +-g pair: hkl (n, 3), g on screen (n, 2).

    Of a pair the one with g pointing right (or straight up) is taken; sorted by falling spacing.
    """
    limits = [int(np.ceil(np.linalg.norm(axis) / d_min_nm)) for axis in crystal.axes_nm]
    grids = np.meshgrid(*[np.arange(-n, n + 1) for n in limits], indexing="ij")
    hkl = np.stack([grid.ravel() for grid in grids], axis=1)
    hkl = hkl[(hkl @ np.asarray(orientation.zone) == 0) & np.any(hkl != 0, axis=1)]
    length = np.linalg.norm(hkl @ crystal.reciprocal_per_nm, axis=1)
    hkl, length = hkl[length <= 1 / d_min_nm], length[length <= 1 / d_min_nm]
    g = screen_g(crystal, orientation, hkl)
    keep = (g[:, 1] > 1e-9) | ((np.abs(g[:, 1]) <= 1e-9) & (g[:, 0] < 0))
    order = np.lexsort((g[keep][:, 0], np.round(length[keep], 6)))
    return hkl[keep][order], g[keep][order]
