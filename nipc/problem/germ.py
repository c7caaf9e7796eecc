"""xi = (start, parameters, noise): the independent standard variables of a single arc."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from nipc.arrays import FloatArray, IntArray
from nipc.problem.noise import Forcing, NoiseModel
from nipc.problem.parameters import Fixed
from nipc.problem.start import Start
from nipc.problem.study import Study

Kind = Literal["noise", "start", "parameter"]


@dataclass(frozen=True)
class Group:
    """The germ variables of one driver: a noise source, the start, or a parameter."""

    name: str
    kind: Kind
    columns: tuple[int, ...]


@dataclass(frozen=True, eq=False)
class Germ:
    """Columns of a germ matrix (n, size): start, then parameters, then noise source by source.

    Start and noise variables are standard normal; a parameter's variable is the parameter itself,
    under its own law.
    """

    start: Start
    parameter_laws: tuple[Any, ...]
    parameter_base: FloatArray
    parameter_positions: IntArray
    noise: NoiseModel
    parameter_names: tuple[str, ...]

    @classmethod
    def of(cls, study: Study, terms: tuple[int, ...], first: float, last: float) -> Germ:
        """The germ of a study on the arc [first, last] with `terms` noise terms a source."""
        base = np.array([p.value if isinstance(p, Fixed) else np.nan for p in study.parameter])
        positions = np.array(study.uncertain_parameters, dtype=np.int64)
        bases = tuple(n.expanded_on(k) for n, k in zip(study.noise, terms, strict=True))
        model = NoiseModel(
            tuple(n.source(study.clock.unit) for n in study.noise), bases, first, last
        )
        laws = tuple(study.parameter[i].distribution() for i in positions)
        names = tuple(study.parameter[i].name for i in positions)
        return cls(study.start_law(), laws, base, positions, model, names)

    @property
    def size(self) -> int:
        return self.start.rank + len(self.parameter_laws) + self.noise.size

    @property
    def first_parameter(self) -> int:
        return self.start.rank

    @property
    def first_noise(self) -> int:
        return self.start.rank + len(self.parameter_laws)

    def groups(self) -> tuple[Group, ...]:
        """The drivers: each noise source, then the start if uncertain, then each parameter."""
        groups = []
        for j, source in enumerate(self.noise.sources):
            columns = self.noise.columns(j)
            first = self.first_noise
            span = range(first + columns.start, first + columns.stop)
            groups.append(Group(source.name, "noise", tuple(span)))
        if self.start.rank:
            groups.append(Group("start", "start", tuple(range(self.start.rank))))
        for i, name in enumerate(self.parameter_names):
            groups.append(Group(name, "parameter", (self.first_parameter + i,)))
        return tuple(groups)

    def labels(self) -> tuple[str, ...]:
        """A name for each germ variable."""
        start = tuple(f"start[{i}]" for i in range(1, self.start.rank + 1))
        return start + self.parameter_names + self.noise.labels

    def distributions(self) -> tuple[Any, ...]:
        """A chaospy distribution for each germ variable."""
        import chaospy

        normal = chaospy.Normal(0.0, 1.0)
        start: tuple[Any, ...] = (normal,) * self.start.rank
        return start + self.parameter_laws + (normal,) * self.noise.size

    def sample(self, rng: np.random.Generator, count: int) -> FloatArray:
        """(count, size) independent germ samples."""
        nodes = rng.standard_normal((count, self.size))
        for i, law in enumerate(self.parameter_laws):
            # the open interval: an inverse distribution function may be infinite at 0 and 1
            uniform = np.clip(rng.random(count), 1e-12, 1 - 1e-12)
            nodes[:, self.first_parameter + i] = np.asarray(law.inv(uniform)).ravel()
        return nodes

    def states(self, nodes: FloatArray) -> FloatArray:
        """(n, d) start states."""
        return self.start.states(nodes[:, : self.start.rank])

    def parameters(self, nodes: FloatArray) -> FloatArray:
        """(n, P) parameters, fixed ones among them."""
        values = np.tile(self.parameter_base, (nodes.shape[0], 1))
        span = slice(self.first_parameter, self.first_noise)
        values[:, self.parameter_positions] = nodes[:, span]
        return values

    def forcing(self, nodes: FloatArray) -> Forcing:
        """The noise paths."""
        return self.noise.realise(nodes[:, self.first_noise :])
