"""q(t, x, p): scalar functions of time, state and parameters that the user asks about."""

from __future__ import annotations

import ast
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from nipc.arrays import FloatArray

FUNCTIONS = tuple(
    "abs arccos arccosh arcsin arcsinh arctan arctan2 arctanh ceil cos cosh exp expm1 floor "  # noqa: SIM905
    "log log10 log1p sin sinh sqrt tan tanh where".split()
)
CONSTANTS = {"pi": float(np.pi)}
RESERVED = frozenset([*FUNCTIONS, *CONSTANTS, "t"])

_NODES = (
    ast.Expression, ast.BinOp, ast.UnaryOp, ast.Compare, ast.Call, ast.Name, ast.Load, ast.Constant,
    ast.Add, ast.Sub, ast.Mult, ast.Div, ast.Pow, ast.Mod, ast.USub, ast.UAdd, ast.BitAnd,
    ast.BitOr, ast.Invert, ast.Lt, ast.LtE, ast.Gt, ast.GtE, ast.Eq, ast.NotEq,
)  # fmt: skip


def expression_fault(text: str, names: Sequence[str]) -> str | None:
    """Why this expression is refused, or None.

    The text is parsed, never run: numbers, the names given, t, pi, the arithmetic, comparison and
    & | ~ operators, and a fixed list of functions are all it may hold.
    """
    if len(text) > 2000:
        return "the expression is longer than 2000 characters; use a function instead"
    try:
        tree = ast.parse(text.strip(), mode="eval")
    except (SyntaxError, ValueError, RecursionError, MemoryError):
        return f"{text!r} is not an expression; write for example 'sqrt(x**2 + y**2)'"
    known = {*names, *CONSTANTS, "t"}
    called = {id(n.func) for n in ast.walk(tree) if isinstance(n, ast.Call)}
    for node in ast.walk(tree):
        if not isinstance(node, _NODES):
            return f"{type(node).__name__} is not allowed in an expression"
        if isinstance(node, ast.Call):
            if not isinstance(node.func, ast.Name) or node.func.id not in FUNCTIONS:
                return f"{ast.unparse(node.func)!r} is no known function; known: " + ", ".join(
                    FUNCTIONS
                )
            if node.keywords:
                return "functions take no keyword arguments here"
        elif isinstance(node, ast.Name) and id(node) not in called and node.id not in known:
            return f"unknown name {node.id!r}; known: " + ", ".join(sorted(known))
        elif isinstance(node, ast.Constant) and type(node.value) not in (int, float):
            return f"{node.value!r} is not a number"
    return None


def names_in(text: str) -> set[str]:
    """The names used in an expression that has passed `expression_fault`."""
    return {n.id for n in ast.walk(ast.parse(text.strip(), mode="eval")) if isinstance(n, ast.Name)}


QuantityFunction = Callable[[FloatArray, FloatArray, FloatArray], FloatArray]


@dataclass(frozen=True, eq=False)
class QuantitySet:
    """All quantities of a study as one function of many trajectories.

    `functions` hold one callable a quantity: (t (T,), states (n, T, d), parameters (n, P)) ->
    (n, T).
    """

    names: tuple[str, ...]
    functions: tuple[QuantityFunction, ...]

    def __call__(self, t: FloatArray, states: FloatArray, parameters: FloatArray) -> FloatArray:
        """Quantities (n, T, Q) of states (n, T, d) at times (T,), parameters (n, P)."""
        result = np.empty((*states.shape[:2], len(self.functions)))
        for i, function in enumerate(self.functions):
            value = np.asarray(function(t, states, parameters), dtype=float)
            if value.shape != states.shape[:2]:
                raise ValueError(
                    f"quantity {self.names[i]!r} returned shape {value.shape}; it must return "
                    f"{states.shape[:2]}, one value for each sample and time"
                )
            result[:, :, i] = value
        return result


def component(index: int) -> QuantityFunction:
    """The quantity that is state component `index`."""
    return lambda t, states, parameters: states[:, :, index]


def expression(
    text: str, state_names: Sequence[str], parameter_names: Sequence[str]
) -> QuantityFunction:
    """The quantity given by an expression in numexpr's grammar."""
    used = names_in(text)

    def evaluate(t: FloatArray, states: FloatArray, parameters: FloatArray) -> FloatArray:
        import numexpr

        local: dict[str, Any] = {"t": np.broadcast_to(t, states.shape[:2]), **CONSTANTS}
        local |= {n: states[:, :, i] for i, n in enumerate(state_names)}
        local |= {n: parameters[:, None, i] for i, n in enumerate(parameter_names)}
        local = {name: value for name, value in local.items() if name in used}
        value = numexpr.evaluate(text.strip(), local_dict=local, global_dict={})
        return np.broadcast_to(np.asarray(value, float), states.shape[:2])

    return evaluate
