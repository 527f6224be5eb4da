"""Scanward: active impedance, reflection and embedded patterns of phased-array elements from one unit cell.

The names below are imported on first use, so that ``import scanward`` and the command line start fast.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from .cases.ask import ask
    from .cases.library import find_case, ready_made
    from .cases.read import parse_case, read_case
    from .cases.run import run_case
    from .cases.store import load_result, save_result
    from .geometry.errors import InputError
    from .solver.pattern import respond
    from .solver.result import ScanPoints
    from .solver.sweep import solve_sweep

__version__ = "0.1.0"

_HOME = {
    "InputError": "geometry.errors",
    "ScanPoints": "solver.result",
    "ask": "cases.ask",
    "find_case": "cases.library",
    "load_result": "cases.store",
    "parse_case": "cases.read",
    "read_case": "cases.read",
    "ready_made": "cases.library",
    "respond": "solver.pattern",
    "run_case": "cases.run",
    "save_result": "cases.store",
    "solve_sweep": "solver.sweep",
}

__all__ = [
    "InputError",
    "ScanPoints",
    "__version__",
    "ask",
    "find_case",
    "load_result",
    "parse_case",
    "read_case",
    "ready_made",
    "respond",
    "run_case",
    "save_result",
    "solve_sweep",
]


def __getattr__(name: str) -> object:
    if name not in _HOME:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(f".{_HOME[name]}", __name__), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
