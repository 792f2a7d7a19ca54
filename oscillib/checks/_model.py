"""Models as a whole: estimates from own simulations, and whether intervals hold."""

from collections.abc import Callable
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float

from .._validate import check_count
from ..parameters import unconstrain
from ._failure import fail


Samples = Float[Array, "simulation *parameter"] | Float[np.ndarray, "simulation *parameter"]


def check_recovery(
    simulate: Callable[..., Any],
    fit: Callable[[Any], tuple[Any, Any]],
    params: Any,
    constraints: Any = None,
    *,
    key: Array,
    count: int,
    slack: float = 0.1,
    lost: int = 0,
    alarm: float = 1e-4,
    batched: bool = True,
) -> None:
    """Check that a fit finds the parameters of its own simulations, within its standard errors.

        z = (estimate - truth) / standard error,
        |mean z| <= slack + k / sqrt(count),   sum z^2 <= (1 + slack)^2 q

    for every fitted entry, over `count` simulations; k and q are the normal and chi-square
    quantiles with which a correct fit is refused with a probability of `alarm` at most, over all
    entries together (Bonferroni; z normal). The first catches a biased estimator, the second one
    that is too sure of itself. Too wide standard errors pass: see `check_calibration`.

    Arguments:
        simulate: `simulate(params, key) -> data`, any PyTree.
        fit: `fit(data) -> (estimate, standard_error)`, both in the structure of `params`, such as
            `refine(...).params` and `laplace(...).standard_error`. A standard error of 0 means that
            the entry was not fitted.
        params: PyTree of arrays, the truth.
        constraints: tree of constraints: z is then formed on the unconstrained scale, where the
            estimates of positive parameters are closer to normal; default `None`, as they are.
        key: random key of the simulations.
        count: how many simulations.
        slack: bias allowed, in standard errors, and excess of the spread; default 0.1: what an
            ordinary maximum-likelihood estimate has on short data.
        lost: how many fits may fail (estimate or standard error not finite); default 0. They are
            left out of z.
        alarm: probability of refusing a correct fit; default 1e-4.
        batched: run all simulations in one compiled `vmap`; default True. Set False for a fit that
            cannot be traced: simulations and fits then run one by one.

    Raises:
        AssertionError: the estimates are biased, or further off than their standard errors say;
            fits were lost; nothing was fitted.
        ValueError: `count` is below 2; the trees differ.
        TypeError: `count` is not an int.

    Example:
        >>> import jax, jax.numpy as jnp
        >>> from oscillib.checks import check_recovery
        >>> simulate = lambda mean, key: mean + jax.random.normal(key, (50,))
        >>> fit = lambda data: (jnp.mean(data), jnp.asarray(50**-0.5))
        >>> check_recovery(simulate, fit, jnp.asarray(2.0), key=jax.random.key(0), count=100)

    Source: common practice, no source.
    """
    import scipy.stats

    count = check_count("count", count, least=2)
    params = jax.tree.map(jnp.asarray, params)
    keys = jax.random.split(key, count)
    run = _together if batched else _one_by_one
    estimates, errors = run(simulate, fit, params, keys)
    z, names = _standardised(estimates, errors, params, constraints)
    if not names:
        _wrong("something is fitted", None, "a standard error above 0", "none", "see `fit`")
    good = np.all(np.isfinite(z), axis=1)
    failed = int(np.sum(~good))
    if failed > lost:
        k = int(np.argmin(good))
        column = int(np.argmax(~np.isfinite(z[k])))
        _wrong(
            "every fit succeeds",
            names[column],
            f"at most {lost} of {count} fits lost",
            f"{failed}, the first one simulation {k}",
            "look at this simulation, take longer data, or allow for it by `lost`",
        )
    z, n = z[good], int(np.sum(good))
    share = alarm / (2 * z.shape[1])
    bound = slack + float(scipy.stats.norm.isf(share / 2)) / np.sqrt(n)
    mean = z.mean(axis=0)
    worst = int(np.argmax(np.abs(mean)))
    if not abs(mean[worst]) <= bound:
        _wrong(
            "estimates are not biased",
            names[worst],
            f"mean z of 0, within {bound:.3g} ({n} simulations, false alarm {alarm:.0e})",
            f"{mean[worst]:.3g} standard errors",
            "the estimator is biased, or simulation and fit differ in a convention or unit",
        )
    spread = np.sqrt(np.mean(z**2, axis=0))
    limit = (1 + slack) * np.sqrt(float(scipy.stats.chi2.isf(share, n)) / n)
    worst = int(np.argmax(spread))
    if not spread[worst] <= limit:
        _wrong(
            "standard errors are large enough",
            names[worst],
            f"root mean square z of 1, at most {limit:.3g} ({n} simulations, "
            f"false alarm {alarm:.0e})",
            f"{spread[worst]:.3g}",
            "the intervals are overconfident: samples that depend on each other counted as "
            "independent, or a wrong noise level?",
        )


def check_calibration(
    *,
    z: Samples | None = None,
    inside: Any = None,
    ranks: Any = None,
    draws: int | None = None,
    level: float = 0.9,
    bins: int | None = None,
    alarm: float = 1e-4,
) -> None:
    """Check that intervals cover the truth as often as they say, or that ranks are uniform.

    Give one of three, the first axis being independent simulations:

    - `z`, standardised errors: `|z|` is below the normal quantile of `level`;
    - `inside`, booleans: the truth was within its interval. The number covered is binomial, and
      must lie within the exact bounds;
    - `ranks`: how many of `draws` posterior draws lie below the truth, the truth itself being drawn
      from the prior. Uniform on `0 ... draws` if the posterior is right: by chi-square over `bins`.

    Each is done for every parameter; `alarm` is the probability of refusing a correct model, over
    all of them together (Bonferroni). It is exact or less for coverage, asymptotic for ranks.

    Arguments:
        z: shape `(simulation, *parameter)`.
        inside: booleans, same shape.
        ranks: integers in `0 ... draws`, same shape.
        draws: number of posterior draws of each simulation; required with `ranks`. Thin correlated
            draws first.
        level: probability of the intervals; default 0.9.
        bins: number of bins, a divisor of `draws + 1`; default the largest up to 20 that leaves 5
            ranks to each.
        alarm: probability of refusing a correct model; default 1e-4.

    Raises:
        AssertionError: coverage or ranks are not as they should be; the message says which way.
        ValueError: none or several are given; too few simulations to refuse anything; `bins` does
            not divide `draws + 1`; ranks out of range; something is not finite.
        TypeError: `inside` is not boolean, or `ranks` not whole numbers.

    Example:
        >>> import jax
        >>> from oscillib.checks import check_calibration
        >>> check_calibration(z=jax.random.normal(jax.random.key(0), (400, 2)), level=0.9)

    Source: ranks, Talts, Betancourt, Simpson, Vehtari & Gelman 2018 (arXiv 1804.06788).
    """
    import scipy.stats

    given = {"z": z, "inside": inside, "ranks": ranks}
    chosen = [name for name, value in given.items() if value is not None]
    if len(chosen) != 1:
        got = " and ".join(chosen) or "none"
        raise ValueError(f"give exactly one of `z`, `inside` and `ranks`; got {got}.")
    if not 0 < level < 1:
        raise ValueError(f"`level` must lie strictly between 0 and 1; got {level}.")
    values = np.asarray(given[chosen[0]])
    if values.ndim == 0 or values.size == 0:
        raise ValueError(
            f"`{chosen[0]}` must have shape (simulation, ...); got shape {values.shape}."
        )
    share = alarm / max(1, values[0].size)
    if ranks is not None:
        _check_ranks(values, draws, bins, share, alarm)
        return
    if z is not None:
        if not np.all(np.isfinite(values)):
            raise ValueError("`z` must be finite. Fix: leave lost fits out, and say how many.")
        values = np.abs(values) <= scipy.stats.norm.isf((1 - level) / 2)
    elif values.dtype != np.bool_:
        raise TypeError(f"`inside` must be boolean; got dtype {values.dtype}.")
    _check_coverage(values, level, share, alarm)


def _check_coverage(inside: np.ndarray, level: float, share: float, alarm: float) -> None:
    import scipy.stats

    n = len(inside)
    least = int(scipy.stats.binom.ppf(share / 2, n, level))
    most = int(scipy.stats.binom.isf(share / 2, n, level))
    if least <= 0:
        raise ValueError(f"{n} simulations are too few to refuse anything at alarm {alarm:.0e}.")
    covered = inside.sum(axis=0)
    outside = np.maximum(least - covered, covered - most)
    index = tuple(int(i) for i in np.unravel_index(np.argmax(outside), outside.shape))
    if outside[index] <= 0:
        return
    few = covered[index] < least
    _wrong(
        f"coverage of {level:.0%} intervals",
        "parameter",
        f"{least} to {most} of {n} (exact binomial, false alarm {alarm:.0e})",
        f"{int(covered[index])} of {n} ({covered[index] / n:.1%})",
        "the intervals are overconfident, or their centres biased"
        if few
        else "the intervals are too wide",
        index,
    )


def _check_ranks(
    ranks: np.ndarray, draws: int | None, bins: int | None, share: float, alarm: float
) -> None:
    import scipy.stats

    if draws is None:
        raise ValueError("`draws` must be given with `ranks`: how many draws each was taken among.")
    draws = check_count("draws", draws)
    if not np.issubdtype(ranks.dtype, np.integer):
        raise TypeError(f"`ranks` must be whole numbers (integers); got dtype {ranks.dtype}.")
    if ranks.min() < 0 or ranks.max() > draws:
        raise ValueError(f"`ranks` must lie in 0 ... {draws}; got {ranks.min()} to {ranks.max()}.")
    n, outcomes = len(ranks), draws + 1
    fitting = [b for b in range(2, 21) if outcomes % b == 0 and n >= 5 * b]
    bins = check_count("bins", bins, least=2) if bins is not None else max(fitting, default=0)
    if bins == 0 or outcomes % bins or n < 5 * bins:
        raise ValueError(
            f"`bins` must divide `draws + 1` = {outcomes} and leave 5 of {n} ranks to each; got "
            f"{bins or 'none that does'}. Fix: take `draws` = 19 or 99, and more simulations."
        )
    flat = ranks.reshape(n, -1) * bins // outcomes
    counts = np.stack([np.bincount(column, minlength=bins) for column in flat.T])
    statistic = np.sum((counts - n / bins) ** 2, axis=1) / (n / bins)
    worst = int(np.argmax(statistic))
    bound = float(scipy.stats.chi2.isf(share, bins - 1))
    if statistic[worst] <= bound:
        return
    place = (ranks.reshape(n, -1)[:, worst] + 0.5) / outcomes - 0.5
    shift, width = float(place.mean() * np.sqrt(12 * n)), float(place.var() * 12)
    if abs(shift) > 4:
        hint = f"the draws lie too {'low' if shift > 0 else 'high'}: a biased posterior"
    else:
        hint = "an overconfident posterior" if width > 1 else "too wide a posterior"
    _wrong(
        "ranks are uniform",
        "parameter",
        f"chi-square at most {bound:.3g} ({bins} bins, false alarm {alarm:.0e})",
        f"{statistic[worst]:.4g}, counts {counts[worst].tolist()}",
        hint,
        tuple(int(i) for i in np.unravel_index(worst, ranks.shape[1:])),
    )


@eqx.filter_jit
def _together(simulate: Any, fit: Any, params: Any, keys: Array) -> Any:
    return jax.vmap(lambda key: fit(simulate(params, key)))(keys)


def _one_by_one(simulate: Any, fit: Any, params: Any, keys: Array) -> Any:
    results = [fit(simulate(params, k)) for k in keys]
    return jax.tree.map(lambda *x: np.stack([np.asarray(v) for v in x]), *results)


def _standardised(
    estimates: Any, errors: Any, params: Any, constraints: Any
) -> tuple[np.ndarray, list[str]]:
    """Return z of what is fitted, `(simulation, entry)`, NaN where lost, and the entries' names."""
    expected = jax.tree.structure(params)
    for name, tree in (("estimate", estimates), ("standard_error", errors)):
        got = jax.tree.structure(tree)
        if got != expected:
            raise ValueError(
                f"`fit` must return the {name} in the structure of `params`, {expected}; got {got}."
            )
    truth = params
    if constraints is not None:
        to_free = lambda p: unconstrain(p, constraints)
        # The tangent of the map carries the standard error over to the other scale.
        as_arrays = jax.tree.map(jnp.asarray, (estimates, errors))
        estimates, errors = jax.vmap(lambda p, s: jax.jvp(to_free, (p,), (s,)))(*as_arrays)
        truth = to_free(params)
    names, columns = [], []
    paths = jax.tree_util.tree_leaves_with_path(truth)
    leaves = zip(paths, jax.tree.leaves(estimates), jax.tree.leaves(errors), strict=True)
    for (path, true), estimate, error in leaves:
        true, estimate = np.asarray(true, float), np.asarray(estimate, float)
        error = np.broadcast_to(np.abs(np.asarray(error, float)), estimate.shape)
        for index in np.ndindex(true.shape):
            one, width = estimate[(slice(None), *index)], error[(slice(None), *index)]
            if not np.any(width):
                continue
            known = np.isfinite(one) & np.isfinite(width) & (width != 0)
            with np.errstate(divide="ignore", invalid="ignore"):
                columns.append(np.where(known, (one - true[index]) / width, np.nan))
            where = f"[{', '.join(map(str, index))}]" if index else ""
            names.append(f"params{jax.tree_util.keystr(path)}{where}")
    return np.stack(columns, axis=1) if names else np.zeros((0, 0)), names


def _wrong(
    prop: str, leaf: Any, expected: str, got: str, hint: str, index: tuple[int, ...] | None = None
) -> None:
    fail(prop, leaf=leaf or "fit", index=index, expected=expected, got=got, hint=hint)
