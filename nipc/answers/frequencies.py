"""Which frequencies of the noise drive the spread: shares by band, and resonances."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nipc.answers.intervals import LEVEL, normal_factor
from nipc.answers.response import Response, panels
from nipc.arrays import FloatArray

RATIO = 2.0 ** (1.0 / 3.0)
"""Of neighbouring bands' edges: three to a doubling."""

NARROW = 0.1
"""Half-width of a resonance over its frequency, unless the time elapsed tells it less sharply."""

TURNS = 3.0
"""Turns within the time elapsed below which a peak is no resonance."""

Triple = tuple[float, float, float]
NOTHING: Triple = (np.nan, np.nan, np.nan)


@dataclass(frozen=True)
class Resonance:
    """The strongest peak: its frequency, the half-width looked at, and the share within."""

    frequency: float
    width: float
    share: Triple


NO_RESONANCE = Resonance(np.nan, np.nan, NOTHING)


def band_edges(elapsed: float, finest: float, centre: float | None = None) -> FloatArray:
    """(B + 1,) edges 0 ... infinity: three bands to a doubling, none narrower than 1 / elapsed.

    `centre`, a characteristic frequency, is in the middle of its band.
    """
    anchor = (centre or 1.0 / elapsed) * np.sqrt(RATIO)
    first = int(np.floor(np.log(0.5 / elapsed / anchor) / np.log(RATIO)))
    last = max(int(np.ceil(np.log(finest / anchor) / np.log(RATIO))), first + 1)
    edges = [0.0]
    for edge in anchor * RATIO ** np.arange(first, last + 1):
        if edge - edges[-1] >= (1.0 - 1e-9) / elapsed:
            edges.append(float(edge))
    if len(edges) == 1:
        edges.append(1.0 / elapsed)
    return np.array([*edges, np.inf])


def band_shares(
    response: Response, edges: FloatArray, doubt: float = 0.0, level: float = LEVEL
) -> FloatArray:
    """(3, B) share of the source's first-order variance from each band, and its interval.

    NaN where that variance is not told from nothing. With e = `doubt`, the root-mean-square error
    of the quantity's paths, a share P / V may be off by (2 sqrt(P) e + e^2) / V beyond chance.
    """
    whole = response.variance
    bands = edges.size - 1
    if not _told(response, whole, doubt, level):
        return np.full((3, bands), np.nan)
    power, traces = np.zeros(bands), np.zeros(bands)
    for b in range(bands - 1):
        power[b], traces[b] = response.between(float(edges[b]), float(edges[b + 1]))
    # what no band holds is above the last of them: all of it adds up to V
    power[-1] = whole - power[:-1].sum()
    traces[-1] = max(response.count - traces[:-1].sum(), 0.0)
    half = _half(response, power, traces, doubt, level)
    return np.clip(np.stack([power, power - half, power + half]) / whole, 0.0, 1.0)


def resonance(response: Response, doubt: float = 0.0, level: float = LEVEL) -> Resonance:
    """The strongest peak of 2 |K|^2 and the share within a tenth of its frequency.

    Or within 1 / elapsed, if that is wider. NO_RESONANCE where nothing is told, or the peak turns
    less than three times in the time elapsed.
    """
    whole = response.variance
    if not _told(response, whole, doubt, level):
        return NO_RESONANCE
    nodes, _ = panels(0.0, response.finest, response.elapsed)
    best, top = 0.0, -np.inf
    for rows in range(0, nodes.size, 1024):
        some = nodes[rows : rows + 1024]
        power, floor = response.power(some)
        power = power - response.noise * floor
        place = int(np.argmax(power))
        if power[place] > top:
            best, top = float(some[place]), float(power[place])
    if best * response.elapsed < TURNS:
        return NO_RESONANCE
    width = max(NARROW * best, 1.0 / response.elapsed)
    nodes, weights = panels(best - width, best + width, response.elapsed)
    power = np.maximum(response.power(nodes)[0], 0.0)
    best = float(weights @ (power * nodes) / (weights @ power))
    width = max(NARROW * best, 1.0 / response.elapsed)
    found, trace = response.between(best - width, best + width)
    half = float(_half(response, np.array(found), np.array(trace), doubt, level))
    ends = np.clip(np.array([found, found - half, found + half]) / whole, 0.0, 1.0)
    return Resonance(best, width, (float(ends[0]), float(ends[1]), float(ends[2])))


def _told(response: Response, whole: float, doubt: float, level: float) -> bool:
    """Whether a variance is told from the errors of coefficients and paths."""
    z = normal_factor(level)
    chance = np.sqrt(2.0 * response.count) * response.noise
    return whole > max(3.0 * z * chance, doubt**2, 0.0)


def _half(
    response: Response, power: FloatArray, traces: FloatArray, doubt: float, level: float
) -> FloatArray:
    """Half-width of the interval of a band's variance P.

    With c = true + error, error ~ N(0, v I), and the band's projector M (eigenvalues 0 ... 1),
    Var c'Mc = 4 v c'M^2c + 2 v^2 tr M^2 <= 4 v P + 2 v^2 tr M.
    """
    kept = np.maximum(power, 0.0)
    chance = np.sqrt(4.0 * response.noise * kept + 2.0 * response.noise**2 * traces)
    return np.asarray(normal_factor(level) * chance + 2.0 * np.sqrt(kept) * doubt + doubt**2)
