"""W_j(t) of every member, cell by cell: noise histories that no cutting into arcs can change.

The horizon is divided into cells. On each cell a source's white noise has independent standard
coefficients on Legendre polynomials, drawn from a stream of their own (counter-based, keyed by
seed, source, cell and block of members), so nothing is stored and any member's history can be
drawn again. An arc is a run of cells, or a dyadic part of one (see `Ticks`): its coefficients on
any basis are projections of the cells', or those of the part given the cell's.

Half a cell: with P (K, 2 K) the coefficients of a cell's polynomials on its halves', the halves
have P' z + (1 - P' P) g, g fresh and standard; so they are standard, and P of them is z again.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from nipc.arrays import FloatArray
from nipc.chain.ticks import Piece, pieces
from nipc.problem.noise import Legendre, NoiseBasis, Source

BLOCK = 4096


@dataclass(frozen=True, eq=False)
class NoiseHistory:
    """Brownian histories of a set of members.

    edges (C + 1,) are the cells' boundaries; `streams` names each source's stream, so that two
    ensembles share a source's history exactly where its stream is the same (pick and freeze);
    `scales` (J,) multiply the sources.
    """

    seed: int
    streams: tuple[str, ...]
    sources: tuple[Source, ...]
    edges: FloatArray
    cell_terms: int
    scales: FloatArray
    luck: str = "a"
    _projections: dict[tuple[object, ...], FloatArray] = field(default_factory=dict, repr=False)

    def with_stream(self, source: int, stream: str) -> NoiseHistory:
        """The same with another independent history for one source."""
        streams = tuple(stream if j == source else s for j, s in enumerate(self.streams))
        return self._replaced(streams, self.scales, self.luck)

    def restreamed(self, stream: str) -> NoiseHistory:
        """Independent histories of all sources, and luck of its own."""
        return self._replaced((stream,) * len(self.streams), self.scales, stream)

    def scaled(self, scales: FloatArray) -> NoiseHistory:
        """The same histories with each source multiplied by its scale."""
        return self._replaced(self.streams, np.asarray(scales, float), self.luck)

    def _replaced(self, streams: tuple[str, ...], scales: FloatArray, luck: str) -> NoiseHistory:
        return NoiseHistory(
            self.seed, streams, self.sources, self.edges, self.cell_terms, scales, luck,
            self._projections,
        )  # fmt: skip

    def uniform(self, place: int, block: int, count: int) -> FloatArray:
        """A number (count,) in (0, 1) of each member at a place: what its germ leaves open."""
        parts = [
            self._generator(f"luck:{self.luck}", place, block + b).random(BLOCK)[:part]
            for b, part in blocks_of(count)
        ]
        return np.concatenate(parts) if parts else np.empty(0)

    def _generator(self, stream: str, cell: int, block: int) -> np.random.Generator:
        text = f"{self.seed}/{stream}/{cell}/{block}".encode()
        key = int.from_bytes(hashlib.sha256(text).digest()[:16], "little")
        return np.random.Generator(np.random.Philox(key=key))

    def cell(self, source: int, cell: int, block: int, count: int, terms: int) -> FloatArray:
        """Coefficients (terms, count) of the first `count` members of a block on one cell.

        Row k is the same however many rows are asked for. More members than a block holds are
        those of the blocks that follow.
        """
        return self._normal(source, "", cell, block, count, terms)

    def initial(self, source: int, block: int, count: int) -> FloatArray:
        """A Gauss-Markov source's value at the start over its stationary deviation: (count,)."""
        return self._normal(source, ":initial", 0, block, count, 1)[0]

    def _normal(
        self, source: int, kind: str, cell: int, block: int, count: int, terms: int
    ) -> FloatArray:
        stream = f"{self.sources[source].name}:{self.streams[source]}{kind}"
        parts = [
            self._generator(stream, cell, block + b).standard_normal((terms, BLOCK))[:, :part]
            for b, part in blocks_of(count)
        ]
        return parts[0] if len(parts) == 1 else np.hstack(parts)

    def piece(
        self, source: int, piece: Piece, block: int, count: int, terms: int | None = None
    ) -> FloatArray:
        """Coefficients (terms, count) on a cell or a dyadic part of one."""
        terms = self.cell_terms if terms is None else terms
        if piece.level == 0:
            return self.cell(source, piece.cell, block, count, terms)
        whole = self.piece(source, piece.parent, block, count)
        key = f"{piece.cell}/{piece.level}/{piece.index // 2}"
        fresh = self._normal(source, f":{key}", 0, block, count, 2 * self.cell_terms)
        split = self._projection(Legendre(self.cell_terms), np.array([0.5, 0.5]))
        split = split.transpose(1, 0, 2).reshape(self.cell_terms, -1)
        both = fresh + split.T @ (whole - split @ fresh)
        first = (piece.index % 2) * self.cell_terms
        return both[first : first + terms]

    def _width(self, piece: Piece) -> float:
        return float(self.edges[piece.cell + 1] - self.edges[piece.cell]) / 2.0**piece.level

    def white(
        self, source: int, basis: NoiseBasis, first: int, last: int, block: int, count: int
    ) -> FloatArray:
        """Coefficients (count, basis.terms) on the arc of ticks first ... last."""
        parts = pieces(first, last)
        scale = self.scales[source]
        if len(parts) == 1 and isinstance(basis, Legendre) and basis.terms <= self.cell_terms:
            return self.piece(source, parts[0], block, count, basis.terms).T * scale
        total = np.zeros((count, basis.terms))
        matrix = self._projection(basis, np.array([self._width(part) for part in parts]))
        for i, part in enumerate(parts):
            total += self.piece(source, part, block, count).T @ matrix[i].T
        return total * scale

    def _projection(self, basis: NoiseBasis, widths: FloatArray) -> FloatArray:
        """(pieces, basis.terms, cell terms) inner products, rows made orthonormal together.

        `widths` are those of successive pieces.
        """
        edges = np.concatenate([[0.0], np.cumsum(widths)]) / widths.sum()
        key = (basis.name, basis.terms, tuple(np.round(edges, 12)))
        if key not in self._projections:
            inner = Legendre(self.cell_terms)
            nodes, weights = np.polynomial.legendre.leggauss(16 + self.cell_terms + 2 * basis.terms)
            u, w = 0.5 * (nodes + 1.0), 0.5 * weights
            blocks = []
            for a, width in zip(edges[:-1], np.diff(edges), strict=True):
                outer = basis.values(a + width * u)
                blocks.append(np.sqrt(width) * (outer * w) @ inner.values(u).T)
            matrix = np.array(blocks)
            # the pieces' finite terms lose a trace of variance; give it back
            flat = matrix.transpose(1, 0, 2).reshape(basis.terms, -1)
            factor = np.linalg.cholesky(flat @ flat.T)
            flat = np.linalg.solve(factor, flat)
            shape = (basis.terms, len(widths), self.cell_terms)
            self._projections[key] = flat.reshape(shape).transpose(1, 0, 2)
        return self._projections[key]

    def carry(
        self, source: int, values: FloatArray, first: int, last: int, block: int
    ) -> FloatArray:
        """Standardised Gauss-Markov values (count,) at the end of the arc of ticks first ... last.

        u_b = exp(-h/tau) u_a + sqrt(2/tau) int exp(-(b-s)/tau) dW; what a piece's terms miss of
        the integral's variance is made up by one independent normal, so that the law at every
        boundary is exact.
        """
        law = self.sources[source]
        assert law.time_constant is not None
        for part in pieces(first, last):
            width = self._width(part)
            gains = _end_gains(law.time_constant, width, self.cell_terms)
            drawn, rest = self._with_rest(source, part, block, values.size)
            missing = -np.expm1(-2.0 * width / law.time_constant) - gains @ gains
            fresh = gains @ drawn + np.sqrt(max(missing, 0.0)) * rest
            values = np.exp(-width / law.time_constant) * values + self.scales[source] * fresh
        return values

    def _with_rest(
        self, source: int, part: Piece, block: int, count: int
    ) -> tuple[FloatArray, FloatArray]:
        """A piece's coefficients (cell_terms, count), and a normal (count,) apart from them."""
        if part.level == 0:
            drawn = self.cell(source, part.cell, block, count, self.cell_terms + 1)
            return drawn[:-1], drawn[-1]
        key = f"{part.cell}/{part.level}/{part.index}/rest"
        rest = self._normal(source, f":{key}", 0, block, count, 1)[0]
        return self.piece(source, part, block, count), rest


def _end_gains(time_constant: float, width: float, terms: int) -> FloatArray:
    """sqrt(2/tau) int_a^b exp(-(b-s)/tau) phi_k(s) ds for k = 1 ... terms."""
    ratio = width / time_constant
    nodes, weights = np.polynomial.legendre.leggauss(32 + 2 * terms)
    # the kernel lives in the last few time constants of the cell
    low = max(0.0, 1.0 - 40.0 / ratio) if ratio > 40.0 else 0.0
    u = low + 0.5 * (1.0 - low) * (nodes + 1.0)
    w = 0.5 * (1.0 - low) * weights
    kernel = np.sqrt(2.0 * ratio) * np.exp(-ratio * (1.0 - u))
    return Legendre(terms).values(u) @ (w * kernel)


def blocks_of(count: int) -> Sequence[tuple[int, int]]:
    """(block number, members in it) for a number of members."""
    return [(b, min(BLOCK, count - b * BLOCK)) for b in range((count + BLOCK - 1) // BLOCK)]
