from __future__ import annotations

import struct
import zlib
from pathlib import Path

import imagecodecs
import numpy as np
import pytest
from numpy.typing import NDArray
from PIL import Image

from fringespan.exceptions import SettingsError, UnreadablePictureError
from fringespan.micrograph import Micrograph
from fringespan.reading import read

WEIGHTS = np.array([0.2126, 0.7152, 0.0722])


def codes(micrograph: Micrograph) -> list[str]:
    return [caution.code for caution in micrograph.cautions]


def whole(micrograph: Micrograph) -> NDArray[np.generic]:
    return micrograph.crop(slice(None), slice(None))


def png_chunk(kind: bytes, content: bytes) -> bytes:
    return struct.pack(">I", len(content)) + kind + content + struct.pack(">I", zlib.crc32(kind + content))


@pytest.mark.parametrize("dtype", [np.uint8, np.uint16])
def test_grey_png_keeps_its_numbers(tmp_path: Path, grey16: NDArray[np.uint16], dtype: type) -> None:
    array = (grey16 % 251).astype(dtype) * (1 if dtype == np.uint8 else 200)
    Image.fromarray(array).save(tmp_path / "a.png")
    micrograph = read(tmp_path / "a.png")
    np.testing.assert_array_equal(whole(micrograph), array)
    assert whole(micrograph).dtype == dtype
    assert codes(micrograph) == ["pixel-size-not-stated"]


@pytest.mark.parametrize("samples", [3, 4])
@pytest.mark.parametrize("dtype", [np.uint8, np.uint16])
def test_colour_png_becomes_luminance(tmp_path: Path, samples: int, dtype: type) -> None:
    colours = np.random.default_rng(2).integers(0, np.iinfo(dtype).max, (48, 40, samples), dtype=dtype)
    (tmp_path / "a.png").write_bytes(imagecodecs.png_encode(colours))
    micrograph = read(tmp_path / "a.png")
    np.testing.assert_allclose(whole(micrograph), colours[..., :3] @ WEIGHTS, rtol=1e-5)
    assert "colour-picture" in codes(micrograph)


def test_opacity_is_dropped(tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
    grey = (grey16 >> 4).astype(np.uint8)
    Image.fromarray(np.stack([grey, 255 - grey], axis=-1), "LA").save(tmp_path / "a.png")
    micrograph = read(tmp_path / "a.png")
    np.testing.assert_array_equal(whole(micrograph), grey)
    assert "colour-picture" not in codes(micrograph)


def test_palette_png_becomes_luminance(tmp_path: Path, colours8: NDArray[np.uint8]) -> None:
    picture = Image.fromarray(colours8).quantize(64)
    picture.save(tmp_path / "a.png")
    micrograph = read(tmp_path / "a.png")
    np.testing.assert_allclose(whole(micrograph), np.asarray(picture.convert("RGB")) @ WEIGHTS, rtol=1e-5)
    assert "colour-picture" in codes(micrograph)


@pytest.mark.parametrize("dpi", [72, 96, 300])
@pytest.mark.parametrize("kind", ["png", "jpeg"])
def test_screen_and_print_resolutions_count_as_not_stated(tmp_path: Path, dpi: int, kind: str) -> None:
    path = tmp_path / "a"
    Image.fromarray(np.zeros((40, 40), np.uint8)).save(path, kind, dpi=(dpi, dpi))
    micrograph = read(path)
    assert micrograph.pixel_size_nm is None
    (caution,) = [c for c in micrograph.cautions if c.code == "pixel-size-not-believed"]
    assert ("pHYs chunk" if kind == "png" else f"JPEG header: {dpi} dots per inch") in caution.text


def test_a_png_can_state_a_pixel_size_in_metres(tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
    png = imagecodecs.png_encode(grey16)
    # 2e9 pixels per metre along x, 2.5e9 along y
    sized = png[:33] + png_chunk(b"pHYs", struct.pack(">IIB", 2_000_000_000, 2_500_000_000, 1)) + png[33:]
    (tmp_path / "a.png").write_bytes(sized)
    micrograph = read(tmp_path / "a.png")
    assert micrograph.pixel_size_nm == pytest.approx((0.4, 0.5))
    assert micrograph.pixel_size_source == "pHYs chunk"


def test_grey_jpeg_is_read_with_a_caution(tmp_path: Path) -> None:
    smooth = np.tile(np.arange(0, 80, 2, dtype=np.uint8), (48, 1))
    Image.fromarray(smooth).save(tmp_path / "a.jpg", quality=100)
    micrograph = read(tmp_path / "a.jpg")
    np.testing.assert_allclose(whole(micrograph).astype(float), smooth, atol=2)
    assert "jpeg-compression" in codes(micrograph)
    assert "colour-picture" not in codes(micrograph)


@pytest.mark.parametrize("mode", ["RGB", "CMYK"])
def test_colour_jpeg_becomes_luminance(tmp_path: Path, mode: str) -> None:
    grey = np.tile(np.arange(60, 140, 2, dtype=np.uint8), (48, 1))
    Image.fromarray(grey).convert(mode).save(tmp_path / "a.jpg", quality=100)
    micrograph = read(tmp_path / "a.jpg")
    np.testing.assert_allclose(whole(micrograph), grey, atol=3)
    assert {"jpeg-compression", "colour-picture"} <= set(codes(micrograph))


@pytest.mark.parametrize("kind", ["png", "jpeg"])
def test_a_file_that_is_cut_off_is_refused(tmp_path: Path, grey16: NDArray[np.uint16], kind: str) -> None:
    path = tmp_path / "a"
    Image.fromarray((grey16 >> 4).astype(np.uint8)).save(path, kind)
    path.write_bytes(path.read_bytes()[:-200])
    with pytest.raises(UnreadablePictureError, match=r"is damaged .*; copy it again"):
        read(path)


def test_a_small_file_that_claims_a_huge_picture_is_refused_at_once(tmp_path: Path) -> None:
    header = struct.pack(">IIBBBBB", 60_000, 60_000, 16, 0, 0, 0, 0)
    rows = zlib.compress(bytes(10_000_000), 9)
    content = b"\x89PNG\r\n\x1a\n" + png_chunk(b"IHDR", header) + png_chunk(b"IDAT", rows) + png_chunk(b"IEND", b"")
    (tmp_path / "a.png").write_bytes(content)
    with pytest.raises(UnreadablePictureError, match=r"claims 7200 MB of picture in 0\.0\d+ MB of file"):
        read(tmp_path / "a.png")
    jpeg = bytearray(imagecodecs.jpeg8_encode(np.zeros((48, 48), np.uint8)))
    size = jpeg.find(b"\xff\xc0") + 5
    jpeg[size : size + 4] = struct.pack(">HH", 65_000, 65_000)
    (tmp_path / "a.jpg").write_bytes(jpeg)
    with pytest.raises(UnreadablePictureError, match="claims 4225 MB of picture"):
        read(tmp_path / "a.jpg")


def test_there_is_only_frame_0(tmp_path: Path) -> None:
    Image.fromarray(np.zeros((40, 40), np.uint8)).save(tmp_path / "a.png")
    with pytest.raises(SettingsError, match="holds one picture, frame 0"):
        read(tmp_path / "a.png", frame=1)
