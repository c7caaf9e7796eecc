"""The helpers of this folder for all its tests, and programs compiled for them."""

import subprocess
import sys
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).parent))

PROGRAMS = Path(__file__).parent / "programs"


@pytest.fixture(scope="session")
def compiled(tmp_path_factory):
    """compiled(source, *options) -> the program or library made of a file in `programs`."""
    folder = tmp_path_factory.mktemp("compiled")
    known = {}

    def make(source, *options, before=()):
        key = (source, *options)
        if key not in known:
            compiler = "gfortran" if source.endswith(".f90") else "cc"
            ending = ".so" if "-shared" in options else ""
            target = folder / f"{Path(source).stem}{len(known)}{ending}"
            words = [compiler, "-O2", *(["-J", folder] if compiler == "gfortran" else [])]
            first = [before] if before else []
            command = [*words, "-o", target, *first, PROGRAMS / source, *options, "-lm"]
            subprocess.run([str(w) for w in command], check=True, cwd=folder)
            known[key] = target
        return known[key]

    return make
