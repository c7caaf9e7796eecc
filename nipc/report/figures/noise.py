"""What a noise basis keeps of a path of the noise."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes

from nipc.problem.noise import NoiseBasis
from nipc.report.figures import frame
from nipc.report.numbers import number
from nipc.report.style import LIGHT, drawn

KICKS = 1500
NAMES = {
    "legendre": "Legendre",
    "karhunen-loeve": "Karhunen-Loève",
    "completed": "completed Karhunen-Loève",
}


@drawn
def noise_kept(basis: NoiseBasis, seed: int = 1, ax: Axes | None = None) -> Axes:
    """One path of the Wiener process on an arc, and sum_k Z_k F_k(u), what the basis keeps of it.

    Z_k are the integrals of the basis functions over the path's own increments. The legend gives
    the shares of the mean-square path and of the end value's variance that the basis loses.
    """
    ax = frame.new_axes(ax)
    u = np.linspace(0.0, 1.0, KICKS + 1)
    kicks = np.random.default_rng(seed).standard_normal(KICKS) / np.sqrt(KICKS)
    path = np.concatenate([[0.0], np.cumsum(kicks)])
    germ = basis.values(0.5 * (u[1:] + u[:-1])) @ kicks
    kept = germ @ basis.integrals(u)
    lost = 1.0 - basis.path_retained(), max(1.0 - basis.end_retained(), 0.0)
    full = ax.plot(u, path, color=LIGHT["soft"], lw=0.7)[0]
    held = ax.plot(u, kept, color=LIGHT["main"], lw=1.8)[0]
    ax.plot(1.0, path[-1], marker="o", ms=5, color=LIGHT["soft"], clip_on=False)
    ax.plot(1.0, kept[-1], marker="s", ms=5, color=LIGHT["main"], clip_on=False)
    ax.set_xlim(0.0, 1.0)
    ax.set_xlabel(
        "part of the arc\n"
        f"lost: {number(100 * lost[0], 2)} % of the path, "
        f"{number(100 * lost[1], 2) if lost[1] > 1e-12 else '0'} % of the end's variance"
    )
    ax.set_ylabel("integrated white noise\n(of unit variance at the end)")
    name = NAMES.get(basis.name, basis.name)
    plural = "s" if basis.terms > 1 else ""
    frame.legend(ax, [full, held], ["path", f"kept by {basis.terms} {name} term{plural}"])
    return ax
