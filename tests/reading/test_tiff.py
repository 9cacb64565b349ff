from __future__ import annotations

import struct
import tracemalloc
import zlib
from pathlib import Path
from typing import Any

import imagecodecs
import numpy as np
import pytest
import tifffile
from numpy.typing import NDArray

from fringespan.exceptions import SettingsError, UnreadablePictureError
from fringespan.micrograph import Micrograph
from fringespan.reading import read

WEIGHTS = np.array([0.2126, 0.7152, 0.0722])
PER_CM = {"pm": 1e10, "angstrom": 1e8, "nm": 1e7, "um": 1e4, "mm": 10.0}


def saved(path: Path, array: NDArray[np.generic] | None, **options: Any) -> Path:
    tifffile.imwrite(path / "picture.tif", array, **options)
    return path / "picture.tif"


def whole(micrograph: Micrograph) -> NDArray[np.generic]:
    return micrograph.crop(slice(None), slice(None))


def codes(micrograph: Micrograph) -> list[str]:
    return [caution.code for caution in micrograph.cautions]


class TestPixels:
    @pytest.mark.parametrize("dtype", ["u1", "i1", "u2", "i2", "u4", "i4", "f2", "f4", "f8"])
    @pytest.mark.parametrize("byteorder", ["<", ">"])
    def test_every_depth_and_byte_order(
        self, tmp_path: Path, grey16: NDArray[np.uint16], dtype: str, byteorder: str
    ) -> None:
        array = (grey16 % 120).astype(dtype)
        micrograph = read(saved(tmp_path, array, byteorder=byteorder))
        part = micrograph.crop(slice(5, 40), slice(11, 12))
        assert part.dtype == np.dtype(dtype)
        assert part.dtype.isnative
        np.testing.assert_array_equal(part, array[5:40, 11:12])
        np.testing.assert_array_equal(whole(micrograph), array)

    @pytest.mark.parametrize("compression", [None, "zlib", "lzw", "packbits", "lzma", "zstd"])
    @pytest.mark.parametrize(
        "layout", [{"rowsperstrip": 7}, {"tile": (16, 16)}, {"tile": (32, 16), "bigtiff": True, "byteorder": ">"}]
    )
    def test_strips_and_tiles_plain_and_compressed(
        self, tmp_path: Path, grey16: NDArray[np.uint16], compression: str | None, layout: dict[str, Any]
    ) -> None:
        micrograph = read(saved(tmp_path, grey16, compression=compression, **layout))
        np.testing.assert_array_equal(micrograph.crop(slice(13, 40), slice(15, 33)), grey16[13:40, 15:33])
        np.testing.assert_array_equal(whole(micrograph), grey16)

    @pytest.mark.parametrize("dtype", ["u2", "f4"])
    def test_predictor(self, tmp_path: Path, grey16: NDArray[np.uint16], dtype: str) -> None:
        array = grey16.astype(dtype)
        micrograph = read(saved(tmp_path, array, compression="zlib", predictor=True, rowsperstrip=10))
        np.testing.assert_array_equal(whole(micrograph), array)

    def test_packed_12_bit(self, tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
        micrograph = read(saved(tmp_path, grey16, bitspersample=12))
        np.testing.assert_array_equal(whole(micrograph), grey16)

    def test_tiles_that_were_never_written_are_empty(self, tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
        tiles = [zlib.compress(grey16[:32, :32].tobytes()), b"", b"", b""]
        path = saved(tmp_path, iter(tiles), shape=(48, 40), dtype=np.uint16, compression="zlib", tile=(32, 32))  # type: ignore[arg-type]
        pixels = whole(read(path))
        np.testing.assert_array_equal(pixels[:32, :32], grey16[:32, :32])
        assert not pixels[32:].any()
        assert not pixels[:, 32:].any()

    def test_grey_jpeg_inside_tiff(self, tmp_path: Path) -> None:
        smooth = np.tile(np.arange(0, 96, 2, dtype=np.uint8), (64, 1))
        micrograph = read(saved(tmp_path, smooth, compression="jpeg", tile=(16, 16)))
        np.testing.assert_allclose(whole(micrograph).astype(float), smooth, atol=4)
        assert "jpeg-compression" in codes(micrograph)
        assert "colour-picture" not in codes(micrograph)

    def test_white_is_zero_is_said(self, tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
        micrograph = read(saved(tmp_path, grey16, photometric="miniswhite"))
        np.testing.assert_array_equal(whole(micrograph), grey16)
        assert "grey-scale-inverted" in codes(micrograph)


class TestColours:
    @pytest.mark.parametrize("dtype", [np.uint8, np.uint16])
    @pytest.mark.parametrize("planarconfig", ["contig", "separate"])
    @pytest.mark.parametrize("compression", [None, "zlib"])
    def test_become_luminance(self, tmp_path: Path, dtype: type, planarconfig: str, compression: str | None) -> None:
        colours = np.random.default_rng(3).integers(0, np.iinfo(dtype).max, (48, 40, 3), dtype=dtype)
        stored = colours if planarconfig == "contig" else np.moveaxis(colours, -1, 0)
        path = saved(
            tmp_path, stored, photometric="rgb", planarconfig=planarconfig, compression=compression, rowsperstrip=10
        )
        micrograph = read(path)
        np.testing.assert_allclose(whole(micrograph), colours @ WEIGHTS, rtol=1e-5)
        assert "colour-picture" in codes(micrograph)

    def test_through_jpeg_become_luminance(self, tmp_path: Path) -> None:
        grey = np.tile(np.arange(60, 124, dtype=np.uint8), (64, 1))
        path = saved(tmp_path, np.repeat(grey[..., None], 3, -1), photometric="rgb", compression="jpeg", tile=(16, 16))
        micrograph = read(path)
        np.testing.assert_allclose(whole(micrograph), grey, atol=5)
        assert {"colour-picture", "jpeg-compression"} <= set(codes(micrograph))

    def test_palette_becomes_luminance(self, tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
        index = (grey16 >> 4).astype(np.uint8)
        palette = np.random.default_rng(4).integers(0, 65536, (3, 256), dtype=np.uint16)
        micrograph = read(saved(tmp_path, index, photometric="palette", colormap=palette))
        np.testing.assert_allclose(whole(micrograph), (palette.T @ WEIGHTS)[index], rtol=1e-5)
        assert "colour-picture" in codes(micrograph)

    @pytest.mark.parametrize("compression", [None, "zlib"])
    def test_opacity_is_dropped(self, tmp_path: Path, grey16: NDArray[np.uint16], compression: str | None) -> None:
        both = np.stack([grey16, 4000 - grey16], axis=-1)
        path = saved(
            tmp_path,
            both,
            photometric="minisblack",
            planarconfig="contig",
            extrasamples=["unassalpha"],
            compression=compression,
        )
        micrograph = read(path)
        np.testing.assert_array_equal(whole(micrograph), grey16)
        assert "colour-picture" not in codes(micrograph)

    def test_several_channels_are_refused(self, tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
        path = saved(tmp_path, np.stack([grey16] * 5, axis=-1), photometric="minisblack", planarconfig="contig")
        with pytest.raises(UnreadablePictureError, match=r"holds 5 values a pixel .*; save each channel"):
            read(path)

    def test_complex_numbers_are_refused(self, tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
        with pytest.raises(UnreadablePictureError, match="complex"):
            read(saved(tmp_path, grey16.astype(np.complex64)))


class TestPixelSize:
    @pytest.mark.parametrize(("number", "per_unit"), [(3, 1e7), (4, 1e6), (5, 1e3)], ids=["cm", "mm", "um"])
    def test_resolution_tags_with_their_unit(
        self, tmp_path: Path, grey16: NDArray[np.uint16], number: int, per_unit: float
    ) -> None:
        # pixels per unit along x, along y
        path = saved(tmp_path, grey16, resolution=(per_unit / 0.021, per_unit / 0.02), resolutionunit=number)
        micrograph = read(path)
        assert micrograph.pixel_size_nm == pytest.approx((0.02, 0.021), rel=1e-6)
        assert micrograph.pixel_size_source == "resolution tags"
        assert micrograph.cautions == ()

    @pytest.mark.parametrize("unit", ["nm", "pm", "angstrom", "A", "um", "µm", r"\u00B5m", "micron", "mm"])
    @pytest.mark.parametrize(
        "form", ["images=1\nunit={}\nloop=false\n", "made by hand\nUnit = {}\n", '{{"unit": "{}"}}']
    )
    def test_a_unit_in_the_description(self, tmp_path: Path, grey16: NDArray[np.uint16], unit: str, form: str) -> None:
        if form.startswith("{") and "\\" in unit:
            unit = "µm"  # what a JSON reader makes of the escape
        nm = {"nm": 1, "pm": 1e-3, "angstrom": 0.1, "A": 0.1, "mm": 1e6}.get(unit, 1e3)
        path = saved(
            tmp_path,
            grey16,
            resolution=(Rational.of(nm / 0.021), Rational.of(nm / 0.02)),
            resolutionunit=1,
            description=form.format(unit).encode(),
            metadata=None,
        )
        micrograph = read(path)
        assert micrograph.pixel_size_nm == pytest.approx((0.02, 0.021), rel=1e-6)
        assert micrograph.pixel_size_source == "resolution tags with the unit in the description"

    @pytest.mark.parametrize(
        ("unit", "nm"), [("nm", 1), ("pm", 1e-3), ("Å", 0.1), ("µm", 1e3), ("mm", 1e6), ("m", 1e9)]
    )
    def test_ome_xml(self, tmp_path: Path, grey16: NDArray[np.uint16], unit: str, nm: float) -> None:
        size = {
            "PhysicalSizeX": 0.021 / nm,
            "PhysicalSizeXUnit": unit,
            "PhysicalSizeY": 0.02 / nm,
            "PhysicalSizeYUnit": unit,
        }
        micrograph = read(saved(tmp_path, grey16, ome=True, metadata=size))
        assert micrograph.pixel_size_nm == pytest.approx((0.02, 0.021))
        assert micrograph.pixel_size_source == "OME-XML"
        assert micrograph.cautions == ()

    @pytest.mark.parametrize(
        ("options", "named"),
        [
            ({"resolution": (300, 300), "resolutionunit": 2}, "resolution tags: 300 dots per inch"),
            ({"resolution": (1, 1), "resolutionunit": 1}, "resolution tags: 1 x 1 without a unit"),
            ({"resolution": (50, 50), "resolutionunit": 1}, "0.02 x 0.02 without a unit"),
            ({"resolution": (38, 38), "resolutionunit": 3}, "beyond 0.0001 to 1000 nm"),
            ({"resolution": ((0, 1), (0, 1)), "resolutionunit": 3}, "0 x 0 cm"),
            ({"resolution": (50, 50), "resolutionunit": 1, "description": b"unit=inch"}, "50 dots per inch"),
            ({"resolution": (50, 50), "resolutionunit": 1, "description": b"unit=pixel"}, "without a unit"),
            (
                {"resolution": (50, 50), "resolutionunit": 1, "description": b"unit=eV"},
                "'eV', which is no unit of length",
            ),
        ],
        ids=["inch", "1 of nothing", "no unit", "screen in cm", "zero", "inch in text", "pixel in text", "energy"],
    )
    def test_what_cannot_be_believed_counts_as_not_stated(
        self, tmp_path: Path, grey16: NDArray[np.uint16], options: dict[str, Any], named: str
    ) -> None:
        micrograph = read(saved(tmp_path, grey16, metadata=None, **options))
        assert micrograph.pixel_size_nm is None
        assert micrograph.pixel_size_source == "not stated"
        assert codes(micrograph) == ["pixel-size-not-believed"]
        assert named in micrograph.cautions[0].text

    @pytest.mark.parametrize("unit", ["1/nm", "nm^-1", "mrad"])
    def test_a_diffraction_pattern_is_refused(self, tmp_path: Path, grey16: NDArray[np.uint16], unit: str) -> None:
        path = saved(tmp_path, grey16, resolution=(50, 50), resolutionunit=1, description=f"unit={unit}", metadata=None)
        for override in ({}, {"pixel_size_nm": 0.02}):
            with pytest.raises(UnreadablePictureError, match="diffraction pattern"):
                read(path, **override)

    def test_ome_xml_goes_before_tags_that_contradict_it(self, tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
        size = {f"PhysicalSize{axis}": 0.02 for axis in "XY"} | {f"PhysicalSize{axis}Unit": "nm" for axis in "XY"}
        path = saved(tmp_path, grey16, ome=True, metadata=size, resolution=(4e8, 4e8), resolutionunit=3)
        micrograph = read(path)
        assert micrograph.pixel_size_nm == pytest.approx((0.02, 0.02))
        assert codes(micrograph) == ["pixel-size-contradicted"]

    def test_damaged_ome_xml_leaves_the_pixels(self, tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
        path = saved(tmp_path, grey16, description='<?xml version="1.0"?><OME><Image>', metadata=None)
        micrograph = read(path)
        np.testing.assert_array_equal(whole(micrograph), grey16)
        assert codes(micrograph) == ["metadata-unreadable", "pixel-size-not-believed"]

    @pytest.mark.parametrize("text", ["{" * 5000, "{not json", "[1, 2]", '{"unit": 5}', "unit", "=", "\n" * 50])
    def test_odd_descriptions_do_no_harm(self, tmp_path: Path, grey16: NDArray[np.uint16], text: str) -> None:
        path = saved(tmp_path, grey16, description=text, metadata=None, resolution=(5e8, 5e8), resolutionunit=3)
        assert read(path).pixel_size_nm == pytest.approx((0.02, 0.02))


class Rational:
    """A fraction of two 32-bit numbers, as TIFF stores it; a plain number would be rounded more coarsely."""

    @staticmethod
    def of(value: float) -> tuple[int, int]:
        denominator = min(10**9, int(4e9 / max(value, 1)))
        return round(value * denominator), denominator


class TestStacks:
    STACK = np.random.default_rng(6).integers(0, 4000, (5, 48, 40), dtype=np.uint16)

    @pytest.mark.parametrize("compression", [None, "zlib"])
    def test_each_page_is_a_frame(self, tmp_path: Path, compression: str | None) -> None:
        path = saved(tmp_path, self.STACK, compression=compression, photometric="minisblack")
        for frame in range(5):
            micrograph = read(path, frame=frame)
            assert (micrograph.frame, micrograph.frame_count) == (frame, 5)
            np.testing.assert_array_equal(whole(micrograph), self.STACK[frame])

    def test_each_frame_of_an_ome_stack_has_the_pixel_size(self, tmp_path: Path) -> None:
        size: dict[str, Any] = {f"PhysicalSize{axis}": 0.2 for axis in "XY"}
        size |= {f"PhysicalSize{axis}Unit": "Å" for axis in "XY"} | {"axes": "TYX"}
        path = saved(tmp_path, self.STACK, ome=True, metadata=size)
        assert [read(path, frame=f).pixel_size_nm for f in range(5)] == [pytest.approx((0.02, 0.02))] * 5

    @pytest.mark.parametrize("byteorder", ["<", ">"])
    def test_frames_behind_a_single_page(self, tmp_path: Path, byteorder: str) -> None:
        # how large stacks are written in open practice: one page, the text says how many pictures follow
        path = tmp_path / "picture.tif"
        text = b"images=5\nframes=5\nunit=nm\n"
        with tifffile.TiffWriter(path, byteorder=byteorder) as writer:  # type: ignore[arg-type]
            writer.write(self.STACK[0], description=text, metadata=None, resolution=(50, 50), resolutionunit=1)
        with path.open("ab") as file, tifffile.TiffFile(path) as tif:
            assert tif.pages[0].dataoffsets[0] + self.STACK[0].nbytes == path.stat().st_size
            file.write(self.STACK[1:].astype(f"{byteorder}u2").tobytes())
        for frame in range(5):
            micrograph = read(path, frame=frame)
            assert micrograph.frame_count == 5
            assert micrograph.pixel_size_nm == pytest.approx((0.02, 0.02))
            np.testing.assert_array_equal(whole(micrograph), self.STACK[frame])

    def test_a_false_count_of_frames_is_not_believed(self, tmp_path: Path) -> None:
        micrograph = read(saved(tmp_path, self.STACK[0], description="images=5\n", metadata=None))
        assert micrograph.frame_count == 1

    def test_thumbnails_are_no_frames(self, tmp_path: Path) -> None:
        path = tmp_path / "picture.tif"
        with tifffile.TiffWriter(path) as writer:
            writer.write(self.STACK[0, :24, :20], subfiletype=1)
            writer.write(self.STACK[0])
            writer.write(self.STACK[1, :24, :20], subfiletype=1)
            writer.write(self.STACK[1])
        micrographs = [read(path, frame=frame) for frame in (0, 1)]
        assert [m.frame_count for m in micrographs] == [2, 2]
        for m, expected in zip(micrographs, self.STACK, strict=False):
            np.testing.assert_array_equal(whole(m), expected)

    @pytest.mark.parametrize("frame", [5, -1, 10**12])
    def test_a_frame_that_is_not_there(self, tmp_path: Path, frame: int) -> None:
        path = saved(tmp_path, self.STACK, photometric="minisblack")
        with pytest.raises(SettingsError, match=rf"got {frame}; .*picture.tif holds frames 0 to 4"):
            read(path, frame=frame)

    def test_a_frame_is_a_whole_number(self, tmp_path: Path) -> None:
        with pytest.raises(SettingsError, match=r"frame must be a whole number, got 1\.5"):
            read(saved(tmp_path, self.STACK, photometric="minisblack"), frame=1.5)  # type: ignore[arg-type]


def bytes_read() -> int:
    """Return how many bytes this process has asked the system to read (mapped pages are not counted)."""
    counts = Path("/proc/self/io").read_text(encoding="ascii")
    return int(dict(line.split(": ") for line in counts.splitlines())["rchar"])


class TestLargePictures:
    """16k x 16k pixels of 16 bits are 512 MB; a region of 64 x 64 must not cost them."""

    SIDE = 16384

    def test_plain_pixels_are_mapped(self, tmp_path: Path) -> None:
        path = saved(tmp_path, None, shape=(self.SIDE, self.SIDE), dtype=np.uint16)
        written = tifffile.memmap(path, mode="r+")
        written[8000:8064, 9000:9064] = 7
        del written
        tracemalloc.start()
        part = read(path).crop(slice(8000, 8064), slice(9000, 9064))
        assert (np.array(part) == 7).all()
        assert tracemalloc.get_traced_memory()[1] < 2e6
        tracemalloc.stop()

    @pytest.mark.skipif(not Path("/proc/self/io").exists(), reason="the system does not count the bytes read")
    def test_of_compressed_tiles_only_those_touched_are_read(self, tmp_path: Path) -> None:
        tiles = np.random.default_rng(8).integers(0, 4, (2, 256, 256), dtype=np.uint16)
        packed = [zlib.compress(tile.tobytes(), 1) for tile in tiles]
        across = self.SIDE // 256
        # only tile (31, 35) is of the second kind
        content = (packed[int(i == 31 * across + 35)] for i in range(across**2))
        path = saved(
            tmp_path,
            content,  # type: ignore[arg-type]
            shape=(self.SIDE, self.SIDE),
            dtype=np.uint16,
            compression="zlib",
            tile=(256, 256),
            maxworkers=1,
        )
        assert path.stat().st_size > 60e6
        tracemalloc.start()
        before = bytes_read()
        micrograph = read(path)
        part = micrograph.crop(slice(31 * 256, 31 * 256 + 64), slice(35 * 256, 35 * 256 + 64))
        assert bytes_read() - before < 500_000
        assert tracemalloc.get_traced_memory()[1] < 2e6
        tracemalloc.stop()
        np.testing.assert_array_equal(part, tiles[1, :64, :64])
        before = bytes_read()
        micrograph.crop(slice(31 * 256 + 9, 31 * 256 + 73), slice(35 * 256, 35 * 256 + 64))
        assert bytes_read() - before < 10_000  # the tile was kept

    @pytest.mark.skipif(not Path("/proc/self/io").exists(), reason="the system does not count the bytes read")
    def test_of_a_compressed_stack_only_one_frame_is_read(self, tmp_path: Path) -> None:
        noise = np.random.default_rng(9).integers(0, 65536, (30, 256, 256), dtype=np.uint16)
        path = saved(tmp_path, noise, compression="zlib", photometric="minisblack")
        before = bytes_read()
        np.testing.assert_array_equal(whole(read(path, frame=17)), noise[17])
        assert bytes_read() - before < path.stat().st_size / 10


class TestHostileFiles:
    def test_cut_off_pixels(self, tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
        path = saved(tmp_path, grey16)
        content = path.read_bytes()
        path.write_bytes(content[:-1])
        with pytest.raises(UnreadablePictureError, match=rf"cut off after {len(content) - 1} of {len(content)} bytes"):
            read(path)

    def test_cut_off_tiles(self, tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
        path = saved(tmp_path, grey16, compression="zlib", tile=(16, 16))
        path.write_bytes(path.read_bytes()[:-1])
        with pytest.raises(UnreadablePictureError, match="cut off after"):
            read(path)

    def test_damage_inside_a_tile_is_found_when_it_is_read(self, tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
        path = saved(tmp_path, grey16, compression="zlib", tile=(16, 16))
        content = bytearray(path.read_bytes())
        content[-40:-20] = bytes(20)
        path.write_bytes(content)
        micrograph = read(path)
        np.testing.assert_array_equal(micrograph.crop(slice(0, 16), slice(0, 40)), grey16[:16])
        with pytest.raises(UnreadablePictureError, match=r"picture\.tif: is damaged .*; copy it again"):
            whole(micrograph)

    def test_a_file_that_vanishes_says_so(self, tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
        path = saved(tmp_path, grey16, compression="zlib", tile=(16, 16))
        micrograph = read(path)
        path.unlink()
        with pytest.raises(UnreadablePictureError, match="No such file"):
            whole(micrograph)

    def test_few_bytes_that_claim_a_huge_strip(self, tmp_path: Path) -> None:
        strip = zlib.compress(bytes(1_000_000), 9)
        path = saved(
            tmp_path,
            iter([strip]),  # type: ignore[arg-type]
            shape=(40_000, 40_000),
            dtype=np.uint16,
            compression="zlib",
            rowsperstrip=40_000,
        )
        with pytest.raises(UnreadablePictureError, match="claims 3200 MB of picture"):
            read(path)

    def test_a_strip_that_unpacks_to_more_than_it_should(self, tmp_path: Path) -> None:
        strip = zlib.compress(bytes(50_000_000), 9)
        path = saved(
            tmp_path,
            iter([strip]),  # type: ignore[arg-type]
            shape=(48, 40),
            dtype=np.uint16,
            compression="zlib",
            rowsperstrip=48,
        )
        with pytest.raises(UnreadablePictureError, match="is damaged"):
            whole(read(path))

    def test_a_jpeg_part_that_claims_more_than_the_picture(self, tmp_path: Path) -> None:
        jpeg = bytearray(imagecodecs.jpeg8_encode(np.zeros((48, 48), np.uint8)))
        size = jpeg.find(b"\xff\xc0") + 5
        jpeg[size : size + 4] = struct.pack(">HH", 65_000, 65_000)
        path = saved(
            tmp_path,
            iter([bytes(jpeg)]),  # type: ignore[arg-type]
            shape=(48, 48),
            dtype=np.uint8,
            compression="jpeg",
            rowsperstrip=48,
        )
        with pytest.raises(UnreadablePictureError, match="claims 65000 x 65000 pixels"):
            whole(read(path))

    @pytest.mark.parametrize("returns_to", [0, 20, 120, 149])
    def test_pages_that_go_round_in_a_circle(self, tmp_path: Path, returns_to: int) -> None:
        entry = 8 + 150 * 18
        pages = b"".join(
            struct.pack("<HHHIII", 1, 256, 3, 1, 48, 8 + 18 * (i + 1 if i < 149 else returns_to)) for i in range(150)
        )
        path = tmp_path / "circle.tif"
        path.write_bytes(b"II*\0" + struct.pack("<I", 8) + pages)
        assert path.stat().st_size == entry
        with pytest.raises(UnreadablePictureError, match="circle"):
            read(path)

    def test_a_file_without_pages(self, tmp_path: Path) -> None:
        path = tmp_path / "empty.tif"
        path.write_bytes(b"II*\0\0\0\0\0")
        with pytest.raises(UnreadablePictureError, match=r"holds no picture|is damaged"):
            read(path)

    def test_an_unknown_compression_is_named(self, tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
        path = saved(tmp_path, (grey16 >> 4).astype(np.uint8), compression="png")
        with pytest.raises(UnreadablePictureError, match="is compressed by PNG, which is not read; save it without"):
            read(path)
