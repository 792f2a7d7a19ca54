"""The residuals of windowed shooting and their forward-mode derivatives, window by window."""

from collections.abc import Callable
from typing import Any, NamedTuple

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float

from ..integrate import Windows, rollout
from ._block import Rows, triangle
from ._shooting_unknowns import Unknowns


class Moved(NamedTuple):
    """One value for each unknown: the iterate itself, a change of it, a gradient.

    Attributes:
        own: parameters of each recording alone.
        shared: parameters shared by all.
        starts: start of each window, state flattened.
    """

    own: Float[Array, "recording po"]
    shared: Float[Array, " ps"]
    starts: Float[Array, "recording window n"]


class Linear(NamedTuple):
    """The problem at one iterate.

    Attributes:
        rows: linearised residuals and gaps, compressed; leading axis of recordings.
        misfit: half the sum of squared residuals, priors included, continuity not.
        predicted: channels at every sample of every window; anything past a recording's end.
    """

    rows: Rows
    misfit: Float[Array, ""]
    predicted: Float[Array, "recording window sample channel"]


class Data(eqx.Module):
    """What was observed, laid out by window; every array has a leading axis of recordings.

    Attributes:
        values: 0 where nothing counts.
        weights: 1 / scale where an observed sample is owned by the window, else 0.
        t0: time of each window's first sample.
        intervals: `(recording,)`, or `(recording, window, length)` if irregular.
        start_mean: centre of the prior on starts.
        start_weight: 1 / its standard deviation.
    """

    values: Float[Array, "recording window sample channel"]
    weights: Float[Array, "recording window sample channel"]
    t0: Float[Array, "recording window"]
    intervals: Float[Array, "recording *window_step"]
    start_mean: Float[Array, "recording window n"] | None
    start_weight: Float[Array, "recording window n"] | None


class Residual(eqx.Module):
    """Residuals of windowed shooting as a function of the unknowns."""

    step: Callable
    readout: Callable
    unknowns: Unknowns
    data: Data
    windows: Windows
    state_shape: tuple[int, ...] = eqx.field(static=True)
    prior: tuple[Moved, Moved] | None  # mean and inverse standard deviation; starts unused

    def linearise(self, at: Moved) -> Linear:
        """Evaluate residuals, gaps and all derivatives at an iterate."""
        own_template, _ = self.unknowns.split_template()
        n = at.starts.shape[-1]
        each = jax.vmap(self._recording, in_axes=(0, None, 0, 0, 0))
        residuals, jacobian, predicted, ends, slopes = each(
            at.own, at.shared, at.starts, own_template, self.data
        )
        stacked = jnp.concatenate([jacobian, residuals[..., None]], axis=-1)
        rows = Rows(
            own=jax.vmap(jax.vmap(lambda a: triangle(a, n)))(stacked),
            ends=slopes[:, :-1],
            gaps=ends[:, :-1] - at.starts[:, 1:],
        )
        misfit = jnp.sum(residuals**2) / 2
        for block in self.prior_rows(at):
            misfit += jnp.sum(block[..., -1] ** 2) / 2
        return Linear(rows, misfit, predicted)

    def gradient(self, linear: Linear, at: Moved) -> Moved:
        """Return the gradient of the misfit."""
        own, prior = linear.rows.own, self.prior_rows(at)
        # The rows are a triangular factor of the Jacobian and the residuals: J'r = R'r.
        window = jnp.einsum("rkmx,rkm->rkx", own[..., :-1], own[..., -1])
        return _by_unknown(
            window, at, [jnp.einsum("...mx,...m->...x", b[..., :-1], b[..., -1]) for b in prior]
        )

    def curvature(self, linear: Linear, at: Moved) -> Moved:
        """Return the curvature of the misfit along each unknown, by Gauss-Newton."""
        window = jnp.sum(linear.rows.own[..., :-1] ** 2, axis=2)
        prior = [jnp.sum(b[..., :-1] ** 2, axis=-2) for b in self.prior_rows(at)]
        return _by_unknown(window, at, prior)

    def prior_rows(self, at: Moved) -> tuple[Array, Array]:
        """Return the prior's rows, `(recording, po, po + 1)` and `(ps, ps + 1)`."""
        if self.prior is None:
            dtype = at.shared.dtype
            recordings, po, ps = at.own.shape[0], at.own.shape[1], at.shared.shape[0]
            return jnp.zeros((recordings, 0, po + 1), dtype), jnp.zeros((0, ps + 1), dtype)
        mean, weight = self.prior

        def rows(x, mean, weight):
            return jnp.concatenate([jnp.diag(weight), (weight * (x - mean))[:, None]], axis=1)

        return (
            jax.vmap(rows)(at.own, mean.own, weight.own),
            rows(at.shared, mean.shared, weight.shared),
        )

    def _recording(self, own, shared, starts, own_template, data: Data):
        parameters = jnp.concatenate([own, shared])
        scalar = data.intervals.ndim == 0
        po, n = own.shape[0], starts.shape[-1]

        def window(start, t0, h, values, weights, mean, weight):
            def residuals(x):
                params = self.unknowns.one(x[n : n + po], x[n + po :], own_template)
                states = rollout(
                    self.step,
                    params,
                    x[:n].reshape(self.state_shape),
                    h,
                    self.windows.length if scalar else None,
                    t0=t0,
                )
                predicted = jax.vmap(self.readout, in_axes=(0, None))(states, params)
                # What does not count is replaced before the arithmetic, so that a state that is
                # not finite past the end of a recording cannot reach a derivative.
                counted = jnp.where(weights > 0, predicted, 0)
                rows = [((counted - values) * weights).ravel()]
                if mean is not None:
                    rows.append((x[:n] - mean) * weight)
                return jnp.concatenate(rows), predicted, states[-1].ravel()

            x = jnp.concatenate([start, parameters])
            basis = jnp.eye(x.shape[0], dtype=x.dtype)
            push = jax.vmap(lambda v: jax.jvp(residuals, (x,), (v,)), out_axes=(None, -1))
            (rows, predicted, end), (jacobian, _, slope) = push(basis)
            return rows, jacobian, predicted, end, slope

        axes = (0, 0, None if scalar else 0, 0, 0, 0, 0)
        return jax.vmap(window, in_axes=axes)(
            starts,
            data.t0,
            data.intervals,
            data.values,
            data.weights,
            data.start_mean,
            data.start_weight,
        )


def lay_out(
    windows: Windows,
    values: Array,
    mask: Bool[Array, "recording time channel"],
    scale: Float[Array, " channel"],
    start_prior: tuple[Array, Array] | None,
) -> Data:
    """Lay recordings out by window; windows may have a leading axis of recordings."""
    count = values.shape[0]
    index, owned = windows.index, jnp.asarray(windows.owned)
    counts = mask[:, index] & owned[None, :, :, None]
    inverse = jnp.broadcast_to(1 / scale, counts.shape)
    batched = windows.t0.ndim == 2

    def each(x: Any) -> Array:
        return x if batched else jnp.broadcast_to(x, (count, *x.shape))

    mean, weight = (None, None) if start_prior is None else start_prior
    return Data(
        values=jnp.where(counts, values[:, index], 0),
        weights=jnp.where(counts, inverse, 0),
        t0=each(windows.t0),
        intervals=each(windows.intervals),
        start_mean=mean,
        start_weight=weight,
    )


def _by_unknown(window: Array, at: Moved, prior: list[Array]) -> Moved:
    """Split what windows add for `(start, own, shared)` by unknown, and add the prior's part."""
    n, po = at.starts.shape[-1], at.own.shape[-1]
    border = jnp.sum(window[..., n:], axis=1)
    return Moved(
        own=border[:, :po] + prior[0],
        shared=jnp.sum(border[:, po:], axis=0) + prior[1],
        starts=window[..., :n],
    )
