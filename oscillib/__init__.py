"""Differentiable building blocks for fitting noisy coupled oscillators to recordings."""

from importlib.metadata import version as _version

from . import (
    fields as fields,
    integrate as integrate,
    losses as losses,
    observe as observe,
    parameters as parameters,
)


__version__ = _version("oscillib")
