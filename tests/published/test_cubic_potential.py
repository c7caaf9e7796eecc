"""The Hamiltonian of Henon & Heiles 1964 (Astronomical Journal 69, 73).

H = (px^2 + py^2 + x^2 + y^2) / 2 + x^2 y - y^3 / 3. Motion is regular at E = 1/12, mixed at 1/8,
and may escape above 1/6. The paper's statements, from memory.
"""

from __future__ import annotations

import numpy as np
import pytest

import nipc

SOURCE = "Henon & Heiles 1964, AJ 69, 73 (from memory)"
MOTION = """\
import numpy as np

def rates(t, s, xi, parameters):
    x, y = s[:, 0], s[:, 1]
    forces = [-x - 2 * x * y + xi[:, 0], -y - x**2 + y**2 + xi[:, 1]]
    return np.stack([s[:, 2], s[:, 3], *forces], axis=1)
"""
STUDY = """\
title = "cubic potential, weakly forced"
tolerance = 0.1
[propagator]
adapter = "ode"
rhs = "motion:rates"
batch = true
method = "rk4"
step = 0.1
[clock]
end = 100.0
outputs = 41
period = 6.2832
[[state]]
name = "x"
mean = X
std = 1e-6
[[state]]
name = "y"
mean = Y
std = 1e-6
[[state]]
name = "vx"
mean = VX
[[state]]
name = "vy"
[[noise]]
name = "f_x"
intensity = 1e-7
[[noise]]
name = "f_y"
intensity = 1e-7
[[quantity]]
name = "x"
[[quantity]]
name = "y"
[chain]
arcs = 40
[ensemble]
members = 2000
[check]
runs = 4
"""


def force(x: float, y: float) -> np.ndarray:
    return np.array([-x - 2 * x * y, -y - x**2 + y**2])


def energy(s: np.ndarray) -> np.ndarray:
    x, y, vx, vy = np.moveaxis(s, -1, 0)
    return 0.5 * (vx**2 + vy**2 + x**2 + y**2) + x**2 * y - y**3 / 3


def moved(s: np.ndarray, time: float, step: float = 0.02) -> np.ndarray:
    """Leapfrog of fourth order (Yoshida 1990), rows of (x, y, vx, vy)."""
    w = 1.0 / (2.0 - 2.0 ** (1.0 / 3.0))
    s = s.copy()
    with np.errstate(over="ignore", invalid="ignore"):
        for _ in range(round(time / step)):
            for part in (w, 1.0 - 2.0 * w, w):
                h = part * step
                s[:, :2] += 0.5 * h * s[:, 2:]
                s[:, 2:] += h * np.moveaxis(force(s[:, 0], s[:, 1]), 0, -1)
                s[:, :2] += 0.5 * h * s[:, 2:]
    return s


def test_the_way_out_is_at_one_sixth(published):
    """Saddles at (0, 1) and (+-sqrt(3)/2, -1/2): no force there, and E = 1/6."""
    saddles = np.array([[0.0, 1.0], [np.sqrt(0.75), -0.5], [-np.sqrt(0.75), -0.5]])
    assert np.abs(force(*saddles.T)).max() < 1e-15
    heights = energy(np.hstack([saddles, np.zeros((3, 2))]))
    published("energy of the three saddles", heights, 1 / 6, source=SOURCE, rel=1e-12)
    # starts at the origin of all directions: none leaves below, many leave well above
    angle = np.linspace(0, 2 * np.pi, 200, endpoint=False)
    for e, share in ((0.16, (0.0, 0.0)), (0.25, (0.5, 1.0))):
        v = np.sqrt(2 * e)
        start = np.stack([0 * angle, 0 * angle, v * np.cos(angle), v * np.sin(angle)], axis=1)
        far = np.hypot(*np.nan_to_num(moved(start, 150.0, 0.05), nan=99.0)[:, :2].T) > 2.0
        assert share[0] <= far.mean() <= share[1]


@pytest.mark.slow
def test_spread_is_bounded_on_the_regular_orbit_and_grows_fast_on_the_chaotic_one(
    tmp_path, published
):
    """By E = 1/12 and E = 1/8. A regular spread grows at most in proportion to time."""
    grown = {}
    for name, e, y in (("regular", 1 / 12, 0.1), ("mixed", 1 / 8, -0.2)):
        vx = float(np.sqrt(2 * (e - 0.5 * y**2 + y**3 / 3)))
        text = STUDY.replace("mean = X", "mean = 0.0").replace("mean = Y", f"mean = {y}")
        text = text.replace("mean = VX", f"mean = {vx!r}")
        folder = tmp_path / name
        folder.mkdir()
        (folder / "motion.py").write_text(MOTION)
        (folder / "study.toml").write_text(text)
        data = nipc.run(nipc.load_study(folder / "study.toml"), backend="inline").dataset
        spread = np.sqrt((data["std"].values ** 2).sum(axis=0))
        grown[name] = spread[-8:].max() / spread[:8].max()
        published(
            f"energy of the {name} start", energy(np.array([0.0, y, vx, 0.0])), e,
            source=SOURCE, rel=1e-12,
        )  # fmt: skip
    # with noise, sqrt(t) times what shear makes of it: t^1.5 over a factor five is 11
    assert grown["regular"] < 15.0
    assert grown["mixed"] > 100.0
