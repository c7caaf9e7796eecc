"""What a study will cost and what its bases lose, known before any run."""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass
from typing import Any

from nipc import markup
from nipc.problem.germ import Germ
from nipc.problem.noise import BASES, Legendre
from nipc.problem.study import Study

DEFAULT_TERMS = 8
MOST_TERMS = 200
RESPONSE_LOSS = 1e-5


@dataclass(frozen=True)
class BasisLoss:
    """Shares of variance that a basis loses on one arc at the chosen number of terms.

    `path_lost` of the Wiener path's mean square, `end_lost` of its end value, `response_lost` of
    the velocity of an oscillator of the study's period at the arc's end (None without a period).
    """

    source: str
    basis: str
    terms: int
    chosen: bool
    path_lost: float
    end_lost: float
    response_lost: float | None


@dataclass(frozen=True)
class Plan:
    """Germ variables, terms and runs of a study; `groups` are (name, kind, variables)."""

    title: str
    groups: tuple[tuple[str, str, int], ...]
    arcs: int | str
    terms: int
    design: str
    design_runs: int
    check_runs: int
    total_runs: int
    budget: float | None
    losses: tuple[BasisLoss, ...]
    notes: tuple[str, ...]

    def as_dict(self) -> dict[str, Any]:
        """Plain values, for JSON."""
        return asdict(self)

    def _repr_html_(self) -> str:
        # a chain's degrees are known only as its arcs are built
        least = "at least " if isinstance(self.arcs, int) and self.arcs > 1 else ""
        rows = [
            ("arcs", self.arcs),
            ("terms of an expansion", f"{least}{self.terms}"),
            (f"design: {self.design}", f"{least}{self.design_runs}"),
            ("held-out check", f"{least}{self.check_runs}"),
            ("runs together", f"{least}{self.total_runs}"),
            ("budget", "none" if self.budget is None else f"{self.budget:g}"),
        ]
        lost = [
            (
                loss.source, loss.basis + " (chosen)" * loss.chosen, loss.terms,
                f"{loss.path_lost:.1e}", f"{loss.end_lost:.1e}",
                "-" if loss.response_lost is None else f"{loss.response_lost:.1e}",
            )
            for loss in self.losses
        ]  # fmt: skip
        heads = ("source", "basis", "terms", "path", "end value", "response")
        return markup.headed(
            self.title,
            markup.table(self.groups, ("driver", "kind", "germ variables of an arc")),
            markup.table(rows),
            markup.folded("Share of variance that a noise basis loses", markup.table(lost, heads)),
            *map(markup.paragraph, self.notes),
        )


def noise_terms(study: Study, length: float) -> tuple[int, ...]:
    """Number of terms of each source on an arc: the study's, or by rule where it says "auto".

    The rule takes the smallest number of Legendre terms with which an oscillator of the study's
    period keeps all but 1e-5 of its response's variance over the arc.
    """
    period = study.clock.period
    rule = DEFAULT_TERMS if period is None else _terms_for(2.0 * math.pi * length / period)
    return tuple(rule if n.terms == "auto" else n.terms for n in study.noise)


def _terms_for(phase: float) -> int:
    terms = max(2, int(phase / math.pi))
    while terms < MOST_TERMS and 1.0 - Legendre(terms).response_retained(phase) > RESPONSE_LOSS:
        terms += 1
    return terms


def basis_losses(study: Study, terms: tuple[int, ...], length: float) -> tuple[BasisLoss, ...]:
    """The closed-form losses of every basis at each source's number of terms."""
    period = study.clock.period
    phase = None if period is None else 2.0 * math.pi * length / period
    losses = []
    for noise, count in zip(study.noise, terms, strict=True):
        for name, family in BASES.items():
            basis = family(count)
            response = None if phase is None else max(0.0, 1.0 - basis.response_retained(phase))
            losses.append(
                BasisLoss(
                    noise.name,
                    name,
                    count,
                    name == noise.basis,
                    max(0.0, 1.0 - basis.path_retained()),
                    max(0.0, 1.0 - basis.end_retained()),
                    response,
                )
            )
    return tuple(losses)


def group_sizes(germ: Germ) -> tuple[tuple[str, str, int], ...]:
    """(name, kind, number of germ variables) of each driver."""
    return tuple((g.name, g.kind, len(g.columns)) for g in germ.groups())
