"""Noise for a propagator that knows none: kicks between legs of its own motion.

x' = f(x) + sum_j g_j(t, x) xi_j is split: the propagator moves the state by f from kick to kick,
and the kicks, made of the increments of the same expanded paths, move it along the g_j (symmetric,
as Strang's splitting; see `kick_times` for when and how much).
"""

from __future__ import annotations

from typing import Annotated, Any, Literal

import numpy as np
from pydantic import Field, field_validator

from nipc.adapters.base import Adapter, AdapterSettings
from nipc.adapters.kick_axes import Direction, Kick
from nipc.adapters.kick_times import KickTimes
from nipc.adapters.legs import leg
from nipc.adapters.reference import code_digest
from nipc.arrays import FloatArray
from nipc.errors import InputError, PropagatorError
from nipc.problem.noise import Forcing, NoiseModel
from nipc.runs.propagator import AdapterContext, Batch, Propagator, Trajectories

MOST_REFINED = 1024


class KicksSettings(AdapterSettings):
    """`propagator` is the table of any other adapter; each noise source in `kick` is applied here.

    Sources without a kick go to the inner propagator's own forcing. `legs` is how many an arc is
    divided into at the least, one kick each (each gap between output times has some of its own);
    "auto" doubles them run by run until two answers agree within `tolerance` of what the kicks do.
    That takes some three times the runs of a fixed number: `nipc probe` tells one that will do.
    """

    propagator: dict[str, Any]
    kick: Annotated[tuple[Kick, ...], Field(min_length=1)]
    legs: Annotated[int, Field(ge=1, le=100_000)] | Literal["auto"] = "auto"
    tolerance: Annotated[float, Field(gt=0, lt=1)] = 1e-3
    depends: tuple[str, ...] = ()

    @field_validator("propagator")
    @classmethod
    def _named(cls, value: dict[str, Any]) -> dict[str, Any]:
        if not isinstance(value.get("adapter"), str):
            raise ValueError("name the inner propagator's adapter: adapter = ...")
        if value["adapter"] == "kicks":
            raise ValueError("kicks cannot wrap kicks: give all of them here")
        if value["adapter"] == "map":
            raise ValueError("kicks fall inside a map's steps; give the map its noise, as w")
        return value


class KicksPropagator(Propagator):
    """Legs of the inner propagator with kicks between them."""

    def __init__(self, settings: KicksSettings, context: AdapterContext, inner: Propagator) -> None:
        self.settings, self.context, self.inner = settings, context, inner
        self.vectorised = inner.vectorised
        self._kicked = [context.source_names.index(k.source) for k in settings.kick]
        self._others = [j for j in range(len(context.source_names)) if j not in self._kicked]

    def propagate(self, batch: Batch) -> Trajectories:
        if self.settings.legs != "auto":
            return self._with(batch, self.settings.legs)
        return self._adapted(batch)

    def _adapted(self, batch: Batch) -> Trajectories:
        """Twice the legs until it changes nothing, judged row by row."""
        free = self.inner.propagate(self._inner_batch(batch)).states
        before, found, refined = self._with(batch, 1), self._with(batch, 1, 2), 2
        states, ended = found.states.copy(), found.ended.copy()
        todo = np.arange(len(batch))
        while True:
            size = _largest(found.states - free[todo])
            open_ = _largest(found.states - before.states) > self.settings.tolerance * size
            other_end = np.isnan(found.ended) != np.isnan(before.ended)
            keep = np.flatnonzero(open_.any(axis=1) | other_end)
            if not keep.size:
                return Trajectories(states, ended)
            todo, refined = todo[keep], 2 * refined
            if refined > MOST_REFINED:
                raise PropagatorError(
                    f"the kicks have not converged to {self.settings.tolerance:g} with "
                    f"{refined} legs between two output times: shorten the arcs, or give legs"
                )
            before = Trajectories(found.states[keep], found.ended[keep])
            found = self._with(batch.take(todo), 1, refined)
            states[todo], ended[todo] = found.states, found.ended

    @property
    def legs(self) -> int | None:
        """How many the study says; None for "auto"."""
        return None if self.settings.legs == "auto" else self.settings.legs

    def legs_needed(self, batch: Batch) -> int:
        """The number of legs from which twice as many change the batch within the tolerance."""
        free = self.inner.propagate(self._inner_batch(batch)).states
        refined, before = 1, self._with(batch, 1).states
        while refined < MOST_REFINED:
            found = self._with(batch, 1, 2 * refined).states
            size = _largest(found - free).max(axis=0)
            if np.all(_largest(found - before).max(axis=0) <= self.settings.tolerance * size):
                break
            refined, before = 2 * refined, found
        return refined * (batch.times.size - 1)

    # -- one pass --------------------------------------------------------------------------------

    def _with(self, batch: Batch, legs: int, refined: int = 1) -> Trajectories:
        """Trajectories with at least legs x refined legs over the batch's times."""
        times, (n, d) = batch.times, batch.states.shape
        states, ended = np.full((n, times.size, d), np.nan), np.full(n, np.nan)
        states[:, 0] = batch.states
        directions = [
            k.direction(self.context.state_names, self.context.folder) for k in self.settings.kick
        ]
        plan = KickTimes.over(times, legs, refined)
        sizes = plan.sizes(batch.forcing)[:, :, self._kicked]
        variances = self._variances(batch.forcing.model, plan.shares)
        inner, alive = self._inner_batch(batch), np.arange(n)
        x, now = batch.states, float(times[0])
        for i, then in enumerate([*plan.times, times[-1]]):
            # from one kick to the next, with the output times between them
            passed = np.flatnonzero((times > now) & (times < then))
            found = self.inner.propagate(
                leg(inner, alive, x, np.array([now, *times[passed], then]))
            )
            states[np.ix_(alive, passed)] = found.states[:, 1 : 1 + passed.size]
            ended[alive] = found.ended
            going = np.isnan(found.ended)
            alive, x, now = alive[going], found.states[going, -1], float(then)
            if not alive.size:
                break
            if i < plan.times.size:
                parameters = batch.parameters[alive]
                x = self._kick(directions, now, x, sizes[alive, i], parameters, variances[i])
            else:
                states[alive, -1] = x
        return Trajectories(states, ended)

    def _kick(
        self, directions: list[Direction], t: float, x: FloatArray, w: FloatArray,
        p: FloatArray, variances: FloatArray,
    ) -> FloatArray:  # fmt: skip
        """x after the flow of dx/ds = sum_j g_j(t, x) w_j over s in [0, 1], to fourth order.

        That is Stratonovich's reading, the limit of smooth paths (Wong & Zakai 1965). For Ito's the
        drift -1/2 (Dg) g E[w^2] joins it. Kicks along g of the state before would be Ito's only for
        increments with all of the noise's quadratic variation, and a path of finitely many terms
        has less: they would leave a bias that more legs only enlarge.
        """

        def slope(y: FloatArray) -> FloatArray:
            total = np.zeros(y.shape)
            for g, column, variance in zip(directions, w.T, variances, strict=True):
                total += g(t, y, p) * column[:, None]
                if variance:
                    total -= 0.5 * variance * _self_derivative(g, t, y, p, variance)
            return total

        a = slope(x)
        b = slope(x + 0.5 * a)
        c = slope(x + 0.5 * b)
        return x + (a + 2 * b + 2 * c + slope(x + c)) / 6.0

    def _variances(self, model: NoiseModel, lengths: FloatArray) -> FloatArray:
        """(legs, sources) E[w^2] of white sources that are read in Ito's sense, 0 elsewhere."""
        sources = [model.sources[j] for j in self._kicked]
        squares = [
            s.intensity**2 if s.kind == "white" and s.name in self.context.ito_sources else 0.0
            for s in sources
        ]
        return np.outer(lengths, squares)

    def _inner_batch(self, batch: Batch) -> Batch:
        """The batch with only those sources that the inner propagator takes itself."""
        model = batch.forcing.model
        columns = [np.arange(*model.columns(j).indices(model.size)) for j in self._others]
        chosen = np.concatenate(columns) if columns else np.empty(0, dtype=np.int64)
        part = _part_of(model, tuple(self._others))
        forcing = Forcing(part, batch.forcing.coefficients[:, chosen])
        return Batch(batch.states, batch.times, forcing, batch.parameters)

    def fingerprint(self) -> str:
        settings, folder = self.settings, self.context.folder
        functions = [k.function for k in settings.kick if k.function is not None]
        code = code_digest(folder, functions, settings.depends)
        own = settings.model_dump_json(exclude={"propagator"})
        return f"kicks {own} {self.context.ito_sources} {code} over {self.inner.fingerprint()}"


_PARTS: dict[int, tuple[NoiseModel, tuple[int, ...], NoiseModel]] = {}


def _part_of(model: NoiseModel, sources: tuple[int, ...]) -> NoiseModel:
    """The same part for the same model, so that what it has computed is used again."""
    known = _PARTS.get(id(model))
    if known is None or known[0] is not model or known[1] != sources:
        if len(_PARTS) > 16:
            _PARTS.clear()
        part = NoiseModel(
            tuple(model.sources[j] for j in sources), tuple(model.bases[j] for j in sources),
            model.start, model.end,
        )  # fmt: skip
        known = _PARTS[id(model)] = (model, sources, part)
    return known[2]


def _self_derivative(
    g: Direction, t: float, x: FloatArray, p: FloatArray, variance: float
) -> FloatArray:
    """(Dg) g at x by a central difference along g, the step a thousandth of a kick's size."""
    step = 1e-3 * np.sqrt(variance)
    along = g(t, x, p)
    return (g(t, x + step * along, p) - g(t, x - step * along, p)) / (2.0 * step)


def _largest(values: FloatArray) -> FloatArray:
    """(n, d) largest absolute value over the times, endings apart."""
    return np.max(np.nan_to_num(np.abs(values)), axis=1)


class KicksAdapter(Adapter):
    """Noise for a propagator that has no input for it."""

    name = "kicks"
    Settings = KicksSettings

    @classmethod
    def check(cls, settings: KicksSettings, context: AdapterContext) -> None:
        names = [k.source for k in settings.kick]
        for name in names:
            if name not in context.source_names:
                raise InputError(
                    f"kick: there is no noise source {name!r}; known: "
                    + ", ".join(context.source_names)
                )
            if names.count(name) > 1:
                raise InputError(f"kick: the noise source {name!r} has two kicks; give it one")
        for kick in settings.kick:
            kick.check(context.state_names, context.folder)
        adapter, inner, within = _inner(settings, context)
        adapter.check(inner, within)

    @classmethod
    def build(cls, settings: KicksSettings, context: AdapterContext) -> Propagator:
        cls.check(settings, context)
        for kick in settings.kick:
            kick.direction(context.state_names, context.folder)
        adapter, inner, within = _inner(settings, context)
        return KicksPropagator(settings, context, adapter.build(inner, within))


def _inner(settings: KicksSettings, context: AdapterContext) -> tuple[Any, Any, AdapterContext]:
    """The inner adapter, its settings, and what it may know: only sources that it takes itself."""
    from dataclasses import replace

    from pydantic import ValidationError

    from nipc.adapters import load_adapter

    adapter = load_adapter(settings.propagator["adapter"])
    table = {k: v for k, v in settings.propagator.items() if k != "adapter"}
    try:
        inner = adapter.Settings.model_validate(table)
    except ValidationError as error:
        wrong = "; ".join(
            f"{'.'.join(map(str, e['loc']))}: {e['msg']}" for e in error.errors(include_url=False)
        )
        raise InputError(f"propagator.propagator: {wrong}") from None
    kicked = {k.source for k in settings.kick}
    rest = tuple(n for n in context.source_names if n not in kicked)
    return adapter, inner, replace(context, source_names=rest)
