"""The helpers of this folder, for all its tests."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))

import subprocess

import pytest

PROGRAMS = Path(__file__).parent / "programs"


@pytest.fixture(scope="session")
def compiled(tmp_path_factory):
    """compiled(source, *options) -> the program or library made of a file in `programs`."""
    folder = tmp_path_factory.mktemp("compiled")
    known = {}

    def make(source, *options):
        key = (source, *options)
        if key not in known:
            compiler = "gfortran" if source.endswith(".f90") else "cc"
            target = (
                folder / f"{Path(source).stem}{len(known)}{'.so' if '-shared' in options else ''}"
            )
            words = [compiler, "-O2", "-J", folder] if compiler == "gfortran" else ["cc", "-O2"]
            command = [*words, "-o", target, PROGRAMS / source, *options, "-lm"]
            subprocess.run([str(w) for w in command], check=True, cwd=PROGRAMS)
            known[key] = target
        return known[key]

    return make
