"""Make the pictures of the README from the program itself.

usage: python tests/screenshots/make_figures.py

Measures the simulated two-grain sample as `fringespan demo` does and writes `two_grains.png` beside this script.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import fringespan as fs
from fringespan.export.measurement_figure import measurement_figure
from fringespan.sample_pictures import sample_file

HERE = Path(__file__).resolve().parent


def main() -> None:
    """Write the figure of the demo picture."""
    micrograph = replace(
        fs.read(sample_file("two_grains.ome.tif")), pixel_size_relative_uncertainty=0.0075, voltage_kv=300
    )
    regions = fs.read_regions(sample_file("two_grains.json"))
    figure = measurement_figure([fs.measure(micrograph, region) for region in regions])
    figure.savefig(HERE / "two_grains.png", dpi=100)


if __name__ == "__main__":
    main()
