"""Noise sources, the bases on which they are expanded, and realised forcing paths."""

from nipc.problem.noise.basis import NoiseBasis
from nipc.problem.noise.completed import CompletedKarhunenLoeve
from nipc.problem.noise.forcing import Forcing, NoiseModel
from nipc.problem.noise.karhunen_loeve import KarhunenLoeve
from nipc.problem.noise.legendre import Legendre
from nipc.problem.noise.source import Source

BASES: dict[str, type[NoiseBasis]] = {
    basis.name: basis for basis in (Legendre, KarhunenLoeve, CompletedKarhunenLoeve)
}

__all__ = [
    "BASES",
    "CompletedKarhunenLoeve",
    "Forcing",
    "KarhunenLoeve",
    "Legendre",
    "NoiseBasis",
    "NoiseModel",
    "Source",
]
