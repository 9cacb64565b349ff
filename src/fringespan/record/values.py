"""What a record holds: the picture, how it was measured, and what came out, region by region."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, fields
from importlib import metadata
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution, gravest_first
from fringespan.exceptions import RecordError
from fringespan.lattice import PlaneLattice
from fringespan.measurement import Measurement
from fringespan.micrograph import Micrograph
from fringespan.region import Region
from fringespan.settings import MeasurementSettings
from fringespan.spacings import PairAngle, Peak

__all__ = ["Identification", "Match", "Record", "RecordedPicture", "RecordedRegion", "record_of"]


@dataclass(frozen=True, slots=True, kw_only=True)
class RecordedPicture:
    """What a record keeps of the picture: enough to recognise it and to measure it again.

    Attributes
    ----------
    name : str
    sha256 : str
        Checksum of the file, or of the pixels where there was no file.
    shape : (int, int)
        Rows and columns.
    frame, frame_count : int
        Which frame of how many.
    pixel_size_nm, pixel_size_relative_uncertainty, pixel_size_source, shear, voltage_kv, cs_mm, defocus_nm, dark_level
        As in `Micrograph`.
    """

    name: str
    sha256: str
    shape: tuple[int, int]
    frame: int = 0
    frame_count: int = 1
    pixel_size_nm: tuple[float, float] | None = None
    pixel_size_relative_uncertainty: float | tuple[float, float] | None = None
    pixel_size_source: str = "not stated"
    shear: float = 0.0
    voltage_kv: float | None = None
    cs_mm: float | None = None
    defocus_nm: float | None = None
    dark_level: float | None = None

    @classmethod
    def of(cls, micrograph: Micrograph) -> RecordedPicture:
        """Return what a record keeps of a picture; its checksum is computed now."""
        kept = {f.name: getattr(micrograph, f.name) for f in fields(cls) if f.name != "sha256"}
        return cls(sha256=micrograph.sha256(), **kept)


@dataclass(frozen=True, slots=True, kw_only=True)
class Match:
    """One hypothesis for the peaks of a region: a phase seen along a zone axis.

    Attributes
    ----------
    phase : str
        Built-in id, or the data block name of a CIF file.
    zone : (int, int, int) or None
        None for a candidate by one spacing alone.
    probability : float
    hkl : tuple of (int, int, int) or None
        One entry a peak; None where the hypothesis leaves it unexplained.
    rotation_deg, scale, scale_uncertainty : float or None
    fits : bool
    pulls : tuple of float or None
    indistinguishable_from : tuple of (str, (int, int, int))
        Phases and zones that explain the peaks as well.
    """

    phase: str
    zone: tuple[int, int, int] | None
    probability: float
    hkl: tuple[tuple[int, int, int] | None, ...]
    rotation_deg: float | None
    scale: float | None
    scale_uncertainty: float | None
    fits: bool
    pulls: tuple[float | None, ...]
    indistinguishable_from: tuple[tuple[str, tuple[int, int, int]], ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Identification:
    """What comparing a region with phases came to.

    Attributes
    ----------
    verdict : str or None
        None: no phases were compared.
    matches : tuple of Match
        Best first.
    sentence : str
        The verdict in words, with what would decide an open case.
    cautions : tuple of Caution
        Those that the comparison adds to the region's.
    """

    verdict: str | None = None
    matches: tuple[Match, ...] = ()
    sentence: str = ""
    cautions: tuple[Caution, ...] = ()


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class RecordedRegion:
    """What a record keeps of one region.

    Attributes
    ----------
    region : Region
    crystal_outline_px : ndarray, shape (n, 2), or None
    crystal_extent_nm : (float, float) or None
    peaks : tuple of Peak
    angles : tuple of PairAngle
    lattice : PlaneLattice or None
    identification : Identification
    cautions : tuple of Caution
        About the region as a whole, gravest first.

    Raises
    ------
    RecordError
        If an angle, a combination or the lattice speaks of a peak that is not there.
    """

    region: Region
    crystal_outline_px: NDArray[np.float64] | None
    crystal_extent_nm: tuple[float, float] | None
    peaks: tuple[Peak, ...]
    angles: tuple[PairAngle, ...]
    lattice: PlaneLattice | None
    identification: Identification = field(default_factory=Identification)
    cautions: tuple[Caution, ...] = ()

    def __post_init__(self) -> None:
        named = [i for angle in self.angles for i in angle.peaks]
        named += [i for peak in self.peaks for i in peak.combination_of or ()]
        named += self.lattice.members if self.lattice is not None else ()
        if any(not 0 <= i < len(self.peaks) for i in named):
            raise RecordError(
                f"region {self.region.name!r}: peaks are counted from 0 to {len(self.peaks) - 1}, but peak "
                f"{max(named, key=lambda i: abs(i + 0.5))} is spoken of"
            )


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Record:
    """The measurement of one picture, as written and read back.

    Attributes
    ----------
    program_version : str
        Of the fringespan that measured.
    picture : RecordedPicture
    settings : MeasurementSettings
    regions : tuple of RecordedRegion
    magnification : mapping or None
        Result of a magnification check, in the form of the schema.
    cautions : tuple of Caution
        About the picture as a whole.
    """

    program_version: str
    picture: RecordedPicture
    settings: MeasurementSettings
    regions: tuple[RecordedRegion, ...]
    magnification: Mapping[str, Any] | None = None
    cautions: tuple[Caution, ...] = ()


def record_of(
    measurements: Sequence[Measurement],
    identifications: Sequence[Identification | None] | None = None,
    *,
    magnification: Mapping[str, Any] | None = None,
) -> Record:
    """Collect the measurements of one picture into a record.

    Parameters
    ----------
    measurements : sequence of Measurement
        At least one; all of the same picture with the same settings.
    identifications : sequence of Identification or None, optional
        One for each measurement, where phases were compared.
    magnification : mapping, optional
        A magnification check that the picture took part in, as `magnification_values` gives it.

    Returns
    -------
    Record

    Raises
    ------
    RecordError
        If there is no measurement, or they are of different pictures or settings.
    """
    if not measurements:
        raise RecordError("a record needs at least one measurement, got none")
    micrograph, settings = measurements[0].micrograph, measurements[0].settings
    if any(m.micrograph is not micrograph or m.settings != settings for m in measurements):
        raise RecordError("a record holds one picture measured with one set of settings; write one record a picture")
    found = [None] * len(measurements) if identifications is None else identifications
    if len(found) != len(measurements):
        raise RecordError(f"identifications must be one a measurement ({len(measurements)}), got {len(found)}")
    return Record(
        program_version=metadata.version("fringespan"),
        picture=RecordedPicture.of(micrograph),
        settings=settings,
        regions=tuple(
            _recorded_region(m, identification or Identification())
            for m, identification in zip(measurements, found, strict=True)
        ),
        magnification=magnification,
        cautions=gravest_first(micrograph.cautions),
    )


def _recorded_region(measurement: Measurement, identification: Identification) -> RecordedRegion:
    cautions = (*measurement.cautions, *identification.cautions)
    return RecordedRegion(
        region=measurement.region,
        crystal_outline_px=measurement.crystal_outline_px,
        crystal_extent_nm=measurement.crystal_extent_nm,
        peaks=measurement.peaks,
        angles=measurement.angles,
        lattice=measurement.lattice,
        identification=identification,
        # what holds for the whole picture stands there, once
        cautions=gravest_first(c for c in cautions if c not in measurement.micrograph.cautions),
    )
