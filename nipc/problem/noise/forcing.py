"""xi_j(t) = sum_k Z_jk s_jk(t): realised paths of the noise sources on one arc."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from nipc.arrays import FloatArray, IntArray
from nipc.problem.noise.basis import NoiseBasis
from nipc.problem.noise.source import Shapes, Source


@dataclass(frozen=True, eq=False)
class NoiseModel:
    """The sources and their bases on one arc; it turns standard coefficients into paths.

    Columns of a coefficient matrix are source by source: the carried value of a Gauss-Markov
    source (over its stationary standard deviation), then Z_1 ... Z_N.
    """

    sources: tuple[Source, ...]
    bases: tuple[NoiseBasis, ...]
    start: float
    end: float

    @cached_property
    def shapes(self) -> tuple[Shapes, ...]:
        """One set of functions of time a source."""
        return tuple(
            source.shapes(basis, self.start, self.end)
            for source, basis in zip(self.sources, self.bases, strict=True)
        )

    @cached_property
    def offsets(self) -> IntArray:
        """(J + 1,) first column of each source, and the number of columns."""
        widths = [s.carried + b.terms for s, b in zip(self.sources, self.bases, strict=True)]
        return np.concatenate([[0], np.cumsum(widths)]).astype(np.int64)

    @property
    def size(self) -> int:
        """Number of standard coefficients of a path."""
        return int(self.offsets[-1])

    @cached_property
    def labels(self) -> tuple[str, ...]:
        """A name for each column."""
        names: list[str] = []
        for source, basis in zip(self.sources, self.bases, strict=True):
            names += [f"{source.name}[carried]"] * source.carried
            names += [f"{source.name}[{k}]" for k in range(1, basis.terms + 1)]
        return tuple(names)

    def columns(self, source: int) -> slice:
        """The columns of one source."""
        return slice(int(self.offsets[source]), int(self.offsets[source + 1]))

    def digest(self) -> bytes:
        """Identity of the model: sources, bases and arc."""
        text = repr(
            [
                (s.name, s.intensity, s.kind, s.time_constant, b.name, b.terms)
                for s, b in zip(self.sources, self.bases, strict=True)
            ]
            + [float(self.start).hex(), float(self.end).hex()]
        )
        return hashlib.sha256(text.encode()).digest()

    def realise(self, coefficients: FloatArray) -> Forcing:
        """Paths with the given coefficients (n, size)."""
        return Forcing(self, np.ascontiguousarray(coefficients, dtype=float))

    def __reduce__(self) -> tuple[object, ...]:
        # the cached splines are rebuilt where they are needed rather than sent to workers
        return (NoiseModel, (self.sources, self.bases, self.start, self.end))


@dataclass(frozen=True, eq=False)
class Forcing:
    """n realised paths of J sources on one arc; intensities are already in them.

    `coefficients` has shape (n, K), columns as in `model.labels`.
    """

    model: NoiseModel
    coefficients: FloatArray

    @property
    def start(self) -> float:
        return self.model.start

    @property
    def end(self) -> float:
        return self.model.end

    @property
    def names(self) -> tuple[str, ...]:
        return tuple(source.name for source in self.model.sources)

    @property
    def labels(self) -> tuple[str, ...]:
        return self.model.labels

    @property
    def n_sources(self) -> int:
        return len(self.model.sources)

    def __len__(self) -> int:
        return int(self.coefficients.shape[0])

    def __call__(self, t: float) -> FloatArray:
        """xi at one time: (n, J)."""
        return self.table(np.array([t]))[:, 0, :]

    def table(self, times: FloatArray) -> FloatArray:
        """xi at times (T,): (n, T, J)."""
        times = np.atleast_1d(np.asarray(times, float))
        result = np.empty((len(self), times.size, self.n_sources))
        for j, shapes in enumerate(self.model.shapes):
            columns = self.model.columns(j)
            result[:, :, j] = self.coefficients[:, columns] @ shapes.values(times)
        return result

    def increments(self, times: FloatArray) -> FloatArray:
        """Integral of xi over each interval of times (T,): (n, T - 1, J)."""
        times = np.asarray(times, float)
        result = np.empty((len(self), times.size - 1, self.n_sources))
        for j, shapes in enumerate(self.model.shapes):
            columns = self.model.columns(j)
            result[:, :, j] = self.coefficients[:, columns] @ np.diff(shapes.integrals(times))
        return result

    def take(self, rows: IntArray | slice) -> Forcing:
        """The same arc with only these paths."""
        return Forcing(self.model, self.coefficients[rows])

    def digest(self) -> bytes:
        """Identity of what all paths share; the rows of `coefficients` tell them apart."""
        return self.model.digest()
