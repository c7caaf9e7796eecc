"""How many, why, and where."""

import numpy as np
from runs_samples import RAISES, Sample, sample_batch

from nipc.runs.engine import Engine
from nipc.runs.failures import report
from nipc.runs.ledger import Ledger


def failures_of(germ, bad, reasons=None):
    kinds = ["crash" if flag else None for flag in bad]
    reasons = reasons or ["gone" if flag else None for flag in bad]
    return report(~bad, kinds, reasons, germ, [f"z{k}" for k in range(germ.shape[1])])


def test_like_reasons_are_counted_together_whatever_their_numbers():
    germ = np.zeros((5, 1))
    reasons = [
        "no step at t = 1.25e-3",
        "no step at t = 7",
        None,
        "not a state",
        "no step at t = -2.",
    ]
    found = failures_of(germ, np.array([r is not None for r in reasons]), reasons)
    assert [(g.count, g.example) for g in found.groups] == [
        (3, "no step at t = 1.25e-3"), (1, "not a state"),
    ]  # fmt: skip
    assert str(found).startswith("4 of 5 runs failed: 3 x crash: no step at t = 1.25e-3; 1 x crash")


def test_a_region_is_named():
    """P(z > 1.5) = 0.067 of 1,000: all failed runs lie beyond all good ones in z1."""
    germ = np.random.default_rng(3).normal(size=(1000, 4))
    found = failures_of(germ, germ[:, 1] > 1.5)
    assert (found.regions[0].name, found.regions[0].side) == ("z1", "high")
    assert found.regions[0].share == 1.0
    assert "They lie at high z1" in str(found)


def test_failures_far_out_are_named():
    germ = np.random.default_rng(4).normal(size=(1000, 3))
    found = failures_of(germ, np.linalg.norm(germ, axis=1) > 2.5)
    assert (found.regions[0].name, found.regions[0].side) == ("distance from the centre", "high")


def test_failures_without_pattern_are_given_none():
    """400 tries at a stated false-alarm probability of 1e-3: more than 4 would be a surprise of
    probability 6e-5 (Poisson with mean 0.4).
    """
    rng = np.random.default_rng(5)
    alarms = 0
    for _ in range(400):
        germ = rng.normal(size=(100, 3))
        alarms += bool(failures_of(germ, rng.random(100) < 0.4).regions)
    assert alarms <= 4


def test_coordinates_that_never_vary_are_left_out():
    germ = np.c_[np.zeros(200), np.random.default_rng(6).normal(size=200)]
    found = failures_of(germ, germ[:, 1] < -1.0)
    assert found.regions[0].name == "z1"


def test_the_engine_says_where(tmp_path):
    batch = sample_batch(300)
    far = np.flatnonzero(batch.forcing.coefficients[:, 2] < -1.0)
    batch = sample_batch(300, kinds=dict.fromkeys(far.tolist(), RAISES))
    with Ledger.open(tmp_path) as ledger, Engine(Sample(), ledger, backend="inline") as engine:
        found = engine.run(batch, "arc 1").failures
    assert found.failed == far.size
    assert ("push[3]", "low") in [(region.name, region.side) for region in found.regions]
