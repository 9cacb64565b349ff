from __future__ import annotations

import json
import sys
import tracemalloc
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from fringespan.exceptions import SettingsError, UnreadablePictureError
from fringespan.reading import read

zarr = pytest.importorskip("zarr")

NM = {"unit": "nanometer"}


def saved(
    folder: Path,
    array: NDArray[np.generic],
    *,
    scale: tuple[float, ...] | None = None,
    unit: dict[str, str] | tuple[dict[str, str], dict[str, str]] = NM,
    version: str = "0.5",
    chunks: tuple[int, ...] | None = None,
    **more: Any,
) -> Path:
    """Write one level as the OME-Zarr specification has it: 0.4 on Zarr 2, 0.5 on Zarr 3."""
    path = folder / "picture.ome.zarr"
    row_unit, column_unit = (unit, unit) if isinstance(unit, dict) else unit
    names = "tczyx"[-array.ndim :]
    axes = [{"name": n, "type": "space" if n in "zyx" else "other"} for n in names[:-2]]
    axes += [{"name": "y", "type": "space"} | row_unit, {"name": "x", "type": "space"} | column_unit]
    level: dict[str, Any] = {"path": "0"}
    if scale is not None:
        level["coordinateTransformations"] = [{"type": "scale", "scale": [1.0] * (array.ndim - 2) + list(scale)}]
    multiscales = [{"axes": axes, "datasets": [level], **more}]
    group = zarr.open_group(str(path), mode="w", zarr_format=3 if version == "0.5" else 2)
    stored = group.create_array("0", shape=array.shape, dtype=array.dtype, chunks=chunks or array.shape)
    stored[...] = array
    if version == "0.5":
        group.attrs["ome"] = {"version": "0.5", "multiscales": multiscales}
    else:
        group.attrs["multiscales"] = multiscales
    return path


@pytest.mark.parametrize("version", ["0.4", "0.5"])
@pytest.mark.parametrize("dtype", ["u1", "u2", "i4", "f4"])
def test_pixels_and_pixel_size(tmp_path: Path, grey16: NDArray[np.uint16], version: str, dtype: str) -> None:
    array = (grey16 % 200).astype(dtype)
    micrograph = read(saved(tmp_path, array, scale=(0.02, 0.021), version=version, chunks=(16, 16)))
    assert micrograph.pixel_size_nm == pytest.approx((0.02, 0.021))
    assert micrograph.pixel_size_source == "OME-Zarr"
    assert micrograph.cautions == ()
    np.testing.assert_array_equal(micrograph.crop(slice(10, 40), slice(3, 33)), array[10:40, 3:33])
    np.testing.assert_array_equal(micrograph.crop(slice(None), slice(None)), array)


@pytest.mark.parametrize(
    ("unit", "nm"), [("picometer", 1e-3), ("angstrom", 0.1), ("nanometer", 1), ("micrometer", 1e3), ("meter", 1e9)]
)
def test_units(tmp_path: Path, grey16: NDArray[np.uint16], unit: str, nm: float) -> None:
    micrograph = read(saved(tmp_path, grey16, scale=(0.02 / nm, 0.02 / nm), unit={"unit": unit}))
    assert micrograph.pixel_size_nm == pytest.approx((0.02, 0.02))


def test_a_unit_for_each_axis(tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
    path = saved(tmp_path, grey16, scale=(0.2, 21), unit=({"unit": "angstrom"}, {"unit": "picometer"}))
    assert read(path).pixel_size_nm == pytest.approx((0.02, 0.021))


def test_a_scale_common_to_all_levels_counts_as_well(tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
    common = [{"type": "scale", "scale": [0.02, 0.03]}]
    path = saved(tmp_path, grey16, scale=(2, 1), coordinateTransformations=common)
    assert read(path).pixel_size_nm == pytest.approx((0.04, 0.03))


@pytest.mark.parametrize(
    ("scale", "unit", "code"),
    [
        (None, NM, "pixel-size-not-stated"),
        ((1, 1), {}, "pixel-size-not-believed"),
        ((0.02, 0.02), {}, "pixel-size-not-believed"),
        ((0, 0), NM, "pixel-size-not-believed"),
        ((0.02, 0.02), (NM, {}), "pixel-size-not-believed"),
    ],
    ids=["no scale", "1 of nothing", "no unit", "zero", "one unit missing"],
)
def test_what_cannot_be_believed_counts_as_not_stated(
    tmp_path: Path, grey16: NDArray[np.uint16], scale: tuple[float, float] | None, unit: Any, code: str
) -> None:
    micrograph = read(saved(tmp_path, grey16, scale=scale, unit=unit))
    assert micrograph.pixel_size_nm is None
    assert [c.code for c in micrograph.cautions] == [code]


def test_a_diffraction_pattern_is_refused(tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
    with pytest.raises(UnreadablePictureError, match="diffraction pattern"):
        read(saved(tmp_path, grey16, scale=(0.02, 0.02), unit={"unit": "1/nm"}))


def test_all_axes_but_the_last_two_are_frames(tmp_path: Path) -> None:
    stack = np.arange(2 * 3 * 30 * 26, dtype=np.uint16).reshape(2, 3, 30, 26)
    path = saved(tmp_path, stack, chunks=(1, 2, 16, 16))
    for frame in range(6):
        micrograph = read(path, frame=frame)
        assert micrograph.frame_count == 6
        np.testing.assert_array_equal(micrograph.crop(slice(None), slice(None)), stack[frame // 3, frame % 3])
    with pytest.raises(SettingsError, match="holds frames 0 to 5"):
        read(path, frame=6)


def test_a_bare_array_has_no_pixel_size(tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
    zarr.save_array(str(tmp_path / "a.zarr"), grey16)
    micrograph = read(tmp_path / "a.zarr")
    np.testing.assert_array_equal(micrograph.crop(slice(None), slice(None)), grey16)
    assert [c.code for c in micrograph.cautions] == ["pixel-size-not-stated"]


def test_the_first_of_several_images(tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
    outer = zarr.open_group(str(tmp_path / "outer"), mode="w")
    outer.attrs["ome"] = {"version": "0.5", "bioformats2raw.layout": 3}
    saved(tmp_path, grey16, scale=(0.02, 0.02)).rename(tmp_path / "outer" / "0")
    assert read(tmp_path / "outer").pixel_size_nm == pytest.approx((0.02, 0.02))


def test_a_large_picture_is_read_in_part(tmp_path: Path) -> None:
    path = tmp_path / "large.zarr"
    large = zarr.create_array(str(path), shape=(16384, 16384), chunks=(256, 256), dtype="u2")
    large[8000:8064, 9000:9064] = 7
    tracemalloc.start()
    part = read(path).crop(slice(8000, 8064), slice(9000, 9064))
    assert (part == 7).all()
    assert tracemalloc.get_traced_memory()[1] < 5e6
    tracemalloc.stop()


def test_without_zarr_the_line_to_type_is_given(
    tmp_path: Path, grey16: NDArray[np.uint16], monkeypatch: pytest.MonkeyPatch
) -> None:
    path = saved(tmp_path, grey16)
    monkeypatch.setitem(sys.modules, "zarr", None)
    with pytest.raises(UnreadablePictureError, match=r'needs the package zarr.*pip install "fringespan\[zarr\]"'):
        read(path)


@pytest.mark.parametrize(
    "attributes",
    [
        {},
        {"ome": 5},
        {"ome": {"multiscales": []}},
        {"ome": {"multiscales": [5]}},
        {"ome": {"multiscales": [{}]}},
        {"ome": {"multiscales": [{"datasets": [{"path": 5}]}]}},
        {"ome": {"multiscales": [{"datasets": [{"path": "missing"}]}]}},
        {"ome": {"multiscales": [{"datasets": [{"path": "../secret"}]}]}},
        {"ome": {"multiscales": [{"datasets": [{"path": "/secret"}]}]}},
    ],
    ids=json.dumps,
)
def test_damaged_or_hostile_descriptions_are_refused(
    tmp_path: Path, grey16: NDArray[np.uint16], attributes: dict[str, Any]
) -> None:
    zarr.save_array(str(tmp_path / "secret"), grey16)
    group = zarr.open_group(str(tmp_path / "a.zarr"), mode="w")
    group.attrs.update(attributes)
    with pytest.raises(UnreadablePictureError, match=r"a\.zarr"):
        read(tmp_path / "a.zarr")


@pytest.mark.parametrize(
    "broken",
    [{"axes": 5}, {"axes": ["y", "x"]}, {"axes": [5, None]}, {"coordinateTransformations": [5]}],
    ids=json.dumps,
)
def test_odd_entries_about_the_scale_leave_the_pixels(
    tmp_path: Path, grey16: NDArray[np.uint16], broken: dict[str, Any]
) -> None:
    micrograph = read(saved(tmp_path, grey16, scale=(0.02, 0.02), **broken))
    np.testing.assert_array_equal(micrograph.crop(slice(None), slice(None)), grey16)


def test_a_damaged_chunk_is_found_when_it_is_read(tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
    path = saved(tmp_path, grey16, chunks=(16, 40))
    (path / "0" / "c" / "2" / "0").write_bytes(b"no chunk at all")
    micrograph = read(path)
    np.testing.assert_array_equal(micrograph.crop(slice(0, 32), slice(0, 40)), grey16[:32])
    with pytest.raises(UnreadablePictureError, match="is damaged"):
        micrograph.crop(slice(0, 48), slice(0, 40))


def test_chunks_larger_than_any_memory_are_refused(tmp_path: Path) -> None:
    zarr.create_array(str(tmp_path / "a.zarr"), shape=(10**6, 10**6), chunks=(10**5, 10**5), dtype="u2")
    with pytest.raises(UnreadablePictureError, match="are larger than 2 GB"):
        read(tmp_path / "a.zarr")
