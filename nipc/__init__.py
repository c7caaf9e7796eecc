"""Noise and uncertain starts pushed through a propagator that stays a black box."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from nipc.answers.result import Result, load_result
    from nipc.errors import Ended, NipcError
    from nipc.problem.study import Study
    from nipc.questions import allowance, sweep, whatif
    from nipc.workflow import load_study, plan, probe, run, write_report

__version__ = "0.1.0"

_HOMES = {
    "Ended": "nipc.errors",
    "NipcError": "nipc.errors",
    "Result": "nipc.answers.result",
    "Study": "nipc.problem.study",
    "allowance": "nipc.questions",
    "load_result": "nipc.answers.result",
    "load_study": "nipc.workflow",
    "plan": "nipc.workflow",
    "probe": "nipc.workflow",
    "run": "nipc.workflow",
    "sweep": "nipc.questions",
    "whatif": "nipc.questions",
    "write_report": "nipc.workflow",
}

__all__ = [
    "Ended",
    "NipcError",
    "Result",
    "Study",
    "allowance",
    "load_result",
    "load_study",
    "plan",
    "probe",
    "run",
    "sweep",
    "whatif",
    "write_report",
]


def __getattr__(name: str) -> Any:
    # heavy imports wait until something is asked for: `import nipc` stays quick
    if name not in _HOMES:
        raise AttributeError(f"module 'nipc' has no attribute {name!r}")
    from importlib import import_module

    return getattr(import_module(_HOMES[name]), name)
