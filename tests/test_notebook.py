"""How objects show themselves in a notebook: as HTML in which nothing of the user's is markup."""

from __future__ import annotations

import json
from html.parser import HTMLParser

import numpy as np
import pytest
import xarray as xr

import nipc
from nipc import markup
from nipc.answers.result import Result
from nipc.problem.study import Study

HOSTILE = "<script>alert('x')</script> & \"q\""
STUDY = {
    "title": HOSTILE,
    "propagator": {"adapter": "ode", "rhs": "motion:rates"},
    "clock": {"end": 2.0, "outputs": 3},
    "state": [{"name": "x", "unit": "<b>m</b>", "mean": 1.0, "std": 0.5}],
    "noise": [{"name": "f", "unit": "<i>", "intensity": 1.0}],
    "quantity": [{"name": "<u>x", "component": "x", "unit": "<s>", "box": [-1.0, 2.0]}],
}
KNOWN = {"div", "p", "strong", "table", "thead", "tbody", "tr", "th", "td", "br", "ul", "li",
         "details", "summary"}  # fmt: skip


class Reader(HTMLParser):
    """The tags of a text, whether they close, and its words."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: set[str] = set()
        self.open: list[str] = []
        self.words = ""
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: object) -> None:
        self.tags.add(tag)
        if tag != "br":
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        self.words += data + " "


def read(text: str) -> str:
    reader = Reader(text)
    assert reader.open == []
    assert reader.tags <= KNOWN
    return reader.words


def test_tables_escape_every_cell():
    words = read(markup.table([("<a>", "<b>\n&", 3)], ("<c>", "d", "e")))
    assert words.split() == ["<c>", "d", "e", "<a>", "<b>", "&", "3"]


def test_a_study_shows_what_it_is_made_of():
    words = read(Study.model_validate(STUDY)._repr_html_())
    assert HOSTILE in words
    assert "x = 1 ± 0.5 <b>m</b>" in words
    assert "<u>x, box -1 to 2 <s>" in words


def test_a_plan_shows_its_runs():
    plan = nipc.plan(Study.model_validate(STUDY))
    words = " ".join(read(plan._repr_html_()).split())
    assert HOSTILE in words
    assert f"runs together {plan.total_runs}" in words
    many = Study.model_validate(STUDY | {"chain": {"arcs": 4}})
    assert "runs together at least " in " ".join(read(nipc.plan(many)._repr_html_()).split())


@pytest.mark.parametrize(
    ("paths", "spread", "mark"),
    [(2.0, 2.0, ""), (1.0, 2.0, "†"), (1.0, 1.0, "‡"), (np.nan, np.nan, "‡")],
)
def test_a_result_marks_what_is_past_its_trust_horizon(tmp_path, paths, spread, mark):
    over_time = ("quantity", "time")
    data = xr.Dataset(
        {
            "mean": (over_time, [[1.0, 1.5, 1.23456]]),
            "std": (over_time, [[0.5, 0.5, 0.5]]),
            "survival_probability": (over_time, [[1.0, 0.9, 0.75]]),
            "trust_horizon": (("quantity",), [paths]),
            "trust_horizon_distribution": (("quantity",), [spread]),
            "arc_start": (("arc",), [0.0, 1.0]),
            "arc_end": (("arc",), [1.0, 2.0]),
            "arc_note": (("arc",), ["<h1>", "halved"]),
        },
        coords={
            "time": ("time", [0.0, 1.0, 2.0], {"units": "s"}),
            "quantity": ["<u>x"],
            "quantity_unit": ("quantity", ["<s>"]),
        },
        attrs={"title": HOSTILE, "findings": json.dumps(["It <em>stays</em>."])},
    )
    words = read(Result(data, tmp_path)._repr_html_())
    assert HOSTILE in words
    assert f"1.235 ± 0.5 <s>{mark} " in words
    assert f"0.75{mark} " in words
    assert ("horizon of single paths" in words) == (mark == "†")
    assert ("do not rely" in words) == (mark == "‡")
    assert "It <em>stays</em>." in words
    assert "halved" in words


def test_a_chain_shows_its_arcs(tmp_path):
    arcs = {
        "start": [0.0, 1.0], "end": [1.0, 2.0], "degree": [1, 2], "terms": [5, 15], "runs": [9, 21],
        "error": [1e-3, 2e-3], "note": ["", HOSTILE],
    }  # fmt: skip
    data = xr.Dataset({f"arc_{name}": ("arc", values) for name, values in arcs.items()})
    chain = Result(data.assign(other=("time", [1.0])), tmp_path).chain
    assert len(chain) == 2
    assert set(chain.dataset.data_vars) == {f"arc_{name}" for name in arcs}
    words = read(chain._repr_html_())
    assert "2 arcs" in words
    assert HOSTILE in words
