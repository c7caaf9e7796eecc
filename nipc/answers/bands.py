"""The variables of a result on frequencies: shares by band and resonances, source by source."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from nipc.answers.frequencies import NO_RESONANCE, Resonance, band_edges, band_shares, resonance
from nipc.answers.response import Response, Stretch
from nipc.answers.table import ResultTable
from nipc.arrays import FloatArray
from nipc.chain.single_arc import SingleArc

ResponseOf = Callable[[int, int, int], Response | None]
"""(noise source, quantity, output time) to the first-order response, None where it is not known."""


def add_bands(
    table: ResultTable, response_of: ResponseOf, trust: FloatArray, path_error: FloatArray
) -> None:
    """Gather shares by band of every noise source and quantity, at its last trusted output time.

    trust (Q,) as in `HeldOut.trust_horizon`; path_error (T, Q) in the quantities' units.
    """
    study = table.study
    sources, quantities = len(study.noise), len(study.quantity)
    if sources == 0:
        return
    times = study.clock.times
    rows = [_last(times, float(limit)) for limit in trust]
    found: dict[tuple[int, int], tuple[Response, float]] = {}
    for q, row in enumerate(rows):
        for j in range(sources):
            response = None if row is None else response_of(j, q, row)
            if response is not None and row is not None:
                found[j, q] = response, float(np.nan_to_num(path_error[row, q]))
    if not found:
        return
    elapsed = max(r.elapsed for r, _ in found.values())
    finest = max(r.finest for r, _ in found.values())
    centre = None if study.clock.period is None else 1.0 / study.clock.period
    edges = band_edges(elapsed, finest, centre)
    shares = np.full((3, len(table.drivers), edges.size - 1, quantities), np.nan)
    peaks: dict[tuple[int, int], Resonance] = {}
    for (j, q), (response, doubt) in found.items():
        shares[:, j, :, q] = band_shares(response, edges, doubt)
        peaks[j, q] = resonance(response, doubt)
    _enter(table, edges, shares, peaks)
    moments = [np.nan if row is None else times[row] for row in rows]
    table.by_quantity("band_time", moments, study.clock.unit, "time of which the bands are told")


def _enter(
    table: ResultTable,
    edges: FloatArray,
    shares: FloatArray,
    peaks: dict[tuple[int, int], Resonance],
) -> None:
    per = f"1/{table.study.clock.unit}"
    table.add("band_low", ("band",), edges[:-1], per, "low edge of the band of frequencies")
    table.add("band_high", ("band",), edges[1:], per, "high edge of the band of frequencies")
    words = "share by frequency of the variance that the source gives to first order"
    for end, values in zip(("", "_low", "_high"), shares, strict=True):
        table.add(f"band_share{end}", ("source", "band", "quantity"), values, "1", words)
    shape = (len(table.drivers), shares.shape[-1])
    columns = {name: np.full(shape, np.nan) for name in ("frequency", "width", "share")}
    ends = {name: np.full(shape, np.nan) for name in ("share_low", "share_high")}
    for place, peak in peaks.items():
        if peak is NO_RESONANCE:
            continue
        columns["frequency"][place], columns["width"][place] = peak.frequency, peak.width
        columns["share"][place], ends["share_low"][place], ends["share_high"][place] = peak.share
    for name, units, words in (
        ("frequency", per, "frequency of the noise that drives the quantity most"),
        ("width", per, "half-width about that frequency"),
        ("share", "1", "share of the source's first-order variance from within"),
    ):
        table.add(f"resonance_{name}", ("source", "quantity"), columns[name], units, words)
    for name, values in ends.items():
        words = "share of the source's first-order variance from within, end of its 95 % interval"
        table.add(f"resonance_{name}", ("source", "quantity"), values, "1", words)


def _last(times: FloatArray, limit: float) -> int | None:
    """The last output time up to a limit; None for NaN, and where nothing has moved yet."""
    if np.isnan(limit):
        return None
    row = int(np.searchsorted(times, limit * (1.0 + 1e-12), side="right")) - 1
    return row if row > 0 else None


def arc_responses(arc: SingleArc) -> ResponseOf:
    """Of one arc: the coefficients of its expansion's terms of degree one."""
    indices = arc.expansion.basis.indices
    terms = np.flatnonzero(indices.sum(axis=1) == 1)
    place = {int(indices[t].argmax()): int(t) for t in terms}
    model, first = arc.germ.noise, arc.germ.first_noise
    error, runs = arc.relative_error * arc.expansion.std, arc.design.nodes.shape[0]
    length = model.end - model.start

    def response_of(source: int, quantity: int, row: int) -> Response | None:
        columns = range(first + model.columns(source).start, first + model.columns(source).stop)
        values = arc.expansion.coefficients[:, row, quantity]
        kernel = np.array([values[place[c]] if c in place else 0.0 for c in columns])
        law, memory = model.sources[source], None
        if law.time_constant is not None:
            memory, kernel = (float(kernel[0]), law.time_constant), kernel[1:]
        if arc.expansion.constant[row, quantity]:
            return None
        return Response(
            (Stretch(model.bases[source], model.start, length, kernel),),
            model.start,
            float(arc.times[row] - model.start),
            memory,
            float(np.nan_to_num(error[row, quantity])) ** 2 / runs,
        )

    return response_of
