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


class Stretching:
    """ln sigma_max(J_K ... J_1) of n members: the growth in the direction that has grown most.

    The product is kept at norm one and its size as a logarithm, so that nothing overflows; what
    contracts is lost to rounding after a while, which the largest singular value does not mind.
    """

    def __init__(self, members: int, dimension: int) -> None:
        self._product = np.broadcast_to(np.eye(dimension), (members, dimension, dimension)).copy()
        self._logs = np.zeros(members)

    def after(self, maps: FloatArray) -> FloatArray:
        """(n,) after one more map (n, d, d), which is not kept; NaN where it is not finite."""
        return np.asarray(self._logs + log_stretch(maps @ self._product))

    def advance(self, maps: FloatArray) -> None:
        """Compose with one more map (n, d, d)."""
        product = maps @ self._product
        size = np.linalg.norm(product, axis=(1, 2), keepdims=True)
        with np.errstate(invalid="ignore", divide="ignore"):
            self._product = product / size
            self._logs = self._logs + np.log(size[:, 0, 0])


def log_stretch(maps: FloatArray) -> FloatArray:
    """ln of the largest singular value of matrices (n, d, e); NaN where one is not finite."""
    finite = np.isfinite(maps).all(axis=(1, 2))
    found = np.full(maps.shape[0], np.nan)
    largest = np.linalg.svd(maps[finite], compute_uv=False)[:, 0]
    with np.errstate(divide="ignore"):
        found[finite] = np.log(largest)
    return found


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
