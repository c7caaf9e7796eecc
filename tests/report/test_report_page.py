"""The page: complete, self-contained, safe with hostile names, and honest about its limits."""

from __future__ import annotations

import json
import re
import subprocess
import sys
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from nipc.report import page, write_page

RESULTS = ("slot", "hard", "minimal")


class Reader(HTMLParser):
    """Elements, their attributes, and the text of those asked for."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.texts: list[tuple[str, str]] = []
        self._open: list[str] = []
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))
        self._open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        while self._open and self._open.pop() != tag:
            pass

    def handle_data(self, data: str) -> None:
        self.texts.append((self._open[-1] if self._open else "", data))

    def text(self) -> str:
        words = "".join(data for tag, data in self.texts if tag not in ("script", "style"))
        return re.sub(r"[ \n]+", " ", words)


@pytest.mark.parametrize("result", RESULTS)
def test_the_page_needs_nothing_from_outside(result: str, pages: dict[str, str]) -> None:
    reader = Reader(pages[result])
    for tag, attributes in reader.elements:
        assert tag not in ("iframe", "object", "embed", "base"), tag
        for name in ("src", "href", "srcset", "action", "data", "poster"):
            value = attributes.get(name)
            assert value is None or value.startswith(("#", "data:,")), (tag, name, value)
    assert not re.search(r"@import|url\((?!#)|fetch\(|XMLHttpRequest|WebSocket", pages[result])
    policy = [a["content"] for t, a in reader.elements if a.get("http-equiv")]
    assert policy
    assert str(policy[0]).startswith("default-src 'none'")


@pytest.mark.parametrize("result", RESULTS)
def test_the_page_is_small_and_well_formed(result: str, pages: dict[str, str]) -> None:
    assert len(pages[result].encode()) < 5e6
    reader = Reader(pages[result])
    ids = [a["id"] for _, a in reader.elements if "id" in a]
    assert len(ids) == len(set(ids))
    markup = re.sub(r"<script.*?</script>", "", pages[result], flags=re.DOTALL)
    referred = set(re.findall(r'url\(#([^)]+)\)|href="#([^"]+)"', markup))
    wanted = {one or other for one, other in referred}
    assert wanted <= set(ids)
    for tag, attributes in reader.elements:
        if tag == "label":
            assert attributes["for"] in ids
        if tag == "div" and attributes.get("class") == "plot" and "id" not in attributes:
            assert attributes["role"] == "img"
            assert attributes["aria-label"]


def test_a_large_result_still_makes_a_small_page() -> None:
    """Nine quantities at 3000 times."""
    rng = np.random.default_rng(3)
    times = np.linspace(0, 10, 3000)
    walks = np.cumsum(rng.standard_normal((9, 3000)), axis=1)
    levels = [0.025, 0.25, 0.5, 0.75, 0.975]
    spread = 1 + times
    data = {
        "mean": (("quantity", "time"), walks),
        "std": (("quantity", "time"), np.tile(spread, (9, 1))),
        "quantile": (
            ("level", "quantity", "time"),
            np.stack([walks + z * spread for z in (-2, -0.7, 0, 0.7, 2)]),
        ),
        "driver_first": (("source", "quantity", "time"), rng.uniform(0, 0.1, (8, 9, 3000))),
        "check_error": (("quantity", "time"), rng.uniform(0.001, 0.02, (9, 3000))),
        "trust_horizon": (("quantity",), np.full(9, 10.0)),
    }
    dataset = xr.Dataset(
        data,
        coords={
            "time": times,
            "quantity": [f"q{i}" for i in range(9)],
            "level": levels,
            "source": [f"s{j}" for j in range(8)],
        },
    )
    assert len(page.render(dataset).encode()) < 5e6


def test_hostile_names_stay_text(pages: dict[str, str]) -> None:
    reader = Reader(pages["hard"])
    tags = [tag for tag, _ in reader.elements]
    assert tags.count("img") == 0
    kinds = [a.get("type") for t, a in reader.elements if t == "script"]
    assert kinds.count(None) == 1  # the page's own, and no other that would run
    assert not [a for _, a in reader.elements for name in a if name.startswith("on")]
    titles = [data for tag, data in reader.texts if tag == "title"]
    assert "".join(titles) == "</title><script>alert('title')</script> $\\alpha$"
    words = reader.text()
    assert "The spread of x grows <script>alert('f')</script> e-fold." in words
    assert "title = '</pre><script>alert(1)</script>'" in words
    for script in re.findall(
        r'<script type="application/json"[^>]*>(.*?)</script>', pages["hard"], re.DOTALL
    ):
        json.loads(script)


def test_the_headline_comes_first_and_says_it_in_numbers(pages: dict[str, str]) -> None:
    words = Reader(pages["slot"]).text()
    order = [
        words.index(each)
        for each in (
            "trust horizon 9.2 d It drives 66 % of the spread of longitude.",
            "mean ± std at 28",
            "Figure 1.",
            "An invented study",
        )
    ]
    assert order == sorted(order)
    sections = [data for tag, data in Reader(pages["slot"]).texts if tag == "h2"]
    assert sections == [
        "Where it goes",
        "Stays or leaves",
        "What drives it",
        "What if",
        "Kind of spreading",
        "How far to trust it",
        "What it cost",
        "Values",
        "The study",
        "Provenance",
        "Cautions",
    ]
    assert "75.022 ± 0.034\u202fdeg‡" in words
    assert "0.802‡0.767 to 0.832" in words
    assert "tangential‡86\u202f% of the variance" in words
    assert "super-diffusive" in words
    assert "9.2\u202fddistribution: 21\u202fd" in words
    assert "2\u202f094 runs of the propagator over 56 arcs" in words
    assert "45.4 run-equivalents of a budget of 200" in words


def test_cautions_are_those_of_the_trade_and_of_this_result(pages: dict[str, str]) -> None:
    words = Reader(pages["slot"]).text()
    for each in (
        "statistical estimates from a surrogate",
        "valid to the trust horizon shown",
        "flight safety, collision avoidance, re-entry",
        "beam or personnel safety",
        "responsible authority",
        "licensed practice under the rules that apply",
        "Verify with direct runs",
    ):
        assert each in words
    assert (
        "longitude: single paths agree with direct runs up to 9.2\u202fd, its distribution up "
        "to 21\u202fd" in words
    )
    assert "watched every 0.0833\u202fd" in words
    assert "not checked against direct runs" in Reader(pages["minimal"]).text()


def test_values_past_the_horizon_carry_their_mark(slot: xr.Dataset) -> None:
    from nipc.report import tables

    table = tables.moments(slot, "longitude")
    marks = {float(row[0].split("\u202f")[0]): row[0].split("\u202f")[1:] for row in table.rows}
    assert {t: m for t, m in marks.items() if t <= 9.2} == {0.0: [], 3.5: [], 7.0: []}
    assert marks[10.5] == marks[21.0] == ["†"]
    assert marks[24.5] == marks[28.0] == ["‡"]


def test_what_is_missing_is_left_out(pages: dict[str, str]) -> None:
    words = Reader(pages["minimal"]).text()
    for absent in ("Stays or leaves", "What drives it", "What it cost", "What if", "The study"):
        assert absent not in words
    assert "5 ± 18\u202fm" in words  # sqrt(1000 / 3) = 18.3
    assert "The result does not say how it was made." in words


def test_broken_attributes_do_no_harm(minimal: xr.Dataset) -> None:
    broken = minimal.assign_attrs(findings="{not json", versions="[]", failures="null", title="")
    assert "A study" in Reader(page.render(broken)).text()


def test_a_result_read_back_from_disk_gives_the_same_page(
    slot: xr.Dataset, pages: dict[str, str], tmp_path: Path
) -> None:
    slot.to_netcdf(tmp_path / "results.nc", engine="h5netcdf")
    with xr.open_dataset(tmp_path / "results.nc", engine="h5netcdf") as back:
        again = page.render(back.load())
    assert again == pages["slot"]


def test_the_page_is_written_whole(minimal: xr.Dataset, tmp_path: Path) -> None:
    path = write_page(minimal, tmp_path / "page.html")
    assert path == tmp_path / "page.html"
    assert path.read_text("utf-8").rstrip().endswith("</html>")
    assert [each.name for each in tmp_path.iterdir()] == ["page.html"]


def test_report_loads_matplotlib_late() -> None:
    code = "import sys, nipc.report; print({'matplotlib', 'jinja2'} & set(sys.modules))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "set()"


def test_any_one_variable_may_be_missing(slot: xr.Dataset) -> None:
    """All of the page but its drawings, for a result without each variable in turn."""
    from nipc.report import headline, panel, provenance, tables
    from nipc.report.figures import catalogue

    for name in slot.data_vars:
        less = slot.drop_vars(str(name))
        heads = headline.columns(less)
        assert all(len(row.cells) == len(heads) for row in headline.rows(less)), name
        for make in (tables.exits, tables.allowances, tables.arcs, tables.laws, tables.joint_boxes):
            made = make(less)
            assert made is None or all(len(row) == len(made.heads) for row in made.rows), name
        assert tables.moments(less, "longitude").rows
        assert provenance.cautions(less)
        assert (panel.stored(less) is None) == str(name).startswith("panel")
        assert len(list(catalogue(less))) > 15, name


def test_a_motion_that_ended_is_drawn_as_far_as_it_goes(slot: xr.Dataset) -> None:
    """Every member of longitude ended after day 10: NaN from there on, and no warning."""
    import warnings

    from nipc.report.figures import catalogue

    ended = slot.copy(deep=True)
    for variable in ended.data_vars.values():
        if {"time", "quantity"} <= set(variable.dims):
            variable[{"quantity": 1, "time": slice(120, None)}] = np.nan
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for entry in catalogue(ended):
            if "longitude" in entry.of:
                entry.draw()
