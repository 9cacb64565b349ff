"""The options of every command that reads pictures: scale, beam, frame, regions, phases."""

from __future__ import annotations

import functools
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import click

from fringespan.command_line.from_log import LogChoice, from_log_option
from fringespan.exceptions import CalibrationError, RegionError

if TYPE_CHECKING:
    from fringespan.crystal.phase import Phase
    from fringespan.micrograph import Micrograph
    from fringespan.region import Region

__all__ = ["PictureOptions", "takes_picture_options"]

DrawnRegion = tuple[str, tuple[tuple[float, float], ...]]


@dataclass(frozen=True, slots=True, kw_only=True)
class PictureOptions:
    """What the user says about the pictures.

    Attributes
    ----------
    pixel_size_nm, pixel_size_relative_uncertainty, voltage_kv, cs_mm, defocus_nm
        As in `Micrograph`; None where not given.
    frame : int
    regions : tuple of Region
        Empty: the whole picture.
    phases : str
        "none", "all", or names and CIF files with commas between.
    from_log : LogChoice or None
        Where in the log of magnification checks the pixel size comes from.
    """

    pixel_size_nm: tuple[float, float] | None
    pixel_size_relative_uncertainty: float | tuple[float, float] | None
    voltage_kv: float | None
    cs_mm: float | None
    defocus_nm: float | None
    frame: int
    regions: tuple[Region, ...]
    phases: str
    from_log: LogChoice | None = None

    def open(self, path: str) -> Micrograph:
        """Open a picture with these options."""
        from fringespan.reading import read

        micrograph = read(
            path,
            frame=self.frame,
            pixel_size_nm=self.pixel_size_nm,
            pixel_size_relative_uncertainty=self.pixel_size_relative_uncertainty,
            voltage_kv=self.voltage_kv,
            cs_mm=self.cs_mm,
            defocus_nm=self.defocus_nm,
        )
        return micrograph if self.from_log is None else self.from_log.applied(micrograph)

    def regions_of(self, micrograph: Micrograph) -> tuple[Region, ...]:
        """Return the regions to measure in a picture."""
        from fringespan.region import Region

        return self.regions or (Region.whole(micrograph.shape),)

    def phases_to_compare(self) -> tuple[Phase, ...]:
        """Return the phases to compare with; none of them: nothing is compared."""
        if self.phases.strip().lower() == "none":
            return ()
        from fringespan.crystal.library import load_phases

        return load_phases(name for name in self.phases.split(",") if name.strip())


def takes_picture_options(command: Callable[..., Any]) -> Callable[..., Any]:
    """Give a command the picture options, collected as its argument `picture`."""

    @functools.wraps(command)
    def with_collected_options(
        *arguments: Any,
        pixel_size: tuple[float, float] | None,
        pixel_size_uncertainty: float | tuple[float, float] | None,
        voltage: float | None,
        cs: float | None,
        defocus: float | None,
        frame: int,
        region: list[DrawnRegion],
        regions: str | None,
        phases: str,
        from_log: LogChoice | None,
        **others: Any,
    ) -> Any:
        options = PictureOptions(
            pixel_size_nm=pixel_size,
            pixel_size_relative_uncertainty=pixel_size_uncertainty,
            voltage_kv=voltage,
            cs_mm=cs,
            defocus_nm=defocus,
            frame=frame,
            regions=_regions(region, regions),
            phases=phases,
            from_log=from_log,
        )
        _refuse_impossible_values(options)
        return command(*arguments, picture=options, **others)

    for option in reversed(_OPTIONS):
        with_collected_options = option(with_collected_options)
    return with_collected_options


def _refuse_impossible_values(options: PictureOptions) -> None:
    """Refuse what no picture can have as wrong usage, before any file is opened."""
    if options.from_log is not None and options.pixel_size_relative_uncertainty is not None:
        raise click.UsageError(
            "--from-log brings the uncertainty of the pixel size with it; leave --pixel-size-uncertainty out",
            click.get_current_context(),
        )
    import numpy as np

    from fringespan.micrograph import Micrograph

    try:
        Micrograph(
            np.zeros((1, 1)),
            pixel_size_nm=options.pixel_size_nm,
            pixel_size_relative_uncertainty=options.pixel_size_relative_uncertainty,
            voltage_kv=options.voltage_kv,
            cs_mm=options.cs_mm,
            defocus_nm=options.defocus_nm,
        )
    except CalibrationError as problem:
        raise click.UsageError(str(problem), click.get_current_context()) from problem


def _regions(drawn: Sequence[DrawnRegion], file: str | None) -> tuple[Region, ...]:
    from fringespan.record import read_regions
    from fringespan.region import Region

    try:
        found = [Region(name or f"region {number}", corners) for number, (name, corners) in enumerate(drawn, 1)]
    except RegionError as problem:
        raise click.UsageError(str(problem), click.get_current_context()) from problem
    return (*found, *(read_regions(file) if file is not None else ()))


def _one_or_two(value: str, factor: float = 1.0) -> tuple[float, ...]:
    """Return the number in a text, or the two that a comma separates."""
    try:
        numbers = tuple(factor * float(part) for part in value.split(","))
    except ValueError:
        raise click.BadParameter(f"{value!r} is not a number, nor two with a comma between (row,column)") from None
    if len(numbers) > 2:
        raise click.BadParameter(f"{value!r} has {len(numbers)} numbers; give one, or two (row,column)")
    return numbers


def _pixel_size(_context: click.Context, _option: click.Parameter, value: str | None) -> tuple[float, float] | None:
    if value is None:
        return None
    numbers = _one_or_two(value)
    return numbers[0], numbers[-1]


def _per_cent(
    _context: click.Context, _option: click.Parameter, value: str | None
) -> float | tuple[float, float] | None:
    if value is None:
        return None
    numbers = _one_or_two(value, 0.01)
    if not all(0 <= n < 1 for n in numbers):
        raise click.BadParameter(f"it is in per cent, from 0 up to 100, got {value}; leave it out if it is not known")
    return numbers[0] if len(numbers) == 1 else (numbers[0], numbers[1])


def _drawn_regions(_context: click.Context, _option: click.Parameter, values: Sequence[str]) -> list[DrawnRegion]:
    return [_drawn_region(value) for value in values]


def _drawn_region(value: str) -> DrawnRegion:
    name, _, corners = value.rpartition(":")
    try:
        points = tuple((float(row), float(column)) for row, column in (pair.split(",") for pair in corners.split()))
    except ValueError:
        raise click.BadParameter(
            f'{value!r} is not a region; write it as "grain A: 40,30 40,286 296,286 296,30", each corner as row,column '
            "without a space"
        ) from None
    if len(points) < 3:
        raise click.BadParameter(f"{value!r} has {len(points)} corners; a region needs at least three")
    return name.strip(), points


_OPTIONS: list[Callable[[Callable[..., Any]], Callable[..., Any]]] = [
    click.option(
        "--pixel-size",
        callback=_pixel_size,
        metavar="NM[,NM]",
        help="nm per pixel along (row, column), instead of what the file says.",
    ),
    click.option(
        "--pixel-size-uncertainty",
        callback=_per_cent,
        metavar="PERCENT[,PERCENT]",
        help="Relative standard uncertainty of the pixel size. One number: rows and columns share the same error, so "
        "that angles are not touched; two: independent errors.",
    ),
    from_log_option(),
    click.option("--voltage", type=float, metavar="KV", help="Beam voltage; gives scattering angles."),
    click.option("--cs", type=float, metavar="MM", help="Spherical aberration of the objective lens."),
    click.option("--defocus", type=float, metavar="NM", help="Defocus, positive for underfocus."),
    click.option(
        "--frame", type=click.IntRange(min=0), default=0, show_default=True, help="Which picture of a stack, from 0."
    ),
    click.option(
        "--region",
        callback=_drawn_regions,
        multiple=True,
        metavar='"NAME: r,c r,c ..."',
        help="A region by its corners (row,column in pixels); may be given several times. None: the whole picture.",
    ),
    click.option(
        "--regions",
        metavar="FILE",
        help="Regions from a record, or from any JSON file with a list `regions` of `name` and `vertices_px`.",
    ),
    click.option(
        "--phases",
        default="none",
        show_default=True,
        metavar="none|all|NAME,FILE.cif,...",
        help="Phases to compare with.",
    ),
]
