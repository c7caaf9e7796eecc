"""The verdict on a spreading, for processes whose law is known."""

from __future__ import annotations

import numpy as np
import pytest

from nipc.answers.diffusion import VERDICTS, spreading_law
from nipc.answers.moments import MomentAccumulator

N, T = 6000, 121
TIMES = np.linspace(0.0, 10.0, T)
STEP = TIMES[1]


def batch_variance(paths: np.ndarray, batches: int = 100) -> np.ndarray:
    moments = MomentAccumulator(batches)
    moments.update(paths[:, :, None])
    return moments.batch_variance[:, :, 0]


def law(paths: np.ndarray, **more: float):
    return spreading_law(batch_variance(paths), TIMES, **more)


@pytest.fixture(scope="module")
def noise():
    return np.random.default_rng(11).standard_normal((N, T - 1)) * np.sqrt(STEP)


@pytest.fixture(scope="module")
def start():
    return np.random.default_rng(12).standard_normal((N, 1))


def walk(noise):
    return np.concatenate([np.zeros((N, 1)), noise.cumsum(axis=1)], axis=1)


@pytest.mark.parametrize("offset", [0.0, 0.1, 3.0])
def test_brownian_motion_is_diffusive_from_any_start(noise, start, offset):
    found = law(walk(noise) + offset * start)
    assert found.verdict == "diffusive"
    assert found.exponent.low < 1.0 < found.exponent.high
    assert found.coefficient.low < 0.5 < found.coefficient.high
    assert "linear" in found.reason


def test_relaxation_to_a_plateau_is_bounded(noise):
    paths = np.zeros((N, T))
    for k in range(T - 1):
        paths[:, k + 1] = paths[:, k] * np.exp(-STEP) + noise[:, k]
    found = law(paths)
    assert found.verdict == "bounded"
    plateau = STEP / (1.0 - np.exp(-2.0 * STEP))
    assert found.plateau.low < plateau < found.plateau.high
    assert np.isnan(found.exponent.value)


def test_a_plateau_not_yet_seen_is_not_called_bounded(noise):
    paths = np.zeros((N, T))
    for k in range(T - 1):
        paths[:, k + 1] = paths[:, k] * np.exp(-0.02 * STEP) + noise[:, k]
    assert law(paths).verdict != "bounded"


def test_constant_spread_is_bounded(start):
    found = law(np.repeat(start, T, axis=1))
    assert found.verdict == "bounded"
    assert "constant" in found.reason
    assert found.plateau.value == pytest.approx(start.var(), rel=0.02)


@pytest.mark.parametrize(
    ("power", "verdict"),
    [(0.5, "sub-diffusive"), (1.6, "super-diffusive"), (2.0, "super-diffusive")],
)
def test_powers(start, power, verdict):
    found = law(start * TIMES ** (power / 2))
    assert found.verdict == verdict
    assert found.exponent.value == pytest.approx(power, abs=0.02)
    assert found.exponent.low < power < found.exponent.high
    assert found.coefficient.low < 0.5 * start.var() < found.coefficient.high


def test_exponential_growth_and_its_saturation(start):
    found = law(1e-6 * start * np.exp(0.8 * TIMES))
    assert found.verdict == "exponential"
    assert found.rate.low < 0.8 < found.rate.high
    assert found.rate.high - found.rate.low < 0.02
    # a logistic variance, exactly
    growth = 1.0 / (1.0 + np.expm1(12.0) * np.exp(-2 * 1.5 * TIMES))
    found = law(start * np.sqrt(growth))
    assert found.verdict == "exponential"
    assert found.fits[0].law.name == "exponential, then a plateau"
    assert found.rate.value == pytest.approx(1.5, rel=0.02)


def test_cannot_tell(noise, start):
    # an oscillation of the variance follows none of the laws
    found = law(start * (2.0 + np.sin(3 * TIMES)))
    assert found.verdict == "cannot tell"
    assert "no law follows" in found.reason
    # few members: diffusive from a wide start, the growth lost in sampling
    few = batch_variance(0.3 * walk(noise)[:400] + 2.0 * start[:400], 40)
    found = spreading_law(few, TIMES)
    assert found.verdict in ("cannot tell", "bounded")
    found = spreading_law(few[:10], TIMES)
    assert found.verdict == "cannot tell"
    assert "too few" in found.reason
    found = spreading_law(few[:, :4], TIMES[:4])
    assert found.verdict == "cannot tell"


def test_no_spread(noise):
    assert law(np.ones((N, T))).verdict == "no spread"


def test_origin_of_averaged_quantities(noise):
    """Times that begin after the start: the clock of the growth is the start's."""
    late = TIMES >= 2.0
    found = spreading_law(batch_variance(walk(noise))[:, late], TIMES[late], origin=0.0)
    assert found.verdict == "diffusive"
    assert found.exponent.low < 1.0 < found.exponent.high
    assert found.coefficient.value == pytest.approx(0.5, rel=0.05)


def test_intervals_of_correlated_variances_cover():
    """25 ensembles, both numbers: 50 intervals of 95 % miss at most 7 (false alarm 1 %)."""
    rng = np.random.default_rng(13)
    misses = 0
    for _ in range(25):
        steps = rng.standard_normal((2000, T - 1)) * np.sqrt(STEP)
        paths = np.concatenate([np.zeros((2000, 1)), steps.cumsum(axis=1)], axis=1)
        found = law(paths)
        assert found.verdict == "diffusive"
        misses += not found.exponent.low <= 1.0 <= found.exponent.high
        misses += not found.coefficient.low <= 0.5 <= found.coefficient.high
        # independent values would claim 1 / sqrt(2000 / 2 x 121) = 0.3 %; the truth is nearer 2 %
        assert found.coefficient.high - found.coefficient.low > 0.01
    assert misses <= 7


def test_every_verdict_is_named():
    assert set(VERDICTS) >= {"bounded", "diffusive", "exponential", "cannot tell"}
