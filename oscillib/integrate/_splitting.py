"""Splitting steps: compositions of two exact flows."""

import itertools

from jax import lax

from .._validate import check_count
from ._types import Flow, Step


# Suzuki's five-stage composition of a symmetric second-order step reaches order 4.
_SUZUKI_OUTER = 1 / (4 - 4 ** (1 / 3))
_SUZUKI = (
    _SUZUKI_OUTER, _SUZUKI_OUTER, 1 - 4 * _SUZUKI_OUTER, _SUZUKI_OUTER, _SUZUKI_OUTER
)  # fmt: skip


def strang(outer: Flow, inner: Flow, *, substeps: int = 1) -> Step:
    """Make the Strang splitting step of two exact flows: order 2, time-symmetric.

        S(h) = outer(h/2) inner(h) outer(h/2)

    Exact wherever the two flows commute, whatever the step. With `substeps`, neighbouring half
    steps of the outer flow are folded into one.

    Arguments:
        outer: flow applied in half steps, `flow(params, h) -> apply`; the cheaper of the two.
        inner: flow applied in whole steps.
        substeps: how many equal steps make up one `h`; default 1.

    Returns:
        A step: `step(params, h) -> advance`, `advance(t, y) -> y`. Both parts are autonomous, so
        `t` is not used.

    Raises:
        ValueError: `substeps` is below 1.
        TypeError: `substeps` is not an int.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import strang
        >>> field = HopfNetwork()
        >>> step = strang(field.saturation_flow, field.linear_flow)
        >>> advance = step(HopfParams(growth=[0.0], frequency=[jnp.pi]), jnp.asarray(1.0))
        >>> print(advance(0.0, jnp.array([[1.0], [0.0]]))[0])  # half a turn, -1 / sqrt(3)
        [-0.57735027]

    Source: Strang 1968; Hairer, Lubich & Wanner 2006 (from memory).
    """
    return _composed(outer, inner, (1.0,), substeps)


def suzuki(outer: Flow, inner: Flow, *, substeps: int = 1) -> Step:
    """Make the five-stage composition of Strang steps: order 4, time-symmetric.

        S4(h) = S(ph) S(ph) S((1 - 4p)h) S(ph) S(ph),  p = 1 / (4 - 4^(1/3))

    The middle stage runs backwards in time by 0.66 h, so both flows must exist backwards: the
    saturation of a Hopf unit does while `b h r^2 < 0.75` or so. Not for noisy or damped-only parts.

    Arguments:
        outer: flow applied in half stages, `flow(params, h) -> apply`.
        inner: flow applied in whole stages.
        substeps: how many equal steps make up one `h`; default 1.

    Returns:
        A step: `step(params, h) -> advance`, `advance(t, y) -> y`.

    Raises:
        ValueError: `substeps` is below 1.
        TypeError: `substeps` is not an int.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import suzuki
        >>> field = HopfNetwork()
        >>> step = suzuki(field.saturation_flow, field.linear_flow)
        >>> advance = step(HopfParams(growth=[0.5], frequency=[0.0]), jnp.asarray(0.1))
        >>> print(advance(0.0, jnp.array([[0.2], [0.0]])).ravel().round(6))
        [0.209375 0.      ]

    Source: Suzuki 1990; Hairer, Lubich & Wanner 2006 (from memory).
    """
    return _composed(outer, inner, _SUZUKI, substeps)


def _composed(outer: Flow, inner: Flow, stages: tuple[float, ...], substeps: int) -> Step:
    substeps = check_count("substeps", substeps)

    def step(params, h):
        small = h / substeps
        # Half steps of the outer flow that meet are one: b_k / 2 + b_(k+1) / 2, also across steps.
        # Each flow is prepared once for each length it is needed at: that may cost a matrix
        # exponential.
        meeting = [(b + c) / 2 for b, c in itertools.pairwise(stages)]
        across = (stages[0] + stages[-1]) / 2
        ends = [stages[0] / 2, stages[-1] / 2]
        needed = dict.fromkeys([*ends, *meeting, *([across] if substeps > 1 else [])])
        outers = {b: outer(params, b * small) for b in needed}
        inners = {b: inner(params, b * small) for b in dict.fromkeys(stages)}
        first, last = (outers[b] for b in ends)
        between = [outers[b] for b in meeting]

        def stages_within(y):
            for k, b in enumerate(stages):
                y = inners[b](y)
                y = between[k](y) if k < len(between) else y
            return y

        def advance(t, y):
            del t
            y = stages_within(first(y))
            if substeps > 1:
                y = lax.fori_loop(1, substeps, lambda _, y: stages_within(outers[across](y)), y)
            return last(y)

        return advance

    return step
