"""The linear part of a chain's quantities in start, parameters and every arc's noise."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from nipc.answers.bands import ResponseOf
from nipc.answers.linear import LinearPart
from nipc.answers.response import Response, Stretch
from nipc.arrays import FloatArray, IntArray
from nipc.chain.chain import Chain
from nipc.chain.history import blocks_of
from nipc.chain.horizon import Horizon

FEWEST = 3  # members a germ variable, at the least
WANTED = 6

MembersOf = Callable[[int, int], FloatArray]
"""(block, how many) to quantities (n, T, Q) of the ensemble's members by the arcs alone."""


class ChainLinear:
    """Germ columns: one, start and parameters, Gauss-Markov values at the start, then arc by arc
    the white coefficients of each source.
    """

    def __init__(self, horizon: Horizon, chain: Chain) -> None:
        self.horizon, self.chain = horizon, chain
        self._before = 1 + horizon.germ.first_noise  # columns before the carried values
        self._first = self._before + len(horizon.gauss_markov)
        sizes = [sum(b.terms for b in arc.noise.bases) for arc in chain.maps]
        self._starts = self._first + np.concatenate([[0], np.cumsum(sizes)]).astype(np.int64)
        self.width = int(self._starts[-1])

    def fit(self, members_of: MembersOf) -> LinearPart | None:
        """The linear part, or None when the ensemble is too small to tell it."""
        members = self.horizon.study.ensemble.members
        if FEWEST * self.width >= members:
            return None
        count = min(members, max(4096, WANTED * self.width))
        germ, values = np.empty((count, self.width)), []
        row = 0
        for block, part in blocks_of(count):
            germ[row : row + part] = self._germ(block, part)
            values.append(members_of(block, part))
            row += part
        return LinearPart.of(germ, self._known(), np.concatenate(values))

    def _germ(self, block: int, count: int) -> FloatArray:
        horizon, history = self.horizon, self.horizon.history
        nodes = horizon.nodes(horizon.streams("a"), block, count)
        parts = [np.ones((count, 1)), nodes[:, : horizon.germ.first_noise]]
        parts += [history.initial(j, block, count)[:, None] for j in horizon.gauss_markov]
        for arc in self.chain.maps:
            parts.append(horizon.fresh(arc.noise, history, arc.first, arc.last, block, count))
        return np.hstack(parts)

    def _known(self) -> IntArray:
        """(T,) how many columns each output time can depend on."""
        begun = [arc.start for arc in self.chain.maps]
        slack = 1e-12 * (self.horizon.edges[-1] - self.horizon.edges[0])
        return self._starts[np.searchsorted(begun, self.horizon.outputs - slack, side="left")]

    def responses(self, part: LinearPart) -> ResponseOf:
        """First-order responses, kernels being pieced together arc by arc."""
        horizon, known = self.horizon, self._known()
        start = float(horizon.edges[0])

        def response_of(source: int, quantity: int, row: int) -> Response | None:
            if not part.total[row, quantity] > 0.0:
                return None
            values = part.coefficients(row, quantity)
            stretches = []
            for arc, at in zip(self.chain.maps, self._starts[:-1], strict=True):
                if at >= known[row]:
                    break
                before = sum(b.terms for b in arc.noise.bases[:source])
                basis = arc.noise.bases[source]
                own = values[at + before : at + before + basis.terms]
                length = float(arc.times[-1] - arc.start)
                stretches.append(Stretch(basis, arc.start, length, own))
            if not stretches:
                return None
            law, memory = horizon.germ.noise.sources[source], None
            if law.time_constant is not None:
                held = self._before + horizon.gauss_markov.index(source)
                memory = float(values[held]), law.time_constant
            elapsed = float(horizon.outputs[row]) - start
            return Response(tuple(stretches), start, elapsed, memory, part.noise(row, quantity))

        return response_of
