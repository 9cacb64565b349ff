#!/usr/bin/env python3
"""Run the tests: make an environment of their own, install fringespan into it, call pytest.

    python3 tests/run.py                            the quick tests
    python3 tests/run.py --slow                     also those that take minutes
    python3 tests/run.py --install-system-packages  install what the system lacks first (Debian and its relatives)
    python3 tests/run.py -- -k profile -x           anything after -- goes to pytest

Any Python from 3.11 on can run this file, also one that refuses to install packages outside a virtual environment: it
needs only the standard library. The environment is `.venv-test` beside the `tests` folder; delete it to begin afresh.
The exit status is pytest's.
"""

from __future__ import annotations

import argparse
import hashlib
import os
import shutil
import subprocess
import sys
import venv
from ctypes.util import find_library
from pathlib import Path

OLDEST_PYTHON = (3, 11)
CHECKOUT = Path(__file__).resolve().parent.parent
ENVIRONMENT = CHECKOUT / ".venv-test"
STAMP = ENVIRONMENT / "installed-for"

# what the tests need of the system, and how to see whether it is there; on other systems than Debian only the question
# is used, and its answer told
SYSTEM_PACKAGES = {
    f"python{sys.version_info.major}.{sys.version_info.minor}-venv": lambda: _has_module("ensurepip"),
}

VIEWER_PACKAGES = {
    **(
        {
            # the windows of the viewer are tested on a screen in memory, which Qt and OpenGL must find what they need for
            "xvfb": lambda: shutil.which("Xvfb") is not None,
            "xauth": lambda: shutil.which("xauth") is not None,
            **{
                package: lambda library=library: _has_library(library)
                for package, library in {
                    "libegl1": "EGL",
                    "libgl1": "GL",
                    "libdbus-1-3": "dbus-1",
                    "libfontconfig1": "fontconfig",
                    "libxkbcommon-x11-0": "xkbcommon-x11",
                    "libx11-xcb1": "X11-xcb",
                    "libxcb-cursor0": "xcb-cursor",
                    "libxcb-icccm4": "xcb-icccm",
                    "libxcb-keysyms1": "xcb-keysyms",
                    "libxcb-shape0": "xcb-shape",
                }.items()
            },
            "libgl1-mesa-dri": lambda: (
                any(Path("/usr/lib").rglob("swrast_dri.so")) or any(Path("/usr/lib").rglob("libgallium*.so"))
            ),
        }
        if sys.platform == "linux"
        else {}
    ),
}


def main() -> int:
    """Do what the head of this file says."""
    if sys.version_info < OLDEST_PYTHON:
        found = ".".join(map(str, sys.version_info[:2]))
        return _stop(f"Python {'.'.join(map(str, OLDEST_PYTHON))} or newer is needed, this is {found}")
    options, for_pytest = _arguments()
    wanted = {**SYSTEM_PACKAGES, **(VIEWER_PACKAGES if options.viewer else {})}
    missing = [package for package, is_there in wanted.items() if not is_there()]
    if missing:
        command = _install_command(missing)
        if command is None:
            return _stop(f"the system lacks {', '.join(missing)}; install it the way your system does")
        if not options.install_system_packages:
            return _stop(
                f"the system lacks {', '.join(missing)}. Install it with\n    {' '.join(command)}\n"
                "or let this do it: add --install-system-packages"
            )
        for step in (["update"], command[command.index("install") :]):
            done = subprocess.run([*command[: command.index("install")], *step], env=_quiet_debian(), check=False)
            if done.returncode:
                return _stop(f"apt-get {step[0]} failed with status {done.returncode}")
    try:
        python = _environment("test-viewer" if options.viewer else "test")
    except subprocess.CalledProcessError as failure:
        return _stop(f"the environment could not be made: {' '.join(map(str, failure.cmd))} failed")
    # the names of the markers are those of pyproject.toml
    selected = [] if options.slow else ["-m", "not slow"]
    # two processes share the work unless pytest is told otherwise
    spread = [] if any(a == "-n" or a.startswith("-n") for a in for_pytest) else ["-n", "2"]
    return subprocess.run(
        [python, "-m", "pytest", *spread, *selected, *for_pytest], cwd=CHECKOUT, check=False
    ).returncode


def _arguments() -> tuple[argparse.Namespace, list[str]]:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter, allow_abbrev=False
    )
    parser.add_argument("--slow", action="store_true", help="run the slow tests too")
    parser.add_argument(
        "--viewer", action="store_true", help="install napari with Qt and test the viewer too, on a screen in memory"
    )
    parser.add_argument(
        "--install-system-packages", action="store_true", help="install missing Debian packages (needs root or sudo)"
    )
    options, rest = parser.parse_known_args()
    return options, [argument for i, argument in enumerate(rest) if argument != "--" or "--" in rest[:i]]


def _environment(extra: str) -> Path:
    """Make the environment, or bring it up to date, and return its Python."""
    python = ENVIRONMENT / ("Scripts/python.exe" if os.name == "nt" else "bin/python")
    # the code itself is used in place; only these decide what must be installed
    wanted = hashlib.sha256((CHECKOUT / "pyproject.toml").read_bytes() + f"{sys.version} {extra}".encode()).hexdigest()
    if python.exists() and STAMP.exists() and STAMP.read_text() == wanted:
        return python
    print(f"Making {ENVIRONMENT} (once; takes a minute or two) ...", file=sys.stderr, flush=True)
    # the Python that made an environment may be another one, or gone
    venv.EnvBuilder(with_pip=True, clear=True).create(ENVIRONMENT)
    install = [python, "-m", "pip", "install", "--quiet", "--disable-pip-version-check", "--editable", f".[{extra}]"]
    subprocess.run(install, cwd=CHECKOUT, check=True)
    STAMP.write_text(wanted)
    return python


def _has_module(name: str) -> bool:
    # asked of a Python of its own: this one may have been changed by its surroundings
    return subprocess.run([sys.executable, "-c", f"import {name}"], capture_output=True, check=False).returncode == 0


def _has_library(name: str) -> bool:
    return find_library(name) is not None


def _install_command(packages: list[str]) -> list[str] | None:
    if shutil.which("apt-get") is None:
        return None
    is_root = hasattr(os, "geteuid") and os.geteuid() == 0
    return [*([] if is_root else ["sudo"]), "apt-get", "install", "--yes", *packages]


def _quiet_debian() -> dict[str, str]:
    return os.environ | {"DEBIAN_FRONTEND": "noninteractive"}


def _stop(reason: str) -> int:
    print(f"tests/run.py: {reason}", file=sys.stderr)
    return 2


if __name__ == "__main__":
    sys.exit(main())
