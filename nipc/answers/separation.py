"""How fast neighbouring motions move apart: largest finite-time Lyapunov exponents of the members.

    lambda(t) = ln sigma_max(S^-1 J(t) S) / t,   J = d x(t) / d x(0) at fixed noise

J is the gradient of the expansions: of one arc's states, or the product of successive arcs'. The
scales S are the members' spreads over the horizon, so that components compare and a turning motion
has no exponent; over long times they do not matter. sigma_max is the growth in the direction that
grows most.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from nipc.answers.intervals import quantile_ranks
from nipc.answers.lyapunov import Stretching, log_stretch
from nipc.answers.table import LEVELS, ResultTable
from nipc.arrays import BoolArray, FloatArray
from nipc.chain.arc import ArcMap
from nipc.chain.chain import Chain
from nipc.chain.check import HeldOut
from nipc.chain.horizon import Horizon
from nipc.chain.single_arc import SingleArc, generator
from nipc.expansion import Expansion, finite_rows, least_angle, least_squares

MATRICES = 200_000  # singular values of so many small matrices take a second
FEWEST, MOST = 200, 1024
RANK = 1e-4  # thinner clouds of states do not tell the gradient across them


def add_exponents(
    table: ResultTable, logs: FloatArray, begin: float, path_error: FloatArray
) -> None:
    """Quantiles over members of ln sigma_max (n, T) over the time since `begin`.

    Intervals are those of quantiles of n members, widened by ln(1 + e) over the time, e (T,) being
    the largest relative path error: the gradients are off by about as much.
    """
    times = table.study.clock.times
    shape = (len(LEVELS), times.size)
    found = {"": np.full(shape, np.nan), "_low": np.full(shape, np.nan)}
    found["_high"] = np.full(shape, np.nan)
    known = np.isfinite(logs).all(axis=0) & (times > begin)
    elapsed = times[known] - begin
    ranked = np.sort(logs[:, known], axis=0) / elapsed
    doubt = np.log1p(np.nan_to_num(path_error[known])) / elapsed
    for k, level in enumerate(LEVELS):
        low, high = quantile_ranks(level, logs.shape[0])
        found[""][k, known] = np.quantile(ranked, level, axis=0)
        found["_low"][k, known] = ranked[low] - doubt
        found["_high"][k, known] = ranked[high] + doubt
    unit = f"1/{table.study.clock.unit}"
    words = "quantile over members of the largest finite-time Lyapunov exponent"
    for end, values in found.items():
        label = words + {"": "", "_low": ", low end", "_high": ", high end"}[end]
        table.add(f"lyapunov_exponent{end}", ("level", "time"), values, unit, label)
    words = "time from which the separation of neighbouring motions is told"
    table.add("lyapunov_begin", (), begin, table.study.clock.unit, words)


def worst_error(check: HeldOut) -> FloatArray:
    """(T,) largest over quantities of the held-out path error over the spread."""
    error = check.error
    return np.asarray(np.max(np.where(np.isfinite(error), error, 0.0), axis=1, initial=0.0))


def members_for(times: int) -> int:
    """So few members that their matrices at all times are soon done."""
    return int(np.clip(MATRICES // max(times, 1), FEWEST, MOST))


# -- one arc ---------------------------------------------------------------------------------------


def arc_logs(arc: SingleArc) -> FloatArray | None:
    """ln sigma_max (n, T) within the start's uncertain directions; None without any.

    The states of the design's runs are expanded as the quantities are.
    """
    rank, times = arc.germ.start.rank, arc.times.size
    made = arc.outcomes[:-1]
    states = np.concatenate([o.states for o in made])[:, -times:]
    good = finite_rows(states)
    basis = arc.design.basis if arc.study.expansion.degree != "auto" else arc.expansion.basis
    sparse = arc.study.expansion.fit == "least-angle"
    if rank == 0 or (not sparse and good.sum() <= basis.n_terms):
        return None
    matrix, flat = basis.evaluate(arc.design.nodes[good]), states[good].reshape(good.sum(), -1)
    fit = least_angle(matrix, flat) if sparse else least_squares(
        matrix, flat, arc.design.weights[good]
    )  # fmt: skip
    expansion = Expansion(basis, fit.coefficients.reshape(basis.n_terms, times, -1))
    spread = np.sqrt(np.mean(expansion.variance, axis=0))
    size = np.abs(states[good]).max(axis=(0, 1))
    alive = spread > 64.0 * np.finfo(float).eps * size
    unit = np.zeros((rank, arc.germ.size))
    unit[:, :rank] = np.eye(rank)
    centre = arc.germ.states(np.zeros((1, arc.germ.size)))
    # rows are the start's directions (r, d)
    frame = (arc.germ.states(unit) - centre)[:, alive] / spread[alive]
    if np.linalg.matrix_rank(frame, tol=1e-9 * np.abs(frame).max(initial=0.0)) < rank:
        return None
    upper = np.linalg.qr(frame.T)[1]
    nodes = arc.germ.sample(generator(arc.study, "exponents"), members_for(times))
    result = np.empty((nodes.shape[0], times))
    block = max(8, 4_000_000 // (basis.n_variables * basis.n_terms))
    for first in range(0, nodes.shape[0], block):
        some = slice(first, first + block)
        slopes = basis.gradient_block(nodes[some])[:rank].transpose(2, 0, 1)  # (n, r, terms)
        for row in range(times):
            grown = slopes @ (expansion.coefficients[:, row, alive] / spread[alive])
            result[some, row] = log_stretch(np.linalg.solve(upper.T, grown))
    return result


# -- a chain ---------------------------------------------------------------------------------------


def chain_logs(horizon: Horizon, chain: Chain) -> tuple[FloatArray, float] | None:
    """(ln sigma_max (n, T), the time from which) along a chain, in its chart; None if never told.

    The gradient is told across a cloud of states only where the cloud is not flat: the product
    begins with the first arc at whose start it is not, among the components that spread at all.
    """
    count = members_for(horizon.outputs.size)
    spread, alive, begin = _cloud(horizon, chain, count)
    if begin is None:
        return None
    scale = spread[alive]
    product = Stretching(count, int(alive.sum()))
    logs = np.full((count, horizon.outputs.size), np.nan)
    for k, (arc, germ) in enumerate(_passages(horizon, chain, count)):
        if k < begin:
            continue
        maps = _gradients(arc, germ, alive) * scale / scale[:, None]  # (n, m, d, d)
        for row, inner in zip(horizon.output_rows(arc), horizon.inner_times(arc), strict=True):
            logs[:, row] = product.after(maps[:, inner])
        product.advance(maps[:, -1])
    return logs, float(chain.maps[begin].start)


def _passages(horizon: Horizon, chain: Chain, count: int) -> Iterator[tuple[ArcMap, FloatArray]]:
    """Each arc with the germ rows (n, c + K) of the ensemble's first members."""
    history = horizon.history
    members = horizon.members_of(horizon.nodes(horizon.streams("a"), 0, count), history, 0)
    for arc in chain.maps:
        white = horizon.fresh(arc.noise, history, arc.first, arc.last, 0, count)
        yield arc, np.hstack([members.correlated, white])
        members = horizon.advance(arc, members, history, 0)[1]


def _cloud(horizon: Horizon, chain: Chain, count: int) -> tuple[FloatArray, BoolArray, int | None]:
    """Spread (d,) over the horizon, which components spread, and the first arc to begin with."""
    squares, size, starts = np.zeros(0), np.zeros(0), []
    for arc, germ in _passages(horizon, chain, count):
        values = germ[:, : arc.components]
        starts.append(values - values.mean(axis=0))
        ends = arc(germ)[0][:, -1]
        squares = np.var(ends, axis=0) + (squares if squares.size else 0.0)
        size = np.maximum(np.abs(ends).max(axis=0), size if size.size else 0.0)
    if not starts:
        return squares, np.zeros(0, dtype=bool), None
    spread = np.sqrt(squares / len(starts))
    alive = np.asarray(spread > 64.0 * np.finfo(float).eps * size)
    for k, cloud in enumerate(starts):
        width = np.sqrt(np.mean(cloud[:, alive] ** 2, axis=0))
        if alive.any() and np.all(width > 0.0):
            singular = np.linalg.svd(cloud[:, alive] / width, compute_uv=False)
            if singular[-1] > RANK * singular[0]:
                return spread, alive, k
    return spread, alive, None


def _gradients(arc: ArcMap, germ: FloatArray, alive: BoolArray) -> FloatArray:
    """(n, m, d, d) of an arc at all its times; as in the map, far rows move by the linear part."""
    keep = np.flatnonzero(alive)
    order = arc.basis.indices.sum(axis=1)
    times, parts = arc.times.size, []
    folded = arc.coefficients.reshape(order.size, times, -1)[:, :, keep].reshape(order.size, -1)
    for first in range(0, germ.shape[0], 256):
        rows = germ[first : first + 256]
        slopes = arc.basis.gradient_block(rows)[keep]  # (d, terms, n)
        outside = arc(rows)[1]
        far = outside > 1.0
        slopes[np.ix_(np.arange(keep.size), order > 1, far)] /= outside[far]
        grown = (slopes.transpose(2, 0, 1) @ folded).reshape(-1, keep.size, times, keep.size)
        parts.append(grown.transpose(0, 2, 3, 1))
    return np.concatenate(parts)
