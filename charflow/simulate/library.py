"""Finding ngspice: the shared library, the executable, and a private place for both to run in.

ngspice reads ``.spiceinit`` from the working folder and the home folder and executes what it says, so
it never sees the user's own folders.
"""

from __future__ import annotations

import atexit
import ctypes.util
import os
import shutil
import subprocess
import sys
import tempfile
from functools import lru_cache
from pathlib import Path

from charflow.errors import SimulatorError

_INSTALL = "Install it, for example: apt-get install ngspice libngspice0"


def find_library() -> str:
    """Return the file name of libngspice. Raises :class:`SimulatorError` where there is none."""
    named = os.environ.get("NGSPICE_LIBRARY_PATH")
    if named:
        if not Path(named).is_file():
            raise SimulatorError(
                f"NGSPICE_LIBRARY_PATH names {named!r}, which is not there", todo="Correct it or unset it."
            )
        return named
    found = ctypes.util.find_library("ngspice")
    if not found:
        raise SimulatorError("the ngspice library (libngspice) was not found", todo=_INSTALL)
    return found


def find_executable() -> str:
    """Return the path of the ngspice executable. Raises :class:`SimulatorError` where there is none."""
    named = os.environ.get("NGSPICE_EXECUTABLE")
    found = shutil.which(named or "ngspice")
    if not found:
        said = f"NGSPICE_EXECUTABLE names {named!r}, which" if named else "the ngspice executable"
        raise SimulatorError(f"{said} was not found", todo=_INSTALL)
    return found


@lru_cache(maxsize=1)
def library_version() -> int:
    """Return the major version of libngspice, asked in a process of its own: this one stays clean."""
    find_library()
    code = (
        "import sys\nfrom charflow.errors import CharflowError\n"
        "from charflow.simulate.session import Session\n"
        "try:\n    print('version', Session.here().version)\n"
        "except CharflowError as error:\n    sys.exit(error.message)\n"
    )
    try:
        done = subprocess.run(
            [sys.executable, "-c", code], capture_output=True, text=True, timeout=120, check=False
        )
    except (OSError, subprocess.TimeoutExpired) as error:
        raise SimulatorError(f"the ngspice library could not be tried: {error}") from None
    words = done.stdout.split()
    if done.returncode or words[-2:-1] != ["version"] or not words[-1].isdigit():
        reason = (done.stderr.strip().splitlines() or ["it said nothing"])[-1]
        raise SimulatorError(f"the ngspice library does not work: {reason}", todo=_INSTALL)
    return int(words[-1])


@lru_cache(maxsize=4)
def executable_version(executable: str) -> int:
    """Return the major version of the ngspice executable."""
    try:
        done = subprocess.run(
            [executable, "--version"],
            capture_output=True,
            text=True,
            timeout=30,
            check=False,
            env=environment(),
        )
    except (OSError, subprocess.TimeoutExpired) as error:
        raise SimulatorError(f"{executable} does not run: {error}", todo=_INSTALL) from None
    return version_in(done.stdout, executable)


def version_in(text: str, origin: str) -> int:
    """Return the major version that ngspice's banner ``text`` states."""
    for word in text.replace("**", " ").split():
        if word.startswith("ngspice-") and word[8:].split(".")[0].isdigit():
            return int(word[8:].split(".")[0])
    raise SimulatorError(f"{origin} does not tell its version", todo=_INSTALL)


@lru_cache(maxsize=1)
def private_folder() -> Path:
    """Return this process's empty folder, used as working and home folder of ngspice; removed at exit."""
    folder = Path(tempfile.mkdtemp(prefix="charflow-"))
    owner = os.getpid()

    def remove() -> None:
        if os.getpid() == owner:
            shutil.rmtree(folder, ignore_errors=True)

    atexit.register(remove)
    return folder


def environment() -> dict[str, str]:
    """Return the environment the ngspice executable gets: little, and a home that is empty."""
    keep = {
        name: os.environ[name] for name in ("PATH", "LD_LIBRARY_PATH", "SPICE_LIB_DIR") if name in os.environ
    }
    folder = str(private_folder())
    return {**keep, "HOME": folder, "LC_ALL": "C", "TMPDIR": folder, "OMP_NUM_THREADS": "1"}
