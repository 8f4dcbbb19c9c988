"""The research library confseq, built in a venv of its own: an independent yardstick for bounds.

Its package does not build as published on Python 3.11 (it pins an old pybind11), hence the recipe: numpy below 2, newest
pybind11, no build isolation, a C++ compiler and Boost's math headers. The venv `.venv-confseq` is kept between runs.
"""

from __future__ import annotations

import fcntl
import json
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path
from typing import Any

ROOT = Path(__file__).parents[2]
VENV = ROOT / ".venv-confseq"
TOOLS = ["setuptools", "wheel", "scikit-build", "cmake", "ninja", "pybind11"]
LIBRARIES = ["numpy<2", "pandas<3", "scipy", "matplotlib", "multiprocess", "pytest"]


def missing() -> str | None:
    """Return what is missing to build it, or None."""
    if (VENV / "built").exists():
        return None
    if shutil.which("g++") is None:
        return "g++ is not installed (apt-get install g++ libboost-math-dev)"
    headers = Path("/usr/include/boost/math/special_functions.hpp")
    return None if headers.exists() else "Boost's headers are not installed (apt-get install libboost-math-dev)"


def python() -> Path:
    """Build the venv once and return its interpreter."""
    found = VENV / "bin" / "python"
    with (Path(tempfile.gettempdir()) / "venv-confseq.lock").open("w") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        if not (VENV / "built").exists():
            problem = missing()
            assert problem is None, problem
            subprocess.run([sys.executable, "-m", "venv", "--clear", VENV], check=True)
            pip = [found, "-m", "pip", "install", "-q", "--disable-pip-version-check"]
            subprocess.run([*pip, *TOOLS, *LIBRARIES], check=True)
            subprocess.run([*pip, "--no-build-isolation", "confseq==0.0.11"], check=True)
            (VENV / "built").touch()
    return found


def ask(code: str, argument: Any = None) -> Any:
    """Run `code` there; it finds the JSON `argument` under that name and leaves its answer in `answer`."""
    whole = f"import json, sys\nargument = json.load(sys.stdin)\n{code}\njson.dump(answer, sys.stdout)"
    done = subprocess.run(
        [python(), "-c", whole], input=json.dumps(argument), stdout=subprocess.PIPE, text=True, check=True
    )
    return json.loads(done.stdout)
