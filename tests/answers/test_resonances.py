"""Resonances and separation through whole studies: one arc and a chain of arcs, known answers."""

from __future__ import annotations

import json

import numpy as np
import pytest
from answer_problems import Stepper, linear, solved

from nipc.problem.study import Study

TURN = 2 * np.pi


def study(arcs, end=10.0, terms="auto", **more):
    settings = {
        "title": "invented", "seed": 3, "tolerance": 0.02, "propagator": {"adapter": "ode"},
        "clock": {"end": end, "outputs": 41, "unit": "s", "period": 1.0},
        "state": [{"name": "x", "std": 0.01}, {"name": "v", "std": 0.01 * TURN}],
        "noise": [{"name": "hum", "intensity": 0.05, "terms": terms}],
        "quantity": [{"name": "x", "unit": "m"}],
        "expansion": {"degree": 1}, "chain": {"arcs": arcs}, "ensemble": {"members": 4096},
    }  # fmt: skip
    return Study(**settings | more)


OSCILLATOR = linear(np.array([[0.0, 1.0], [-(TURN**2), 0.0]]), np.array([[0.0], [1.0]]))


@pytest.mark.parametrize(("arcs", "terms"), [(1, 40), (20, "auto")])
def test_an_oscillator_resonates_and_does_not_separate(arcs, terms):
    """x'' + W^2 x = noise: kernel sin(W (t - s)) / W; neighbours keep their distance.

    2 |K|^2 is that of a sine of ten turns: sinc^2 about 1, of which int_-1^1 sinc^2 = 0.9028 is
    within a tenth; the other half of the sine adds of the order of 1 / (4 pi 10).
    """
    data = solved(study(arcs, terms=terms), Stepper(OSCILLATOR, 0.02))
    at = {"source": "hum", "quantity": "x"}
    assert float(data["resonance_frequency"].sel(at)) == pytest.approx(1.0, abs=0.01)
    share = float(data["resonance_share"].sel(at))
    assert share == pytest.approx(0.9028, abs=0.01)
    assert data["resonance_share_low"].sel(at) <= share <= data["resonance_share_high"].sel(at)
    bands = data["band_share"].sel(at)
    assert float(bands.sum()) == pytest.approx(1.0, abs=1e-3)
    best = int(np.argmax(bands.values))
    assert data["band_low"][best] < 1.0 < data["band_high"][best]
    assert np.isnan(data["band_share"].sel(source="start")).all()
    assert float(data["band_time"].sel(quantity="x")) == 10.0

    # whole turns, that is d x / d x0 = 1; in between the spread's axes are those of the noise too
    exponent = data["lyapunov_exponent"].sel(time=10.0).values
    np.testing.assert_allclose(exponent, 0.0, atol=1e-4)
    assert np.abs(data["lyapunov_exponent"].sel(time=slice(5.0, None))).max() < 0.01
    said = json.loads(data.attrs["findings"])
    assert [s for s in said if s.startswith("x resonates with the noise source 'hum': 90")]
    assert [s for s in said if s.startswith("Neighbouring motions do not move apart")]
    assert all("trust horizon" in s for s in said if "resonates" in s or "Neighbouring" in s)


@pytest.mark.parametrize(("arcs", "terms"), [(1, 10), (8, "auto")])
def test_the_rate_of_a_saddle(arcs, terms):
    """x'' = k^2 x: sigma_max = exp(k t) in units x, v / k; from t = 3 on the spreads are so.

    The spreads over the horizon are those of its end to exp(-2 k t): 1e-4 in the exponent.
    """
    saddle = linear(np.array([[0.0, 1.0], [0.64, 0.0]]), np.array([[0.0], [1.0]]))
    settings = study(arcs, 6.0, terms, clock={"end": 6.0, "outputs": 25, "unit": "s"})
    data = solved(settings, Stepper(saddle, 0.02))
    values = data["lyapunov_exponent"].sel(time=slice(1.0, None)).values
    np.testing.assert_allclose(values, 0.8, atol=2e-3)
    assert np.isnan(data["resonance_share"]).all()
    said = " ".join(json.loads(data.attrs["findings"]))
    assert "move apart exponentially" in said
    assert "0.8" in said.split("Lyapunov exponent")[1][:30]


def test_shear_is_not_exponential():
    """x' = v: d x(t) / d v(0) = t grows, but the exponent falls as ln t / t."""
    free = linear(np.array([[0.0, 1.0], [0.0, 0.0]]), np.array([[0.0], [1.0]]))
    data = solved(study(1, terms=4), Stepper(free, 0.1))
    median = data["lyapunov_exponent"].sel(level=0.5)
    assert float(median[-1]) * 10.0 < 3.0
    assert "do not move apart exponentially" in " ".join(json.loads(data.attrs["findings"]))


def test_a_certain_start_has_no_neighbours_in_one_arc_but_in_a_chain():
    """One arc knows gradients only in the start's directions; a chain from the first noise on."""
    certain = [{"name": "x", "mean": 1.0}, {"name": "v"}]
    one = solved(study(1, 2.0, terms=10, state=certain), Stepper(OSCILLATOR, 0.02))
    assert "lyapunov_exponent" not in one
    many = solved(study(10, 5.0, state=certain), Stepper(OSCILLATOR, 0.02))
    assert float(many["lyapunov_begin"]) == pytest.approx(0.5)
    assert abs(float(many["lyapunov_exponent"].sel(level=0.5)[-1])) < 0.02


def test_coloured_noise_drives_by_what_is_left_of_its_spectrum():
    """u of time constant 5 s: its spectrum at 1 / s over that at 0 is 1 / (1 + (2 pi 5)^2) = 1e-3.

    x'' + 2 g x' + W^2 x = u with g = 0.5: slow noise moves x by u / W^2, and the line is weak. The
    exact share below 0.3 / s by quadrature of the stationary spectrum.
    """
    tau, g = 5.0, 0.5
    rates = linear(np.array([[0.0, 1.0], [-(TURN**2), -2 * g]]), np.array([[0.0], [1.0]]))
    noise = [{"name": "hum", "intensity": 0.05, "kind": "gauss-markov", "time_constant": tau}]
    clock = {"end": 8.0, "outputs": 17, "unit": "s", "period": 1.0}
    data = solved(study(16, noise=noise, clock=clock), Stepper(rates, 0.025))
    f = np.linspace(0.0, 40.0, 400_001)
    w = TURN * f
    power = 1 / ((1 + (w * tau) ** 2) * ((TURN**2 - w**2) ** 2 + (2 * g * w) ** 2))
    bands, low = data["band_share"].sel(source="hum", quantity="x"), data["band_low"].values
    k = int(np.searchsorted(low, 0.3))
    exact = power[f < low[k]].sum() / power.sum()
    assert 0.3 < exact < 0.98
    # what came before the start counts by the value carried from there
    assert float(bands[:k].sum()) == pytest.approx(exact, abs=0.02)


def test_dipole_noise_drives_the_action_at_the_tune():
    """Betatron motion of tune Q under noisy dipoles: dJ/dt = p xi, p = -sqrt(2 J) sin(2 pi Q t).

    Only the noise about the tune (modulo whole turns) changes the action: common practice in rings,
    no source. The line is a cosine of Q T = 20.5 turns, of which int sinc^2 over +-2.05 is within a
    tenth.
    """
    tune, turns = 0.2052, 100.0
    turn = 2 * np.pi * tune
    rates = linear(np.array([[0.0, turn], [-turn, 0.0]]), np.array([[0.0], [1.0]]))
    settings = study(
        20, noise=[{"name": "dipole", "intensity": 1e-3}],
        clock={"end": turns, "outputs": 41, "unit": "turn"},
        state=[{"name": "x", "mean": 0.12, "std": 0.002}, {"name": "p", "std": 0.002}],
        quantity=[{"name": "action", "expression": "(x**2 + p**2) / 2"}],
    )  # fmt: skip
    data = solved(settings, Stepper(rates, 0.2))
    at = {"source": "dipole", "quantity": "action"}
    assert float(data["resonance_frequency"].sel(at)) == pytest.approx(tune, abs=0.001)
    inside = np.linspace(-0.1 * tune * turns, 0.1 * tune * turns, 4001)
    exact = np.sinc(inside) ** 2 @ np.full(4001, inside[1] - inside[0])
    assert float(data["resonance_share"].sel(at)) == pytest.approx(exact, abs=0.01)
    # noise: (1e-3 x 0.12)^2 100 / 2 = 7.2e-7; start: (0.12 x 0.002)^2 = 5.8e-8
    assert float(data["driver_first"].sel(at)[-1]) == pytest.approx(7.2 / 7.78, abs=0.03)
