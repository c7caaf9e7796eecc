"""`nipc whatif`, `nipc sweep` and `nipc allowance` on the command line."""

from __future__ import annotations

import json

import pytest
from asked_studies import BROWNIAN, brownian


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    from nipc.workflow import run

    made = brownian(tmp_path_factory.mktemp("commanded"))
    run(made, backend="inline")
    return made.folder / "study.toml"


def fits(text):
    """Only a path to copy may make a line long."""
    return all(len(line) <= 80 for line in text.splitlines() if "nipc report" not in line)


def test_whatif(command, study):
    done = command("whatif", study, "--scale", "push=0.5", "--scale", "start=2", "--box", "x=-1:")
    assert done.code == 0
    assert fits(done.out)
    for words in ("push x 0.5, start x 2", "box of x -1 to inf", "now", "as the study stands",
                  "P(stayed inside)", "No run was made", "still: no spread is left"):  # fmt: skip
        assert words in " ".join(done.out.split()) or words in done.out, words
    told = json.loads(command("whatif", study, "--scale", "push=0.5", "--json").out)
    now, was = told["quantities"]["x"]["figures"]["std"]
    # variances 0.09 + 0.25 s^2 + 0.04
    assert now[0] == pytest.approx((0.09 + 0.0625 + 0.04) ** 0.5, rel=1e-6)
    assert was[0] == pytest.approx((0.09 + 0.25 + 0.04) ** 0.5, rel=1e-6)
    assert told["quantities"]["still"]["figures"]["total share of push"][0][0] is None
    at = json.loads(command("whatif", study, "--at", "2", "--json").out)
    assert at["time"] == 2.0


def test_joint_boxes(command, tmp_path):
    from nipc.workflow import run

    text = BROWNIAN.replace('expression = "y**2"', 'expression = "y**2"\nbox = [-1.0, 0.25]')
    text = text.replace(
        "[ensemble]", '[[joint_box]]\nname = "both"\nquantities = ["x", "square"]\n[ensemble]'
    )
    run(brownian(tmp_path, text), backend="inline")
    told = json.loads(
        command("whatif", tmp_path / "study.toml", "--scale", "push=0.5", "--json").out
    )
    now, was = told["joint"]["both"]["figures"]["inside_probability"]
    alone = told["quantities"]["square"]["figures"]["inside_probability"]
    assert was[0] <= alone[1][0]
    assert was[0] < now[0] <= alone[0][0]
    done = command("whatif", tmp_path / "study.toml")
    assert "both" in done.out
    assert fits(done.out)


@pytest.mark.parametrize(
    ("words", "told"),
    [
        (("--scale", "push"), "it reads NAME=FACTOR"),
        (("--scale", "push=much"), "it reads NAME=FACTOR"),
        (("--scale", "wind=2"), "there are: push, pull, start"),
        (("--box", "x=1"), "it reads QUANTITY=LOW:HIGH"),
        (("--box", "x=2:1"), "must lie below"),
        (("--members", "50"), "needs 119 members"),
    ],
)
def test_bad_whatifs(command, study, words, told):
    done = command("whatif", study, *words)
    assert done.code == 2
    assert told in done.err


def test_sweep(command, study):
    done = command("sweep", study, "--scales", "0.5,1,2")
    assert done.code == 0
    assert fits(done.out)
    assert "scaled: push, pull" in done.out
    assert "square: from scale 0.5 on" in done.out
    told = json.loads(command("sweep", study, "--scales", "0,1", "--source", "pull", "--json").out)
    assert told["quantities"]["x"]["std"] == pytest.approx([0.34**0.5, 0.38**0.5], rel=1e-6)
    assert command("sweep", study, "--scales", "a,b").code == 2
    assert "there are" in command("sweep", study, "--source", "wind").err


def test_allowance(command, study):
    done = command("allowance", study, "--target", "0.9", "--confirm", "--runs", "2")
    assert done.code == 0
    assert fits(done.out)
    for words in (
        "in the box at the end",
        "all noise together",
        "of 2 direct runs 0",
        "nipc report",
    ):
        assert words in " ".join(done.out.split()), words
    told = json.loads(command("allowance", study, "--target", "0.99999", "--json").out)
    assert told["sources"]["pull"]["x"]["allowance_scale"] is None
    assert any("no strength of pull alone" in s for s in told["remarks"])
    assert command("allowance", study, "--target", "2").code == 2
    assert "there are boxes of: x" in command("allowance", study, "--box-of", "square").err


def test_nothing_run_yet(command, tmp_path):
    made = brownian(tmp_path)
    for name in ("whatif", "sweep", "allowance"):
        done = command(name, made.folder / "study.toml")
        assert done.code == 2
        assert "nipc run" in done.err
    assert not (tmp_path / "study.work").exists()
