"""The what-if panel: its arithmetic against closed forms, and what the page keeps of it."""

from __future__ import annotations

import base64
from typing import Any

import numpy as np
import pytest
import xarray as xr

from nipc.report import panel


def dataset_of(terms: np.ndarray, powers: list[list[int]]) -> xr.Dataset:
    """A result that keeps only a panel: terms (term, member, quantity, time)."""
    times = np.linspace(0.0, 1.0, terms.shape[3])
    names = [f"q{i}" for i in range(terms.shape[2])]
    whole = terms.sum(axis=0)
    return xr.Dataset(
        {
            "mean": (("quantity", "time"), whole.mean(axis=0)),
            "std": (("quantity", "time"), whole.std(axis=0)),
            "panel_contribution": (("panel_term", "panel_member", "quantity", "panel_time"), terms),
            "panel_power": (("panel_term", "source"), powers),
        },
        coords={
            "time": times,
            "panel_time": times,
            "quantity": names,
            "source": [f"s{j}" for j in range(len(powers[0]))],
        },
    )


def unpack(kept: dict[str, Any]) -> np.ndarray:
    """Read the page's numbers as its script does: (term, member, quantity, time)."""
    terms, quantities = len(kept["powers"]), len(kept["quantities"])
    shape = terms, quantities, len(kept["times"])
    offset, step = (np.reshape(kept[name], shape) for name in ("offset", "step"))
    numbers = np.frombuffer(base64.b64decode(kept["blob"]), "<i2").astype(float)
    values = np.repeat(offset[..., None], kept["members"], axis=-1)
    size, at = shape[2] * kept["members"], 0
    for term, quantity in np.argwhere(kept["spread"]):
        block = numbers[at : at + size].reshape(shape[2], kept["members"])
        values[term, quantity] += step[term, quantity][:, None] * block
        at += size
    assert at == len(numbers)
    return values.transpose(0, 3, 1, 2)


def product_panel() -> panel.Panel:
    """Y = 2 + s1 a + 3 s2 b + s1 s2 a b with a, b = ±1 in all combinations: exact moments."""
    a, b = np.array([1, 1, -1, -1.0]), np.array([1, -1, 1, -1.0])
    terms = np.stack([2 + 0 * a, a, 3 * b, a * b])[:, :, None, None]
    return panel.Panel(terms, np.array([[0, 0], [1, 0], [0, 1], [1, 1]]), np.zeros(1), 0)


def test_shares_of_a_product_in_closed_form() -> None:
    """V = s1^2 + 9 s2^2 + (s1 s2)^2; first shares s1^2/V, 9 s2^2/V; totals add the product."""
    for s1, s2 in ((1.0, 1.0), (2.0, 0.5), (0.0, 1.0)):
        found = panel.answer(product_panel(), np.array([s1, s2]), 0)
        parts = s1**2, 9 * s2**2, (s1 * s2) ** 2
        whole = sum(parts)
        assert found.mean[0] == pytest.approx(2.0)
        assert found.std[0] == pytest.approx(np.sqrt(whole))
        assert found.first[:, 0] == pytest.approx([parts[0] / whole, parts[1] / whole])
        assert found.total[:, 0] == pytest.approx(
            [(parts[0] + parts[2]) / whole, (parts[1] + parts[2]) / whole]
        )


def test_inside_counts_members_with_the_edges_in() -> None:
    """Members at scale 1: 7, -1, 3, -1; in [-1, 3] are three of four."""
    found = panel.answer(product_panel(), np.ones(2), 0, low=-1.0, high=3.0)
    assert found.inside[0] == 0.75
    assert panel.answer(product_panel(), np.ones(2), 0).inside[0] == 1.0


def test_without_any_noise_nothing_spreads_and_shares_are_undefined() -> None:
    found = panel.answer(product_panel(), np.zeros(2), 0)
    assert found.quantiles[:, 0] == pytest.approx(np.full(5, 2.0))
    assert found.std[0] == 0
    assert np.isnan(found.first).all()
    assert np.isnan(found.total).all()


def test_the_slot_at_scale_one_is_the_result_itself(slot: xr.Dataset) -> None:
    kept = panel.read(slot)
    assert kept is not None
    near = [int(np.argmin(np.abs(slot["time"].values - t))) for t in kept.times]
    for index in range(3):
        found = panel.answer(kept, np.ones(3), index)
        expected = slot["quantile"].isel(quantity=index, time=near).values
        assert found.quantiles == pytest.approx(expected, rel=1e-12)
        total = slot["driver_total"].isel(quantity=index, time=near).values
        assert found.total == pytest.approx(total, rel=1e-9, nan_ok=True)


def test_sixteen_bits_keep_each_contribution_to_half_a_step(slot: xr.Dataset) -> None:
    kept = panel.read(slot)
    stored = panel.stored(slot)
    assert kept is not None
    assert stored is not None
    read = unpack(stored)
    spread = np.ptp(kept.terms, axis=1, keepdims=True)
    # half a step is spread / 4 / 32767; offsets keep twelve digits, steps nine (of up to 32767)
    allowed = 0.25 * spread / 32767 * (1 + 1e-4) + 1e-11 * np.abs(kept.terms) + 1e-15
    assert (np.abs(read - kept.terms) <= allowed).all()


def test_a_page_stays_small_whatever_the_ensemble() -> None:
    rng = np.random.default_rng(1)
    dataset = dataset_of(rng.standard_normal((15, 400, 6, 80)), np.eye(15, 4, dtype=int).tolist())
    stored = panel.stored(dataset)
    assert stored is not None
    assert len(stored["blob"]) <= 4 * panel.BYTES / 3 + 8
    assert stored["members"] >= panel.FEWEST
    assert stored["times"][0] == 0.0
    assert stored["times"][-1] == 1.0  # thinned, never cut off


def test_members_that_ended_are_left_out_and_counted() -> None:
    rng = np.random.default_rng(2)
    terms = rng.standard_normal((3, 50, 1, 4))
    terms[1, [3, 7], 0, 2:] = np.nan
    dataset = dataset_of(terms, [[0], [1], [2]])
    kept = panel.read(dataset)
    assert kept is not None
    assert kept.terms.shape[1] == 48
    assert any("2 members that ended early" in words for words in panel.remarks(dataset))


def test_the_remarks_tell_how_far_the_panel_is_from_the_page(slot: xr.Dataset) -> None:
    words = " ".join(panel.remarks(slot))
    assert "600 members at 43 times" in words
    assert "up to order 2" in words
    # 1.96 x 0.5 / sqrt(600) = 0.040; 1.96 / sqrt(1200) = 5.7 %
    assert "± 0.04 " in words
    assert "± 6\u202f%" in words
    wrong = slot.copy()
    wrong["std"] = 0.5 * slot["std"]  # the panel's spread is now twice that of the page
    assert "at most 100\u202f%" in " ".join(panel.remarks(wrong))


def test_no_panel_without_its_data(minimal: xr.Dataset) -> None:
    assert panel.read(minimal) is None
    assert panel.stored(minimal) is None
    assert panel.remarks(minimal) == []


def test_the_panel_says_of_which_quantities_it_is_rough(slot: xr.Dataset) -> None:
    """Above a tenth of the spread it is not to be relied on; below it says how far it is off."""
    error = np.array([[0.004, 0.3, 0.02], [0.002, 0.1, 0.06]])
    told = slot.assign(panel_error=(("panel_test", "quantity"), error))
    words = " ".join([panel.warning(told), *panel.remarks(told)])
    assert "do not rely on the panel there: longitude (30\u202f%)." in words
    assert "Of the other quantities they differ by at most 6\u202f% of the spread" in words
    told = slot.assign(panel_error=(("panel_test", "quantity"), 0.1 * error))
    words = " ".join([panel.warning(told), *panel.remarks(told)])
    assert "rely" not in words
    assert "from the chain itself by at most 3\u202f% of the spread" in words
    told = slot.assign(panel_error=(("panel_test", "quantity"), 100 * error))
    assert "longitude (30 times)" in panel.warning(told)


def test_the_panel_opens_on_a_quantity_with_a_box(slot: xr.Dataset) -> None:
    boxed = [n for n in slot["quantity"].values if np.isfinite(slot["box_low"].sel(quantity=n))]
    assert str(slot["quantity"].values[panel.first(slot)]) == boxed[0]
    none = np.full(slot.sizes["quantity"], np.nan)
    bare = slot.assign(box_low=("quantity", none), box_high=("quantity", none))
    assert panel.first(bare) == 0
