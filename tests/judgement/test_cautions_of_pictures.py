"""Every caution is given for a picture that calls for it, and not for one that does not."""

from __future__ import annotations

import io
import json
import math
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import scipy.ndimage
from PIL import Image

from fringespan.cautions import Caution
from fringespan.judgement.peaks import BROKEN_FRINGES
from fringespan.measurement import Measurement, measure
from fringespan.micrograph import Micrograph
from fringespan.reading import read
from fringespan.region import Region
from simulated_fringes import Wave, falling, fringes, noise, places

SHAPE = (256, 256)
PIXEL_NM = 0.02
FIRST, SECOND = (0.031, 0.094), (-0.087, 0.052)
"""Two short vectors of a lattice, cycles per pixel; periods of about 10 px."""


def plus(a: tuple[float, float], b: tuple[float, float], m: float = 1, n: float = 1) -> tuple[float, float]:
    return m * a[0] + n * b[0], m * a[1] + n * b[1]


def turned(g: tuple[float, float], degrees: float) -> tuple[float, float]:
    c, s = math.cos(math.radians(degrees)), math.sin(math.radians(degrees))
    return c * g[0] - s * g[1], s * g[0] + c * g[1]


LATTICE = [Wave(FIRST, 1.0), Wave(SECOND, 0.9), Wave(plus(FIRST, SECOND), 0.5), Wave(plus(FIRST, SECOND, 1, -1), 0.4)]
OTHER = [Wave(turned(wave.g, 23), 0.8 * wave.amplitude) for wave in LATTICE]


def crystal(
    waves: list[Wave] = LATTICE, sigma: float = 1.0, seed: int = 1, shape: tuple[int, int] = SHAPE
) -> np.ndarray:
    """A crystal all over the picture, with the noise of a detector."""
    return 100 + fringes(shape, waves) + sigma * noise(np.random.default_rng(seed), shape)


def particle(radius: float, waves: list[Wave] = LATTICE, centre: tuple[float, float] = (0, 0)) -> np.ndarray:
    """The fringes of a flat disc without noise."""
    y, x = places(SHAPE)
    edge = np.clip((radius - np.hypot(y - centre[0], x - centre[1])) / 4 + 0.5, 0, 1)
    return edge * fringes(SHAPE, waves)


def on_film(fringes_: np.ndarray, sigma: float = 0.3, seed: int = 2) -> np.ndarray:
    return 100 + fringes_ + sigma * noise(np.random.default_rng(seed), SHAPE)


def dome(radius: float) -> np.ndarray:
    """The fringes of a crystal that gets thinner from its middle to its edge, without noise."""
    y, x = places(SHAPE)
    return np.clip(1 - (y**2 + x**2) / radius**2, 0, None) * fringes(SHAPE, LATTICE)


def with_scan_lines(waves: list[Wave] = LATTICE) -> np.ndarray:
    return crystal(waves) + 2 * np.random.default_rng(3).standard_normal((SHAPE[0], 1))


def with_label() -> np.ndarray:
    picture = crystal()
    picture[200:240, 20:90] = picture.max() + 5
    return picture


def as_jpeg(picture: np.ndarray, quality: int) -> np.ndarray:
    low, high = np.percentile(picture, [0.5, 99.5])
    file = io.BytesIO()
    grey = np.clip(255 * (picture - low) / (high - low), 0, 255).astype(np.uint8)
    Image.fromarray(grey).save(file, "jpeg", quality=quality)
    return np.asarray(Image.open(file)).astype(float)


def in_grey_levels(gain: float = 1.0) -> np.ndarray:
    """8-bit pictures: as they come, or with the contrast raised afterwards."""
    levels = np.clip(np.rint(100 + 12 * (crystal() - 100)), 0, 255)
    return np.clip(gain * (levels - 60), 0, 255).astype(np.uint8)


def film(drift_px: float = 0.0) -> np.ndarray:
    """An amorphous film through a lens near Scherzer's defocus, the picture smeared along the columns by drift."""
    f = np.hypot(np.fft.fftfreq(512)[:, None], np.fft.fftfreq(512)[None])
    transfer = (
        np.sin(np.pi * (2 * f + 110 * f * f)) * np.exp(-((f / 0.25) ** 2)) * np.sinc(drift_px * np.fft.fftfreq(512))
    )
    rng = np.random.default_rng(4)
    seen = np.fft.ifft2(np.fft.fft2(rng.standard_normal((512, 512))) * transfer).real
    return 100 + 10 * seen / seen.std() + 2 * rng.standard_normal((512, 512))


def with_saturated_pixels() -> np.ndarray:
    return np.clip(np.rint(65000 + 200 * (crystal() - 100)), 0, 65535).astype(np.uint16)


def with_hot_pixels() -> np.ndarray:
    picture = crystal()
    picture[10:200:40, 30] = 5000
    return picture


def of_few_electrons() -> np.ndarray:
    return np.random.default_rng(5).poisson(1.0 + 0.3 * fringes(SHAPE, LATTICE[:2])).astype(np.uint8)


@dataclass(frozen=True)
class Case:
    """A picture, what is known about it, and the region that is measured in it."""

    picture: Callable[[], np.ndarray] = crystal
    known: dict[str, Any] = field(default_factory=dict)
    region: Region | None = None

    def measured(self) -> Measurement:
        facts: dict[str, Any] = {"pixel_size_nm": PIXEL_NM, "pixel_size_relative_uncertainty": 0.01} | self.known
        return measure(Micrograph(self.picture(), **facts), self.region)

    def codes(self) -> set[str]:
        """Codes of everything that is said about the region and its peaks."""
        measurement = self.measured()
        of_peaks = {caution.code for peak in measurement.peaks for caution in peak.cautions}
        return of_peaks | {caution.code for caution in measurement.cautions}


def lens(**values: float) -> dict[str, Any]:
    return {"voltage_kv": 200.0, "cs_mm": 1.0, "defocus_nm": 60.0} | values


JPEG = Caution("jpeg-compression", "warning", "JPEG.", "Use another.")
NOT_BELIEVED = Caution("pixel-size-not-believed", "warning", "The file states nonsense.", "Give it.")
D_FIRST = PIXEL_NM / math.hypot(*FIRST)
ORDINARY = Case()

# code: a picture that calls for it, a picture like it that does not
CASES: dict[str, tuple[Case, Case]] = {
    "no-fringe-found": (Case(lambda: crystal([])), ORDINARY),
    "one-spacing": (Case(lambda: crystal([Wave(FIRST), Wave(plus(FIRST, FIRST), 0.4)])), ORDINARY),
    "unchecked-pair": (Case(lambda: crystal(LATTICE[:2])), ORDINARY),
    "pixel-size-not-stated": (
        Case(known={"pixel_size_nm": None}),
        Case(known={"pixel_size_nm": None, "cautions": (NOT_BELIEVED,)}),
    ),
    "pixel-size-uncertainty-not-stated": (Case(known={"pixel_size_relative_uncertainty": None}), ORDINARY),
    "pixel-size-rules": (ORDINARY, Case(known={"pixel_size_relative_uncertainty": 1e-6})),
    "rows-and-columns-may-differ": (
        Case(known={"pixel_size_nm": (0.02, 0.0204)}),
        Case(known={"pixel_size_nm": (0.02, 0.0204), "pixel_size_relative_uncertainty": (0.01, 0.01)}),
    ),
    "scan-lines": (Case(with_scan_lines), ORDINARY),
    "on-spectrum-cross": (
        Case(lambda: with_scan_lines([*LATTICE[:2], Wave((0.151, 0.0), 3.0)])),
        Case(lambda: crystal([*LATTICE[:2], Wave((0.151, 0.0), 3.0)])),
    ),
    "small-crystal": (Case(lambda: on_film(particle(70))), ORDINARY),
    "few-fringes": (
        Case(region=Region.rectangle("small", 100, 100, 159, 159)),
        Case(region=Region.rectangle("larger", 80, 80, 199, 199)),
    ),
    "crystal-smaller-than-region": (Case(lambda: on_film(particle(50))), Case(lambda: on_film(particle(120)))),
    "another-crystal-in-region": (
        Case(lambda: on_film(particle(60, LATTICE, (-50, -50)) + particle(40, OTHER, (70, 70)))),
        Case(lambda: on_film(particle(60, LATTICE, (-50, -50)))),
    ),
    "two-lattices": (Case(lambda: crystal([*LATTICE, *OTHER])), ORDINARY),
    "combination": (ORDINARY, Case(lambda: crystal(LATTICE[:2]))),
    "off-lattice": (Case(lambda: crystal([*LATTICE, Wave((0.0603, 0.0871), 0.5)])), ORDINARY),
    "folded-fringes": (
        # 0.522 cycles per pixel along the columns shows as 0.478 the other way
        Case(lambda: crystal([*LATTICE, Wave(plus(FIRST, SECOND, 5, 1), 0.3)])),
        Case(lambda: crystal([*LATTICE, Wave(plus(FIRST, SECOND, 4, 1), 0.3)])),
    ),
    "moire": (
        Case(lambda: crystal([*LATTICE, *OTHER, Wave(plus(LATTICE[0].g, OTHER[0].g, 1, -1), 0.6)])),
        Case(lambda: crystal([*LATTICE, *OTHER])),
    ),
    "coarse-sampling": (
        Case(lambda: crystal([Wave((0.1, 0.36)), Wave(SECOND)])),
        Case(lambda: crystal([Wave((0.08, 0.3)), Wave(SECOND)])),
    ),
    "jpeg-blocks": (
        Case(lambda: crystal() + 0.6 * np.tile(np.eye(8), (32, 32)) * 8),
        Case(lambda: as_jpeg(crystal(), 90), {"cautions": (JPEG,)}),
    ),
    "beyond-point-resolution": (
        Case(known=lens()),  # 0.233 nm; FIRST is 0.202 nm
        Case(known=lens(cs_mm=0.001)),
    ),
    "near-transfer-zero": (
        # chi = -pi at FIRST: df = Cs lambda^2 g^2 / 2 + 1 / (lambda g^2)
        Case(known=lens(cs_mm=0.0, defocus_nm=D_FIRST**2 / 0.00250793)),
        Case(known=lens(cs_mm=0.0, defocus_nm=D_FIRST**2 / 0.00250793 / 2)),
    ),
    "lens-transfer": (Case(known=lens()), ORDINARY),
    "delocalised-fringes": (Case(known=lens()), Case(known=lens(cs_mm=0.0, defocus_nm=5.0))),
    "off-bragg": (
        Case(lambda: crystal([Wave((0.08, 0.16)), Wave(SECOND)]), {"voltage_kv": 60.0}),
        Case(lambda: crystal([Wave((0.08, 0.16)), Wave(SECOND)]), {"voltage_kv": 300.0}),
    ),
    "visibility-lower-limit": (Case(known={"dark_level": 50.0}), ORDINARY),
    "one-of-a-series": (Case(known={"frame_count": 5}), ORDINARY),
    "saturated-pixels": (Case(with_saturated_pixels), ORDINARY),
    "defective-pixels": (Case(with_hot_pixels), ORDINARY),
    "label-in-region": (Case(with_label), Case(with_label, region=Region.rectangle("beside", 0, 0, 180, 255))),
    "pixels-repeated": (
        Case(lambda: np.repeat(np.repeat(np.rint(10 * crystal()), 2, axis=0), 2, axis=1)),
        Case(of_few_electrons),
    ),
    "fine-detail-missing": (
        Case(lambda: scipy.ndimage.zoom(crystal(shape=(160, 160)), 1.6, order=3)),
        Case(lambda: 100 + fringes(SHAPE, LATTICE) + noise(np.random.default_rng(6), SHAPE, falling)),
    ),
    "grey-levels-missing": (Case(lambda: in_grey_levels(1.7)), Case(in_grey_levels)),
    "lopsided-rings": (Case(lambda: film(2.0)), Case(film)),
    "not-one-plane-wave": (
        Case(lambda: on_film(particle(115, [Wave((0.11, 0.16)), Wave((-0.16, 0.11))]), 0.05)),
        ORDINARY,
    ),
    "crystal-part-rules": (
        Case(lambda: on_film(dome(80), 0.1), {"pixel_size_relative_uncertainty": 1e-6}),
        Case(known={"pixel_size_relative_uncertainty": 1e-6}),
    ),
}


@pytest.mark.parametrize("code", CASES)
def test_a_caution_is_given_where_it_is_called_for(code: str) -> None:
    assert code in CASES[code][0].codes()


@pytest.mark.parametrize("code", CASES)
def test_a_caution_is_not_given_without_cause(code: str) -> None:
    assert code not in CASES[code][1].codes()


@pytest.mark.parametrize("code", CASES)
def test_the_same_is_said_once_and_the_gravest_first(code: str) -> None:
    measurement = CASES[code][0].measured()
    for cautions in (measurement.cautions, *(peak.cautions for peak in measurement.peaks)):
        assert len({caution.code for caution in cautions}) == len(cautions)
        order = [("grave", "warning", "note").index(caution.gravity) for caution in cautions]
        assert order == sorted(order)


@pytest.mark.parametrize("code", CASES)
def test_a_caution_is_a_sentence_with_a_remedy(code: str) -> None:
    measurement = CASES[code][0].measured()
    said = [*measurement.cautions, *(caution for peak in measurement.peaks for caution in peak.cautions)]
    caution = next(c for c in said if c.code == code)
    for sentence in (caution.text, caution.remedy):
        assert sentence[0].isupper() or sentence[0].isdigit()
        assert sentence.endswith(".")
        assert "  " not in sentence
    assert len(caution.text) + len(caution.remedy) < 500


def test_a_faultless_picture_of_a_crystal_gets_no_caution_beyond_the_pixel_sizes() -> None:
    assert {c.code for c in ORDINARY.measured().cautions} == {"pixel-size-rules"}


def test_what_is_known_of_the_lens_does_not_warn_of_a_spacing_at_full_transfer_where_its_crystal_is() -> None:
    codes = Case(known=lens(cs_mm=0.0, defocus_nm=5.0)).codes()
    assert not codes & {"near-transfer-zero", "beyond-point-resolution", "delocalised-fringes"}


def test_broken_fringes_are_named_where_their_spacing_is_withheld() -> None:
    pictures = Path(__file__).parents[1] / "pictures"
    truth = json.loads((pictures / "nio_octahedron.json").read_text(encoding="utf-8"))
    region = Region("nickel oxide", truth["regions"][0]["vertices_px"])
    peaks = measure(read(pictures / "nio_octahedron.tif"), region).peaks
    withheld = {k for k, peak in enumerate(peaks) if peak.withheld is not None}
    assert 0 < len(withheld) < len(peaks)
    assert {k for k, peak in enumerate(peaks) if BROKEN_FRINGES in peak.cautions} == withheld


def test_no_caution_of_the_spoiled_kind_for_few_electrons() -> None:
    assert not Case(of_few_electrons).codes() & {
        "label-in-region",
        "pixels-repeated",
        "fine-detail-missing",
        "grey-levels-missing",
    }
