"""The probe: silent on a sound propagator, and finds each of the usual mistakes."""

import numpy as np
import pytest
from probe_samples import Faulty, probe_batch

from nipc.runs.probe import probe


def findings(fault, **more):
    report = probe(Faulty(fault), probe_batch(), ("x", "v"), **more)
    return {f.topic: f for f in report.findings}, report


def test_nothing_is_found_on_a_sound_propagator():
    found, report = findings("")
    assert report.good, str(report)
    assert set(found) == {
        "time", "start", "deterministic", "noise push", "noise wind", "restart", "digits"
    }  # fmt: skip
    assert found["deterministic"].found.endswith("bit for bit.")
    assert "twice the noise moves x 2 times" in found["noise push"].found
    assert report.seconds > 0


def test_a_batch_is_asked_too():
    report = probe(Faulty("", vectorised=True), probe_batch(), ("x", "v"))
    assert report.good, str(report)
    assert "batch" in {f.topic for f in report.findings}


FAULTS = {
    "five digits": ("digits", "comes with 5 digits"),
    "noise unheard": ("noise wind", "the motion does not change with it"),
    "noise squared": ("noise push", "moves x 4 times as far, the opposite noise 1 times"),
    "wrong start": ("start", "v differs by"),
    "own noise": ("deterministic", "the same runs gave"),
    "state not restored": ("restart", "a restart from the middle reproduces"),
    "time not restored": ("restart", "a restart from the middle reproduces"),
    "fails": ("runs", "4 of 4 runs failed: the beam is off"),
    "crashes": ("runs", "4 of 4 runs failed: its process left with exit code 13"),
}


@pytest.mark.parametrize("fault", FAULTS)
def test_each_mistake_is_found_and_nothing_is_said_without_advice(fault):
    topic, said = FAULTS[fault]
    found, report = findings(fault)
    assert not report.good
    assert not found[topic].good
    assert said in found[topic].found, str(report)
    assert found[topic].advice


def test_a_batch_whose_runs_disturb_each_other():
    report = probe(Faulty("mixing", vectorised=True), probe_batch(), ("x", "v"))
    (finding,) = [f for f in report.findings if f.topic == "batch"]
    assert not finding.good


def test_a_wrong_unit_shows_as_a_factor():
    found, _ = findings("thousandfold")
    text = found["noise push"].found
    factor = float(text.split("moved v by ")[1].split(" ")[0])
    np.testing.assert_allclose(factor, 1000, rtol=0.2)


class Kicked(Faulty):
    """As one whose kicks converge with eight legs."""

    def __init__(self, legs):
        super().__init__("")
        self.legs = legs

    def legs_needed(self, batch):
        return 8


@pytest.mark.parametrize(
    ("legs", "good", "said"),
    [
        (None, True, "Say legs = 8 in place of"),
        (4, False, "Say legs = 8, or allow"),
        (8, True, "the study says 8."),
    ],
)
def test_too_few_legs_are_found(legs, good, said):
    report = probe(Kicked(legs), probe_batch(), ("x", "v"))
    (finding,) = [f for f in report.findings if f.topic == "legs"]
    assert finding.good is good
    assert said in f"{finding.found} {finding.advice}"


def test_a_wrong_sign_shows_in_the_factor():
    found, _ = findings("wrong sign")
    text = found["noise push"].found
    factor = float(text.split("moved v by ")[1].split(" ")[0])
    np.testing.assert_allclose(factor, -1.0, rtol=0.2)
    assert "may be a wrong sign" in text


class Tabled(Faulty):
    """As one whose noise comes as a table."""

    def __init__(self, error):
        super().__init__("")
        self.error, self.asked = error, None

    def table_error(self, model):
        self.asked = model
        return self.error


@pytest.mark.parametrize(("error", "good"), [(1e-3, True), (0.08, False)])
def test_a_table_of_noise_that_is_too_coarse_is_found(error, good):
    batch, propagator = probe_batch(), Tabled(error)
    report = probe(propagator, batch, ("x", "v"), tolerance=0.05)
    (finding,) = [f for f in report.findings if f.topic == "table"]
    assert finding.good is good
    assert f"an error of {error:.1g} of its variance" in finding.found
    assert propagator.asked is batch.forcing.model
