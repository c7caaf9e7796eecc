"""Finite-time Lyapunov exponents from the tangent maps of successive arcs."""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray


class TangentProduct:
    """exponents = ln diag|R| / t of J_K ... J_2 J_1 = Q R, orthonormalised after each arc.

    Benettin, Galgani, Giorgilli & Strelcyn 1980. J (n, d, d) is the gradient of an arc's end with
    respect to its start, one for each of n members: of its expansion, d(end)/d(start). `scale` (d,)
    makes the components comparable; exponents over long times do not depend on it.
    """

    def __init__(self, members: int, dimension: int, scale: FloatArray | None = None) -> None:
        self._scale = np.ones(dimension) if scale is None else np.asarray(scale, float)
        self._frame = np.broadcast_to(np.eye(dimension), (members, dimension, dimension)).copy()
        self._logs = np.zeros((members, dimension))
        self.elapsed = 0.0

    def advance(self, maps: FloatArray, duration: float) -> None:
        """Compose with the maps (n, d, d) of the next arc, `duration` long.

        Members whose map is not finite are lost: their exponents are NaN from here on.
        """
        scaled = maps * self._scale / self._scale[:, None]
        lost = ~np.isfinite(scaled).all(axis=(1, 2))
        scaled[lost] = np.eye(self._scale.size)
        q, r = np.linalg.qr(scaled @ self._frame)
        with np.errstate(divide="ignore"):
            self._logs += np.log(np.abs(np.diagonal(r, axis1=1, axis2=2)))
        self._logs[lost] = np.nan
        self._frame = q
        self.elapsed += duration

    @property
    def exponents(self) -> FloatArray:
        """(n, d) per unit of time, in the frame's order: the first grows fastest once settled."""
        return np.asarray(self._logs / self.elapsed)


def lyapunov_exponents(
    maps: FloatArray, durations: FloatArray, scale: FloatArray | None = None
) -> FloatArray:
    """Exponents up to the end of each arc, (n, K, d), of maps (n, K, d, d) and durations (K,)."""
    product = TangentProduct(maps.shape[0], maps.shape[-1], scale)
    result = np.empty(maps.shape[:-1])
    for k, duration in enumerate(durations):
        product.advance(maps[:, k], float(duration))
        result[:, k] = product.exponents
    return result
