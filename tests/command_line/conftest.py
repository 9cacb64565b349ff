"""The command line is called in this process; a few tests start it as a user would."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Callable

import numpy as np
import pytest
import tifffile
from click.testing import CliRunner, Result

from fringespan.command_line import program


@pytest.fixture
def run(monkeypatch) -> Callable[..., Result]:
    """Return a function that calls the command line with these arguments."""
    monkeypatch.setenv("COLUMNS", "100")

    def call(*arguments: object) -> Result:
        result = CliRunner().invoke(program, [str(a) for a in arguments], prog_name="fringespan")
        # anything but the program's own ending would be a traceback
        assert result.exception is None or isinstance(result.exception, SystemExit), result.exception
        return result

    return call


@pytest.fixture
def start() -> Callable[..., subprocess.CompletedProcess[str]]:
    """Return a function that starts the command line in a process of its own."""

    def call(*arguments: object, **options: object) -> subprocess.CompletedProcess[str]:
        environment = os.environ | {"COLUMNS": "100"} | options.pop("env", {})
        command = [sys.executable, "-m", "fringespan", *map(str, arguments)]
        return subprocess.run(command, capture_output=True, text=True, check=False, env=environment, **options)

    return call


@pytest.fixture(scope="session")
def picture(tmp_path_factory):
    """Return the path of a picture of two sets of fringes, 8 and 11 px apart, in noise."""
    row, column = np.indices((256, 240))
    values = 200 + 20 * np.cos(2 * np.pi * column / 8) + 15 * np.cos(2 * np.pi * (0.06 * row + 0.068 * column))
    values += np.random.default_rng(5).normal(0, 10, values.shape)
    path = tmp_path_factory.mktemp("pictures") / "particle.tif"
    tifffile.imwrite(path, values.astype(np.float32))
    return path
