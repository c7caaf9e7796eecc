"""A function of a shared library, C or Fortran bind(C), called through ctypes.

Results are filled in place and the forcing is passed as it was made, without copying. A crash of
the library ends the worker process that called it, and costs that run alone.
"""

from __future__ import annotations

import ctypes
import subprocess
import sys
from pathlib import Path
from typing import Annotated, Any, Literal

import numpy as np
from pydantic import Field, model_validator

from nipc.adapters.base import Adapter, AdapterSettings
from nipc.adapters.forcing_grid import forcing_grid, grid_table, table_error
from nipc.adapters.legs import by_legs
from nipc.adapters.program import files_digest
from nipc.adapters.reference import check_depends
from nipc.arrays import FloatArray
from nipc.errors import InputError, PropagatorError
from nipc.problem.noise import NoiseModel
from nipc.runs.propagator import AdapterContext, Batch, Propagator, Trajectories

Word = Literal[
    "state", "times", "parameters", "forcing_times", "forcing", "coefficients",
    "states", "final", "ended",
    "n_runs", "n_state", "n_times", "n_parameters", "n_forcing", "n_sources", "n_coefficients",
    "start", "end", "step",
]  # fmt: skip
SCALARS = ("start", "end", "step")
PROBE = (
    "import ctypes, sys\n"
    "library = ctypes.CDLL(sys.argv[1])\n"
    "sys.exit(0 if hasattr(library, sys.argv[2]) else 3)\n"
)


class LibrarySettings(AdapterSettings):
    """`function` of `library` is called with `arguments`, in this order.

    Arrays of double (in C order; to Fortran the axes are reversed): state (d), times (m),
    parameters (P), forcing_times (T), forcing (T, J), coefficients (K); results: states (m, d) at
    the times, or final (d) at the end alone; ended (1), preset to NaN. With batch = true all but
    times and forcing_times have a leading axis of runs. 32-bit integers: n_runs, n_state, n_times,
    n_parameters, n_forcing, n_sources, n_coefficients; doubles: start, end, step (of the forcing).
    Numbers are passed by value, or with by_reference as plain Fortran wants them. The function
    returns nothing or an int: 0, `lost_code` when the motion ended for a physical reason, all else
    is an error.
    """

    library: str
    function: Annotated[str, Field(pattern=r"^[A-Za-z_]\w*$")]
    arguments: Annotated[tuple[Word, ...], Field(min_length=1)]
    returns: Literal["code", "nothing"] = "code"
    by_reference: bool = False
    batch: bool = False
    forcing_step: Annotated[float, Field(gt=0, allow_inf_nan=False)] | None = None
    lost_code: int | None = None
    depends: tuple[str, ...] = ()

    @model_validator(mode="after")
    def _consistent(self) -> LibrarySettings:
        words = self.arguments
        twice = sorted({w for w in words if words.count(w) > 1})
        if twice:
            raise ValueError(f"{twice[0]!r} is passed twice")
        if ("states" in words) == ("final" in words):
            raise ValueError("the result is one of states (m, d) and final (d): pass one of them")
        if "states" in words and "times" not in words:
            raise ValueError("a function that fills states must be passed times")
        if "state" not in words:
            raise ValueError("the function must be passed state, from which the run starts")
        gridded = {"forcing", "forcing_times", "step", "n_forcing"} & set(words)
        if gridded and self.forcing_step is None:
            raise ValueError(f"{sorted(gridded)[0]!r} needs forcing_step, in the clock's unit")
        if self.lost_code == 0:
            raise ValueError("lost_code must differ from 0, which means that all went well")
        if self.lost_code is not None and (self.batch or self.returns == "nothing"):
            raise ValueError(
                "lost_code needs a function that returns a code for one run; pass `ended` instead"
            )
        if self.lost_code is not None and "ended" not in words:
            raise ValueError("with lost_code pass `ended` too: the function stores there when")
        return self


class LibraryPropagator(Propagator):
    """Calls the library's function; it is loaded where it runs."""

    def __init__(self, settings: LibrarySettings, path: Path, folder: Path) -> None:
        self.settings, self.path, self.folder = settings, path, folder
        self.vectorised = settings.batch
        self._function: Any = None

    def __getstate__(self) -> dict[str, Any]:
        return self.__dict__ | {"_function": None}

    def propagate(self, batch: Batch) -> Trajectories:
        return self._once(batch) if "states" in self.settings.arguments else by_legs(
            self._once, batch
        )  # fmt: skip

    def _once(self, batch: Batch) -> Trajectories:
        function, words = self._function or self._load(), self.settings.arguments
        (n, d), m = batch.states.shape, batch.times.size
        results = {"states": np.full((n, m, d), np.nan), "ended": np.full(n, np.nan)}
        if "final" in words:
            results["final"] = np.full((n, d), np.nan)
        given = self._given(batch, results)
        code = function(*[self._passed(word, given[word]) for word in words])
        states, ended = results["states"], results["ended"]
        lost = code is not None and code == self.settings.lost_code
        if code and not lost:
            raise PropagatorError(f"{self.settings.function} returned {code}")
        if lost and np.isnan(ended).all():
            raise PropagatorError(
                f"{self.settings.function} returned {code}, that the motion ended, and did not "
                "store when in `ended`"
            )
        if "final" in words:
            states[:, 0], states[:, -1] = batch.states, results["final"]
        return Trajectories(states, ended)

    def _given(self, batch: Batch, results: dict[str, FloatArray]) -> dict[str, Any]:
        """Every word's array of double, or number.

        A function may use what it is given as room of its own, so it gets no array of the batch.
        """
        times, coefficients = batch.times, batch.forcing.coefficients
        given: dict[str, Any] = {
            "n_runs": len(batch), "n_state": batch.states.shape[1], "n_times": times.size,
            "n_parameters": batch.parameters.shape[1], "n_sources": batch.forcing.n_sources,
            "n_coefficients": coefficients.shape[1], "start": times[0], "end": times[-1],
        }  # fmt: skip
        own = (("state", batch.states), ("times", times), ("parameters", batch.parameters),
               ("coefficients", coefficients))  # fmt: skip
        for word, array in own:
            if word in self.settings.arguments:
                given[word] = np.array(array, dtype=np.float64, order="C")
        if self.settings.forcing_step is not None:
            grid = forcing_grid(float(times[0]), float(times[-1]), self.settings.forcing_step)
            given |= {"n_forcing": grid.size, "step": grid[1] - grid[0]}
            if "forcing_times" in self.settings.arguments:
                given["forcing_times"] = grid.copy()
            if "forcing" in self.settings.arguments:
                given["forcing"] = np.ascontiguousarray(grid_table(batch.forcing, grid))
        return given | results

    def _passed(self, word: str, value: Any) -> Any:
        if isinstance(value, np.ndarray):
            return ctypes.c_void_p(value.__array_interface__["data"][0])
        number = ctypes.c_double(value) if word in SCALARS else ctypes.c_int32(value)
        return ctypes.byref(number) if self.settings.by_reference else number

    def _load(self) -> Any:
        try:
            library = ctypes.CDLL(str(self.path))
            self._function = getattr(library, self.settings.function)
        except (OSError, AttributeError) as error:
            raise PropagatorError(f"cannot load {self.path.name}: {error}") from None
        self._function.restype = ctypes.c_int if self.settings.returns == "code" else None
        return self._function

    def table_error(self, model: NoiseModel) -> float:
        """How far a table of this noise is off by its step: see `forcing_grid`."""
        return table_error(model, self.settings.forcing_step)

    def fingerprint(self) -> str:
        files = [self.path, *(self.folder / name for name in self.settings.depends)]
        return f"library {self.settings.model_dump_json()} {files_digest(files)}"


class LibraryAdapter(Adapter):
    """A shared library."""

    name = "library"
    Settings = LibrarySettings

    @classmethod
    def check(cls, settings: LibrarySettings, context: AdapterContext) -> None:
        _path(settings, context)
        check_depends(context.folder, settings.depends)
        heard = {"forcing", "coefficients"} & set(settings.arguments)
        if context.source_names and not heard:
            raise InputError(
                "the study has noise sources, and the function is not given them: pass forcing or "
                "coefficients, or wrap it in the kicks adapter"
            )

    @classmethod
    def build(cls, settings: LibrarySettings, context: AdapterContext) -> Propagator:
        cls.check(settings, context)
        path = _path(settings, context)
        # a library may run code or crash when it is loaded: that is for another process to try
        tried = subprocess.run(
            [sys.executable, "-c", PROBE, str(path), settings.function],
            capture_output=True, text=True, check=False, stdin=subprocess.DEVNULL,
        )  # fmt: skip
        if tried.returncode == 3:
            raise InputError(
                f"{path} has no function {settings.function!r}; a Fortran compiler adds an "
                "underscore to names without bind(C)"
            )
        if tried.returncode:
            lines = tried.stderr.strip().splitlines() or [f"it ended with {tried.returncode}"]
            raise InputError(f"{path} cannot be loaded: {lines[-1]}")
        return LibraryPropagator(settings, path, context.folder)


def _path(settings: LibrarySettings, context: AdapterContext) -> Path:
    path = context.folder / settings.library
    if not path.is_file():
        raise InputError(
            f"there is no library {settings.library!r} in {context.folder}: build it first"
        )
    return path.resolve()
