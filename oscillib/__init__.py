"""Differentiable building blocks for fitting noisy coupled oscillators to recordings."""

from importlib.metadata import version as _version

from . import (
    analysis as analysis,
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
    recordings as recordings,
)


__version__ = _version("oscillib")
