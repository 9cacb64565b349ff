"""Files: pictures as TIFF with their pixel size, truth as JSON beside them."""

import json
import uuid
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import tifffile

STATEMENT = "Simulated picture. Not a measurement of a real specimen."


def write_ome_tiff(
    path: Path, picture: np.ndarray, pixel_nm: tuple[float, float], time_step_s: float | None = None
) -> None:
    """Write a picture or a stack of frames with its pixel size (row, column) in OME-XML, losslessly compressed."""
    metadata: dict[str, Any] = {
        "axes": "YX" if picture.ndim == 2 else "TYX",
        "Name": path.name.split(".")[0],
        "Description": STATEMENT,
        "PhysicalSizeX": pixel_nm[1],
        "PhysicalSizeXUnit": "nm",
        "PhysicalSizeY": pixel_nm[0],
        "PhysicalSizeYUnit": "nm",
        "UUID": f"urn:uuid:{uuid.uuid5(uuid.NAMESPACE_URL, path.name)}",
    }
    if time_step_s is not None:
        metadata |= {"TimeIncrement": time_step_s, "TimeIncrementUnit": "s"}
    tifffile.imwrite(path, picture, ome=True, metadata=metadata, photometric="minisblack", compression="zlib",
                     compressionargs={"level": 9}, predictor=True, rowsperstrip=picture.shape[-2])  # fmt: skip


def write_tiff(path: Path, picture: np.ndarray, pixel_nm: tuple[float, float]) -> None:
    """Write a picture with its pixel size (row, column) in the resolution tags, losslessly compressed."""
    tifffile.imwrite(path, picture, resolution=(1e7 / pixel_nm[1], 1e7 / pixel_nm[0]), resolutionunit="CENTIMETER",
                     description=STATEMENT, metadata=None, software=False, photometric="minisblack", compression="zlib",
                     compressionargs={"level": 9}, predictor=True, rowsperstrip=picture.shape[0])  # fmt: skip


def write_truth(path: Path, script: str, seed: int, truth: dict[str, Any]) -> None:
    """Write what is true of a picture, one reflection a line."""
    head = {
        "statement": STATEMENT,
        "made_by": {
            "script": script,
            "seed": seed,
            "programs": {name: version(name) for name in ("ase", "abtem", "numpy", "scipy", "tifffile")},
            "licence": "BSD-3-Clause",
        },
    }
    path.write_text(_readable({**head, **truth}) + "\n", encoding="utf-8")


def _readable(value: Any, depth: int = 0) -> str:
    """JSON with short things on one line."""
    flat = json.dumps(value, ensure_ascii=False)
    if len(flat) + depth <= 116 or not isinstance(value, dict | list) or _is_reflection(value):
        return flat
    inner = "\n" + " " * (depth + 1)
    if isinstance(value, dict):
        parts = [f"{json.dumps(key, ensure_ascii=False)}: {_readable(item, depth + 1)}" for key, item in value.items()]
        return "{" + inner + ("," + inner).join(parts) + "\n" + " " * depth + "}"
    if all(isinstance(item, list) and not any(isinstance(x, list | dict) for x in item) for item in value):
        return flat
    return "[" + inner + ("," + inner).join(_readable(item, depth + 1) for item in value) + "\n" + " " * depth + "]"


def _is_reflection(value: Any) -> bool:
    return isinstance(value, dict) and "hkl" in value
