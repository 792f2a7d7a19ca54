"""Differentiable building blocks for fitting noisy coupled oscillators to recordings."""

from importlib import import_module as _import_module
from importlib.metadata import version as _version
from typing import TYPE_CHECKING as _TYPE_CHECKING


if _TYPE_CHECKING:
    from . import (
        analysis as analysis,
        checks as checks,
        cohort as cohort,
        demo as demo,
        encoders as encoders,
        evaluate as evaluate,
        fields as fields,
        fitting as fitting,
        integrate as integrate,
        likelihood as likelihood,
        losses as losses,
        observe as observe,
        parameters as parameters,
        plots as plots,
        recordings as recordings,
    )

__version__ = _version("oscillib")

_ROOMS = (
    "analysis", "checks", "cohort", "demo", "encoders", "evaluate", "fields", "fitting",
    "integrate", "likelihood", "losses", "observe", "parameters", "plots", "recordings",
)  # fmt: skip


def __getattr__(name: str):
    """Import a room when it is first used: what is not needed costs nothing.

    The pytest plugin relies on it too: it is loaded before type checking of the rooms is set up.
    """
    if name in _ROOMS:
        return _import_module(f"{__name__}.{name}")
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted({*globals(), *_ROOMS})
