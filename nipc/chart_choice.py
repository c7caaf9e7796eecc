"""In which chart is the flow closest to linear? Pairs of opposite members tell.

y(+), y(-) and y(0) start from opposite points about the mean germ and from the mean itself. In a
chart in which the flow is linear the even part (y(+) + y(-)) / 2 - y(0) vanishes; its size over
that of the odd part (y(+) - y(-)) / 2 is the curvature that expansions in the chart must bear. It
is taken in every principal direction of the odd parts: what bends an ensemble by little of its
length bends it by much of its width, and the width, as of the energy, is what later arcs draw out.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from pydantic import ValidationError

from nipc.arrays import FloatArray
from nipc.errors import InputError, NipcError
from nipc.pilot import pair_states, parts_of
from nipc.problem.charts import CHARTS, ChartSettings, build_chart
from nipc.problem.units import chart_time_scale

if TYPE_CHECKING:
    from nipc.problem.study import Study

CLEARLY = 0.7  # of the curvature of the study's own chart: below, another is recommended


@dataclass(frozen=True)
class ChartTried:
    """A chart's curvature at the horizon's end, or the reason why it cannot be used."""

    name: str
    curvature: float | None
    reason: str = ""


@dataclass(frozen=True)
class ChartChoice:
    """Charts from the least curved on; `own` is the study's, `best` the one to take."""

    tried: tuple[ChartTried, ...]
    own: str
    best: str
    runs: int


def choose_chart(study: Study) -> ChartChoice:
    """Run a few members over the whole horizon and look at them in every chart that fits.

    Raises InputError when a pilot run fails.
    """
    from nipc.workflow import build_propagator

    pairs = len(study.state) + 2
    found = pair_states(study, build_propagator(study), pairs)
    if found is None:
        raise InputError("a pilot run failed, so that charts cannot be told apart: nipc probe")
    edges, states = found
    at = edges * chart_time_scale(study.clock.unit, [c.unit for c in study.state])
    tried = [_try(study, name, settings, states, at) for name, settings in _candidates(study)]
    tried.sort(key=lambda t: (t.curvature is None, t.curvature or 0.0))
    own = "cartesian" if study.chart is None else study.chart.name
    curved = {t.name: t.curvature for t in tried if t.curvature is not None}
    best = min(curved, key=lambda name: curved[name], default=own)
    if own in curved and curved[best] > CLEARLY * curved[own]:
        best = own
    return ChartChoice(tuple(tried), own, best, 1 + 2 * pairs)


def _candidates(study: Study) -> Iterator[tuple[str, dict[str, Any]]]:
    """Every chart with what the study says of its own: mu, rotation rate, roles."""
    said = {} if study.chart is None else study.chart.model_dump(exclude_none=True)
    own = said.pop("name", "cartesian")
    for name in CHARTS:
        if name == own:
            yield name, said
        elif name != "functions":  # those are the user's own
            yield name, {k: v for k, v in said.items() if k in SHARED}


SHARED = ("mu", "rotation_rate", "position", "velocity")


def _try(
    study: Study, name: str, settings: dict[str, Any], states: FloatArray, at: FloatArray
) -> ChartTried:
    units = tuple(c.unit for c in study.state)
    try:
        built = _settings(name, settings)
        chart = build_chart(
            built, study.state_names, units, study.start_law().mean, study.clock.start, study.folder
        )
        chart.check(states[:, 0], float(at[0]))
    except (NipcError, ValidationError) as error:
        return ChartTried(name, None, _told(error))
    odd, even = parts_of(chart, states, at)
    if not (np.isfinite(odd).all() and np.isfinite(even).all()):
        return ChartTried(name, None, "it is singular on the way")
    return ChartTried(name, curvature(odd[:, -1], even[:, -1]))


def curvature(odd: FloatArray, even: FloatArray) -> float:
    """Largest size of the even parts (pairs, d) over the odd ones', in the latter's directions."""
    scale = np.sqrt(np.mean(odd**2, axis=0))
    live = scale > 1e-12 * scale.max(initial=0.0)
    if not live.any():
        return 0.0
    _, sizes, axes = np.linalg.svd(odd[:, live] / scale[live], full_matrices=False)
    kept = sizes > 1e-7 * sizes[0]
    bent = (even[:, live] / scale[live]) @ axes[kept].T
    return float(np.max(np.sqrt(np.sum(bent**2, axis=0)) / sizes[kept]))


def _settings(name: str, settings: dict[str, Any]) -> ChartSettings:
    from pydantic import TypeAdapter

    known = _fields(name)
    table = {"name": name} | {k: v for k, v in settings.items() if k in known}
    built: ChartSettings = TypeAdapter(ChartSettings).validate_python(table)
    return built


def _fields(name: str) -> set[str]:
    from typing import get_args

    for kind in get_args(get_args(ChartSettings)[0]):
        if kind.model_fields["name"].annotation.__args__[0] == name:
            return set(kind.model_fields)
    return set()


def _told(error: Exception) -> str:
    if isinstance(error, ValidationError):
        first = error.errors()[0]
        missing = ".".join(str(part) for part in first["loc"] if part not in CHARTS)
        return f"it needs {missing}" if first["type"] == "missing" else f"{missing}: {first['msg']}"
    return str(error)
