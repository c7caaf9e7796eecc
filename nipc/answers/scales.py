"""By how much each driver is scaled: 1 as in the study, 0 switched off.

A noise source's Z_j becomes s Z_j, the start's standard deviations s times themselves, and an
uncertain parameter's distance from its mean s times itself.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import InputError
from nipc.expansion.recurrence import recurrence_of
from nipc.problem.germ import Germ, Group
from nipc.problem.start import Start


def scales_of(groups: Sequence[Group], given: Mapping[str, float]) -> FloatArray:
    """(G,) factors in the groups' order; InputError for a name there is not, or a bad factor."""
    names = [group.name for group in groups]
    scales = np.ones(len(names))
    for name, factor in given.items():
        if name not in names:
            known = ", ".join(names) or "none: nothing in the study is uncertain"
            raise InputError(f"nothing is called {name!r} that could be scaled; there are: {known}")
        if not (math.isfinite(factor) and factor >= 0.0):
            raise InputError(f"scale of {name!r}: {factor:g} is not a number from 0 upwards")
        scales[names.index(name)] = factor
    return scales


def of_noise(groups: Sequence[Group], scales: FloatArray) -> FloatArray:
    """(J,) the factors of the noise sources, which are the first groups."""
    return np.array([s for s, g in zip(scales, groups, strict=True) if g.kind == "noise"])


@dataclass(frozen=True)
class ScaledLaw:
    """A parameter's law, its distance from the mean multiplied."""

    law: Any
    mean: float
    factor: float

    def inv(self, share: FloatArray) -> FloatArray:
        """The value below which this share lies."""
        inner = np.asarray(self.law.inv(share), float)
        return np.asarray(self.mean + self.factor * (inner - self.mean))


def parameter_means(germ: Germ) -> FloatArray:
    """(P',) means of the uncertain parameters."""
    return np.array([recurrence_of(law, 1).shift for law in germ.parameter_laws])


def scaled_germ(germ: Germ, groups: Sequence[Group], scales: FloatArray) -> Germ:
    """The same germ with start and parameters scaled; its noise is left as it is."""
    factor = {group.name: float(s) for group, s in zip(groups, scales, strict=True)}
    start = Start(germ.start.mean, factor.get("start", 1.0) * germ.start.factor)
    means = parameter_means(germ)
    laws = tuple(
        ScaledLaw(law, float(mean), factor[name])
        for law, mean, name in zip(germ.parameter_laws, means, germ.parameter_names, strict=True)
    )
    return replace(germ, start=start, parameter_laws=laws)


def scaled_nodes(
    germ: Germ, groups: Sequence[Group], scales: FloatArray, nodes: FloatArray
) -> FloatArray:
    """Germ nodes (n, size) with each group's columns moved away from their means."""
    result = nodes.copy()
    means = np.zeros(germ.size)
    means[germ.first_parameter : germ.first_noise] = parameter_means(germ)
    for group, scale in zip(groups, scales, strict=True):
        columns = list(group.columns)
        result[:, columns] = means[columns] + scale * (nodes[:, columns] - means[columns])
    return result
