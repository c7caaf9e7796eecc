"""The Fortran and C routines that give xi(t) inside a program, against Python to 1e-12."""

import subprocess
from pathlib import Path

import numpy as np
import pytest

import nipc.adapters
from nipc.problem.noise import BASES, KarhunenLoeve, Legendre, NoiseModel, Source

GLUE = Path(nipc.adapters.__file__).parent / "glue"
START, END = 3.0, 9.0


@pytest.fixture(params=["fortran", "c"])
def program(request, compiled):
    if request.param == "c":
        return compiled("glue_c.c", "-std=c99", "-Wall", "-Wextra", "-Werror", f"-I{GLUE}")
    # the module must come before its user
    return compiled("glue_fortran.f90", "-std=f2008", before=GLUE / "forcing.f90")


def written(folder, basis, step):
    """A table of two sources, and the coefficients of a third.

    The eight-point polynomial errs by 1.1e-3 (w h)^8, here w h = 5.5 pi / 300: 1.3e-13.
    """
    rng = np.random.default_rng(7)
    model = NoiseModel(
        (Source("a", "", 2.0), Source("b", "", 0.5)),
        (Legendre(8), KarhunenLoeve(6)), START, END,
    )  # fmt: skip
    forcing = model.realise(rng.normal(size=(1, model.size)))
    grid = np.linspace(START, END, round((END - START) / step) + 1)
    rows = np.column_stack([grid, forcing.table(grid)[0]])
    np.savetxt(folder / "forcing.dat", rows, fmt="%.17e", header="t a b")
    white = NoiseModel((Source("c", "", 1.7),), (BASES[basis](6),), START, END)
    z = rng.normal(size=(1, 6))
    words = [basis, *(repr(float(w)) for w in (START, END, 1.7, *z[0]))]
    (folder / "coefficients.txt").write_text(" ".join(words) + "\n")
    times = np.concatenate([rng.uniform(START, END, 40), [START, END], grid[5:7]])
    np.savetxt(folder / "times.txt", times, fmt="%.17e")
    return np.column_stack([forcing.table(times)[0], white.realise(z).table(times)[0]])


@pytest.mark.parametrize("basis", sorted(BASES))
def test_values_agree_to_twelve_digits(basis, program, tmp_path):
    exact = written(tmp_path, basis, 0.02)
    done = subprocess.run([program], cwd=tmp_path, capture_output=True, text=True, check=True)
    found = np.array([line.split() for line in done.stdout.splitlines()], dtype=float)
    assert np.abs(exact).max() > 1.0
    np.testing.assert_allclose(found, exact, rtol=0, atol=1e-12 * np.abs(exact).max())


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("# t a b\n0 1 2\n1 2\n", "forcing.dat, line 3 is no row of t and a number"),
        ("0 1 2\n", "forcing.dat has fewer than two rows"),
        ("0 1 2\n1 1 2\n3 1 2\n", "forcing.dat has rows at uneven times"),
        ("0 1 2\n1 x 2\n", "forcing.dat, line 2 is no row"),
        (None, "forcing.dat cannot be opened"),
    ],
)
def test_a_table_that_is_none_is_told(text, said, program, tmp_path):
    written(tmp_path, "legendre", 0.05)
    (tmp_path / "forcing.dat").unlink()
    if text is not None:
        (tmp_path / "forcing.dat").write_text(text)
    done = subprocess.run([program], cwd=tmp_path, capture_output=True, text=True, check=False)
    assert done.returncode == 3
    assert said in done.stderr
