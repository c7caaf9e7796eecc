"""The JSON Schema of study files, judged by an independent validator (jsonschema)."""

from __future__ import annotations

import json
import tomllib
from pathlib import Path

import pytest
from jsonschema import Draft202012Validator

from nipc.study_schema import study_schema

ROOT = Path(__file__).parents[1]
STUDIES = sorted((ROOT / "examples").glob("*/*.toml"))


@pytest.fixture(scope="module")
def judge() -> Draft202012Validator:
    schema = study_schema()
    Draft202012Validator.check_schema(schema)
    return Draft202012Validator(schema)


def faults(judge, text: str) -> list[str]:
    found = judge.iter_errors(tomllib.loads(text))
    return ["/".join(map(str, fault.absolute_path)) for fault in found]


@pytest.mark.parametrize("study", STUDIES, ids=lambda path: path.parent.name)
def test_examples_fit_the_schema(judge, study):
    assert faults(judge, study.read_text()) == []


@pytest.mark.parametrize("flavour", ["function", "ode", "executable"])
def test_starters_fit_the_schema_that_is_written_beside_them(command, tmp_path, flavour):
    assert command("new", tmp_path / "a", "--flavour", flavour).code == 0
    text = (tmp_path / "a" / "study.toml").read_text()
    first = text.splitlines()[0]
    assert first.startswith("#:schema ")
    own = json.loads((tmp_path / "a" / first.removeprefix("#:schema ")).read_text())
    assert own == study_schema()
    assert faults(Draft202012Validator(own), text) == []


@pytest.mark.parametrize(
    ("old", "new", "place"),
    [
        ("end = 28.0", 'end = "28.0"', "clock/end"),
        ("outputs = 113", "output = 113", "clock"),
        ('name = "equinoctial"', 'name = "equinoctal"', "chart"),
        ("intensity = 2.0e-8", "intensity = -2.0e-8", "noise/0/intensity"),
        ('adapter = "ode"', 'adapter = "oed"', "propagator/adapter"),
        ('method = "rk8"', 'method = "rk9"', "propagator"),
        ("box = [-0.12, 0.12]", "box = [-0.12]", "quantity/1/box"),
        ("seed = 20260", "sede = 20260", ""),
    ],
)
def test_what_is_wrong_does_not_fit(judge, old, new, place):
    text = (ROOT / "examples" / "slot_watch" / "study.toml").read_text()
    assert old in text
    assert place in faults(judge, text.replace(old, new, 1))


def test_the_settings_of_every_adapter_are_there(judge):
    schema = judge.schema
    found = schema["$defs"]["PropagatorSettings"]["properties"]["adapter"]["enum"]
    assert {"function", "ode", "map", "library", "executable", "persistent", "kicks"} <= set(found)
    for name in found:
        assert schema["$defs"][f"propagator-{name}"]["properties"]["adapter"] == {"const": name}
    # kicks around another adapter: both tables are held to their own settings
    inner = {"adapter": "function", "function": "motion:propagate"}
    kick = {"source": "force", "component": "v"}
    for function, good in (("motion:propagate", True), (3, False)):
        table = {"adapter": "kicks", "propagator": inner | {"function": function}, "kick": [kick]}
        part = {**schema["$defs"]["PropagatorSettings"], "$defs": schema["$defs"]}
        assert Draft202012Validator(part).is_valid(table) is good


def test_it_is_printed_and_written(command, tmp_path):
    printed = command("schema")
    assert printed.code == 0
    assert json.loads(printed.out) == study_schema()
    assert command("schema", tmp_path / "s.json").out == ""
    assert (tmp_path / "s.json").read_text() == printed.out
    assert command("schema", tmp_path / "none" / "s.json").code == 2
