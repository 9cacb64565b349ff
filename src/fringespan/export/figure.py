"""What all figures share: size, type, colours, files, and the picture itself with its scale bar.

matplotlib is used through its objects, so that no window and no global state is touched.
"""

from __future__ import annotations

import io
import math
import os
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, cast

import numpy as np
from numpy.typing import NDArray

from fringespan.exceptions import SettingsError
from fringespan.micrograph import Micrograph
from fringespan.output_file import write_whole_file

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = [
    "FIGURE_SUFFIXES",
    "REGION_COLOURS",
    "SMALL_TYPE_PT",
    "TYPE_PT",
    "draw_picture",
    "figure_bytes",
    "figure_format",
    "figure_style",
    "new_figure",
    "write_figure",
]

FIGURE_SUFFIXES = (".png", ".svg", ".pdf")

TYPE_PT = 8.0
SMALL_TYPE_PT = 7.0
"""Still readable in a column of a journal, when the figure is printed at its own size."""

BITMAP_DPI = 300

REGION_COLOURS = ("#E69F00", "#56B4E9", "#009E73", "#CC79A7", "#F0E442", "#D55E00", "#0072B2")
"""Colours told apart with any colour vision: Okabe & Ito (2008), "Color Universal Design"; black left out."""

_DRAWN_PX = 1400
"""Pixels of the longer side that are drawn; more than a printed page can show."""

_BAND_PX = 4_000_000

_CONTRAST_PERCENTILES = (0.3, 99.7)

_STYLE = {
    # letters stay letters: a journal's editor can change them, a reader can search them
    "svg.fonttype": "none",
    "pdf.fonttype": 42,
    "font.family": ["DejaVu Sans"],
    "font.size": TYPE_PT,
    "axes.linewidth": 0.6,
    # the same figure gives the same file
    "svg.hashsalt": "fringespan",
}


@contextmanager
def figure_style() -> Iterator[None]:
    """Draw in the style of all figures; text takes its font when it is made and when it is written."""
    from matplotlib import rc_context

    with rc_context(cast("dict[Any, Any]", _STYLE)):
        yield


def new_figure(width_mm: float, height_mm: float) -> Figure:
    """Return an empty figure of this size."""
    from matplotlib.figure import Figure

    with figure_style():
        return Figure(figsize=(width_mm / 25.4, height_mm / 25.4), layout="constrained")


def figure_format(path: str | os.PathLike[str]) -> str:
    """Return the format that the end of a file name stands for.

    Raises
    ------
    SettingsError
        If it is none of `FIGURE_SUFFIXES`.
    """
    suffix = Path(path).suffix.lower()
    if suffix not in FIGURE_SUFFIXES:
        raise SettingsError(
            f"a figure's file name must end in {', '.join(FIGURE_SUFFIXES[:-1])} or {FIGURE_SUFFIXES[-1]}, "
            f"got {Path(path).name!r}"
        )
    return suffix[1:]


def figure_bytes(figure: Figure, file_format: str) -> bytes:
    """Return a figure as the content of a file: "png" at 300 dpi, "svg" or "pdf" with text as text."""
    undated = {"svg": {"Date": None}, "pdf": {"CreationDate": None}, "png": {}}[file_format]
    content = io.BytesIO()
    with figure_style(), warnings.catch_warnings():
        # a name in letters that the font lacks is drawn as boxes; the record holds it in full
        warnings.filterwarnings("ignore", message="Glyph .* missing from", category=UserWarning)
        figure.savefig(content, format=file_format, dpi=BITMAP_DPI, metadata=undated)
    return content.getvalue()


def write_figure(figure: Figure, path: str | os.PathLike[str]) -> Path:
    """Write a figure whole, in the format that the file name ends in.

    Raises
    ------
    SettingsError
        If the file name ends in none of `FIGURE_SUFFIXES`.
    RecordError
        If it cannot be written.
    """
    return write_whole_file(path, figure_bytes(figure, figure_format(path)))


def draw_picture(axes: Axes, micrograph: Micrograph) -> None:
    """Draw a picture in its true proportions, with a scale bar where the pixel size is known.

    The axes are in pixels, so that outlines can be drawn over it as they are. A large picture is read in bands and
    averaged down.
    """
    rows, columns = micrograph.shape
    pixels = _drawable_pixels(micrograph)
    finite = pixels[np.isfinite(pixels)]
    low, high = np.percentile(finite, _CONTRAST_PERCENTILES) if finite.size else (0.0, 1.0)
    row_nm, column_nm = micrograph.pixel_size_nm or (1.0, 1.0)
    axes.imshow(
        pixels,
        cmap="gray",
        vmin=low,
        vmax=max(high, np.nextafter(low, np.inf)),
        extent=(-0.5, columns - 0.5, rows - 0.5, -0.5),
        aspect=row_nm / column_nm,
        interpolation="antialiased",
    )
    axes.set_axis_off()
    axes.autoscale(False)
    if micrograph.pixel_size_nm is not None:
        _draw_scale_bar(axes, micrograph.shape, (row_nm, column_nm))


def _drawable_pixels(micrograph: Micrograph) -> NDArray[np.float32]:
    """Return the picture averaged over square blocks, so that its longer side has at most `_DRAWN_PX` of them."""
    rows, columns = micrograph.shape
    block = math.ceil(max(rows, columns) / _DRAWN_PX)
    if block == 1:
        return micrograph.crop(slice(0, rows), slice(0, columns)).astype(np.float32)
    # a narrow picture may have fewer columns than a block; then the average is over what is there
    across = [(start, min(start + block, columns)) for start in range(0, columns, block)]
    starts = [start for start, _ in across]
    widths = np.array([stop - start for start, stop in across], dtype=np.float32)
    band = max(1, _BAND_PX // (columns * block)) * block
    bands = []
    for top in range(0, rows, band):
        bottom = min(top + band, rows)
        part = micrograph.crop(slice(top, bottom), slice(0, columns)).astype(np.float32)
        summed = np.add.reduceat(np.add.reduceat(part, starts, axis=1), np.arange(0, bottom - top, block), axis=0)
        heights = np.diff(np.append(np.arange(0, bottom - top, block), bottom - top)).astype(np.float32)
        bands.append(summed / (heights[:, None] * widths))
    return np.concatenate(bands)


def _draw_scale_bar(axes: Axes, shape: tuple[int, int], pixel_size_nm: tuple[float, float]) -> None:
    from matplotlib.patches import Rectangle

    rows, columns = shape
    length_nm = round_length(0.25 * columns * pixel_size_nm[1])
    width = length_nm / pixel_size_nm[1]
    margin = 0.025 * columns
    margin_rows = margin * pixel_size_nm[1] / pixel_size_nm[0]
    text_rows = 2.6 * margin_rows
    box = Rectangle(
        (0, rows - 0.5 - 3.4 * margin_rows - 0.4 * text_rows),
        width + 2 * margin,
        3.4 * margin_rows + 0.4 * text_rows,
        facecolor="black",
        alpha=0.65,
        linewidth=0,
    )
    bar = Rectangle((margin, rows - 0.5 - 1.4 * margin_rows), width, 0.5 * margin_rows, facecolor="white", linewidth=0)
    axes.add_patch(box)
    axes.add_patch(bar)
    axes.text(
        margin + width / 2,
        rows - 0.5 - 1.9 * margin_rows,
        f"{length_nm:g} nm",
        color="white",
        ha="center",
        va="bottom",
        fontsize=SMALL_TYPE_PT,
    )


def round_length(about: float) -> float:
    """Return the largest of 1, 2, 5 times a power of ten that is not above `about`."""
    power = 10.0 ** math.floor(math.log10(about))
    return max(step for step in (1.0, 2.0, 5.0) if step * power <= about * (1 + 1e-9)) * power
