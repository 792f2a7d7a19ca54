"""What is believed of the parameters before a recording is seen."""

from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
from jax.flatten_util import ravel_pytree
from jaxtyping import Array, Float

from .._validate import as_float, check_shape, check_values
from ..parameters import constrain, unconstrain
from ._gaussian import FreeGaussian


class Prior(eqx.Module):
    """Gaussian prior over the unconstrained leaves of any PyTree of parameters, and the way back.

        free ~ N(unconstrain(params), sd^2),    params = constrain(free)

    `free` is the flat vector of all unconstrained leaves, in the order of the tree; `Fixed` leaves
    are not in it. It is no part of an `Encoder`, so that no optimiser can move it. All leaves are
    arrays: it passes through `jit` and `vmap` as it is. For a prior with correlations put another
    `FreeGaussian` in place of `law` with `eqx.tree_at`.

    Arguments:
        params: PyTree of parameters: the middle of the prior, and the values of `Fixed` leaves.
        constraints: tree of constraints, of the same structure; static, so each must be hashable.
        sd: standard deviation on the unconstrained scale, above 0: one number for all, or a tree
            like `unconstrain(params, constraints)` with a number or an array at each leaf. Of a
            `Positive` parameter it is a relative width: 0.5 means a factor of about 1.6 each way.

    Raises:
        ValueError: the trees differ, a parameter lies outside its constraint, a shape does not fit,
            nothing is free, or (where values are known) `sd` is not above 0.
        TypeError: the free leaves differ in dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import Prior
        >>> from oscillib.fields import HopfParams
        >>> params = HopfParams(growth=[0.1, 0.1], frequency=[6.0, 5.0])
        >>> prior = Prior(params, params.constraints(), sd=0.5)
        >>> prior.law.size  # growth, log frequency, log saturation, two couplings
        8
        >>> print(prior.params(prior.law.mean).frequency)
        [6. 5.]
    """

    law: FreeGaussian
    template: Any
    _rules: tuple[Any, tuple[Any, ...]] = eqx.field(static=True)

    def __init__(self, params: Any, constraints: Any, *, sd: Any):
        """Flatten the parameters and the widths."""
        # A tree of constraints may hold a dict, which is not hashable; its parts are.
        self._rules = (jax.tree.structure(constraints), tuple(jax.tree.leaves(constraints)))
        self.template = jax.tree.map(as_float, params)
        free = unconstrain(self.template, constraints)
        dtypes = sorted({str(leaf.dtype) for leaf in jax.tree.leaves(free)})
        if not dtypes:
            raise ValueError("`constraints` fix every parameter. Fix: let one of them be free.")
        if len(dtypes) > 1:
            raise TypeError(f"`params` must be of one dtype where free; got {', '.join(dtypes)}.")
        mean = ravel_pytree(free)[0]
        self.law = FreeGaussian(mean, jnp.diag(_widths(sd, free)))

    @property
    def constraints(self) -> Any:
        """The tree of constraints."""
        return jax.tree.unflatten(*self._rules)

    @property
    def size(self) -> int:
        """Number of unconstrained parameters."""
        return self.law.size

    def params(self, free: Float[Array, " free"]) -> Any:
        """Return the parameters that a flat vector stands for."""
        check_shape("free", free, self.law.mean.shape, "(free,)")
        return constrain(self._unravel()(free), self.constraints, self.template)

    def free(self, params: Any) -> Float[Array, " free"]:
        """Return the flat vector of parameters."""
        free = ravel_pytree(unconstrain(params, self.constraints))[0]
        check_shape("params, flattened,", free, self.law.mean.shape, "(free,)")
        return free

    def _unravel(self):
        # Shapes alone matter: the template may be traced, and its values are not looked at.
        shapes = jax.eval_shape(lambda p: unconstrain(p, self.constraints), self.template)
        return ravel_pytree(jax.tree.map(lambda s: jnp.zeros(s.shape, s.dtype), shapes))[1]


def _widths(sd: Any, free: Any) -> Float[Array, " free"]:
    leaves = jax.tree.leaves(free)
    if jax.tree.structure(sd) == jax.tree.structure(0.0) and jnp.shape(sd) == ():
        given = [sd] * len(leaves)
    elif jax.tree.structure(sd) == jax.tree.structure(free):
        given = jax.tree.leaves(sd)
    else:
        raise ValueError(
            "`sd` must be one number, or have the structure of `unconstrain(params, constraints)`, "
            f"{jax.tree.structure(free)}; got {jax.tree.structure(sd)}."
        )
    widths = []
    for width, leaf in zip(given, leaves, strict=True):
        width = jnp.asarray(width, leaf.dtype)
        if width.shape not in ((), leaf.shape):
            raise ValueError(
                f"`sd` must hold a number, or an array of shape {leaf.shape}, at a leaf of that "
                f"shape; got shape {width.shape}."
            )
        widths.append(jnp.broadcast_to(width, leaf.shape).reshape(-1))
    sds = jnp.concatenate(widths)
    check_values("sd", sds, lambda s: s > 0, "above 0")
    return sds
