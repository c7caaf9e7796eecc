"""How many noise terms an arc keeps: the study's number, a rule, or what a pilot has shown.

A response of angular frequency w over an arc of length h needs some w h / pi + 3 Legendre terms; so
the number found for one cell is carried to arcs of other lengths in proportion, above three.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from nipc.arrays import FloatArray
from nipc.chain.plan import noise_terms
from nipc.problem.study import Study

FEWEST = 2
FLOOR = 3
PILOT = 10
"""A pilot looks at this many terms at the least, or at twice the rule's number."""


@dataclass(frozen=True)
class NoiseTerms:
    """Terms a source (J,) on one cell; where `open` a pilot may still change them."""

    cell: tuple[int, ...]
    automatic: tuple[bool, ...]
    open: tuple[bool, ...]

    @classmethod
    def of(cls, study: Study, cell: float) -> NoiseTerms:
        """By rule for a cell of this length; a pilot can judge nested terms only, Legendre's."""
        automatic = tuple(n.terms == "auto" for n in study.noise)
        nested = tuple(n.basis == "legendre" for n in study.noise)
        judged = tuple(a and b for a, b in zip(automatic, nested, strict=True))
        return cls(noise_terms(study, cell), automatic, judged)

    def at(self, cells: float) -> tuple[int, ...]:
        """Terms on an arc of so many cells."""
        return tuple(
            max(FEWEST, FLOOR + math.ceil((n - FLOOR) * cells - 1e-9)) if auto else n
            for n, auto in zip(self.cell, self.automatic, strict=True)
        )

    @property
    def piloted(self) -> tuple[int, ...]:
        """Terms with which a pilot looks at one cell."""
        return tuple(
            max(PILOT, 2 * n) if judged else n
            for n, judged in zip(self.cell, self.open, strict=True)
        )

    def kept(self, response: FloatArray, loss: float) -> NoiseTerms:
        """What a pilot shows: the fewest leading terms that keep all but `loss` of the variance.

        response (K, d): each white coefficient's linear effect on each component at the arc's end,
        source by source in the pilot's numbers of terms. The variance is what all sources together
        give a component.
        """
        found, first = [], 0
        whole = np.sum(response**2, axis=0)
        for terms, n, judged in zip(self.piloted, self.cell, self.open, strict=True):
            power = response[first : first + terms] ** 2
            first += terms
            if not judged:
                found.append(n)
                continue
            # tail[k] = what is lost by keeping the first k terms
            tail = np.vstack([np.cumsum(power[::-1], axis=0)[::-1], np.zeros_like(power[:1])])
            with np.errstate(invalid="ignore", divide="ignore"):
                lost = np.max(np.where(whole > 0, tail / whole, 0.0), axis=1)
            found.append(max(FEWEST, int(np.argmax(lost <= loss))))
        return replace(self, cell=tuple(found), open=(False,) * len(found))
