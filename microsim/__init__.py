"""Individual-level simulation and its equivalent cohort models from one study folder, and whether memory matters.

>>> study = microsim.load_study("scenarios/steady")
>>> result = microsim.run(study, patients=10_000, seed=1)
>>> result.tables["outcomes"]

Everything is imported when first asked for, so that importing the package is quick.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

if TYPE_CHECKING:
    from microsim.errors import InputError, MicrosimError
    from microsim.pipeline import Result, run
    from microsim.study.load import load_study

_HOMES = {
    "load_study": "microsim.study.load",
    "run": "microsim.pipeline",
    "Result": "microsim.pipeline",
    "InputError": "microsim.errors",
    "MicrosimError": "microsim.errors",
}

__all__ = ["InputError", "MicrosimError", "Result", "__version__", "load_study", "run"]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    from importlib import import_module

    return getattr(import_module(_HOMES[name]), name)
