"""Vector fields as functions: what any field must be, whatever its equation."""

import dataclasses
from collections.abc import Callable, Sequence
from copy import copy
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float

from ._derivative import check_derivatives
from ._failure import assert_close, fail, named_leaves, same_type
from ._tree import aside, cast, is_float, scaled


Field = Callable[[Any, Any, Any], Any]
State = Float[Array, "*state"]
Time = Float[Array, ""] | float

_ORDER = "A field takes (t, y, params), in this order."


def check_output(field: Field, params: Any, y0: State, *, t: Time = 0.0) -> None:
    """Check that `dy` has exactly the shape and dtype of `y`, in both precisions.

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: its parameters.
        y0: a state, shape `(*state)`.
        t: time, default 0.

    Raises:
        AssertionError: shape or dtype differ, or a number of another precision is mixed in.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_output
        >>> check_output(lambda t, y, rate: -rate * y, jnp.asarray(2.0), jnp.ones(3))

    Source: common practice, no source.
    """
    __tracebackhide__ = True
    prop = "output of the field"
    for dtype in (jnp.float64, jnp.float32) if y0.dtype == jnp.float64 else (y0.dtype,):
        time, y, p = (cast(x, dtype) for x in (jnp.asarray(t, y0.dtype), y0, params))
        dy = _traced(prop, jax.eval_shape, field, time, y, p)
        _one_width(prop, field, time, y, p)
        if not hasattr(dy, "shape"):
            fail(prop, expected="one array", got=f"a {type(dy).__name__}", hint=_ORDER)
        same_type(prop, "dy", dy, y, _swapped(field, time, y, p))
        jaxpr = _traced(prop, lambda f, *x: jax.make_jaxpr(f)(*x).jaxpr, field, time, y, p)
        stranger = _other_precision(jaxpr, y.dtype)
        if stranger:
            fail(
                prop, leaf="inside", expected=f"{y.dtype} throughout", got=stranger,
                hint="a constant of fixed precision? Write it as a plain Python number.",
            )  # fmt: skip


def _traced(prop: str, transform: Callable, field: Field, t: Any, y: Any, params: Any) -> Any:
    """Apply a transformation that traces the field; what goes wrong in it is a failure."""
    __tracebackhide__ = True
    try:
        return transform(field, t, y, params)
    except jax.errors.JAXTypeError as problem:
        hint = "a Python `if`, `while`, `float()` or numpy call on a value? Use `jax.numpy`."
        error = problem
    except Exception as problem:  # the field's own, whatever it is
        hint = _swapped(field, t, y, params)
        error = problem
    words = (str(error).strip().splitlines() or [""])[0]
    fail(
        prop, expected="a function of (t, y, params) that can be traced",
        got=f"{type(error).__name__}: {words}", hint=hint,
    )  # fmt: skip


def _swapped(field: Field, t: Any, y: Any, params: Any) -> str:
    """Say whether another order of the arguments gives the right shape."""
    for name, order in {"(y, t, params)": (y, t, params), "(t, params, y)": (t, params, y)}.items():
        try:
            out = jax.eval_shape(field, *order)
        except Exception:
            continue
        if getattr(out, "shape", None) == y.shape:
            return f"{_ORDER} This one gives the right shape when called with {name}."
    return f"{_ORDER} Nothing may be broadcast or left out."


def _one_width(prop: str, field: Field, t: Any, y: Any, params: Any) -> None:
    """Fail where JAX would have to choose between two floating widths."""
    __tracebackhide__ = True
    try:
        with jax.numpy_dtype_promotion("strict"):
            jax.eval_shape(field, t, y, params)
    except Exception as problem:
        if "float32" in str(problem) and "float64" in str(problem):
            fail(
                prop, leaf="inside", expected=f"{y.dtype} throughout",
                got="float32 and float64 in one operation",
                hint="a constant of fixed precision? Write it as a plain Python number.",
            )  # fmt: skip


def _other_precision(jaxpr: Any, dtype: Any) -> str:
    """Name the first floating array of another precision inside a traced function."""
    for x in (*jaxpr.constvars, *jaxpr.invars, *(v for e in jaxpr.eqns for v in e.outvars)):
        other = getattr(x.aval, "dtype", dtype)
        plain = getattr(x.aval, "weak_type", False)  # a Python number, which adapts itself
        if jnp.issubdtype(other, jnp.floating) and other != dtype and not plain:
            return f"an array of {other}, shape {x.aval.shape}"
    for equation in jaxpr.eqns:
        for inner in jax.tree.leaves(equation.params, is_leaf=lambda x: hasattr(x, "eqns")):
            inner = getattr(inner, "jaxpr", inner)
            found = _other_precision(inner, dtype) if hasattr(inner, "eqns") else ""
            if found:
                return found
    return ""


def check_purity(field: Field, params: Any, y0: State, *, t: Time = 0.0) -> None:
    """Check that a field depends on its arguments alone, and may be compiled.

    Nothing may be written into `params`. Two calls must agree to the bit, a compiled call must
    agree with a plain one to rounding, and another compiled call with other values too: a decision
    of Python on a value, hidden state and hidden randomness are caught.

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: its parameters.
        y0: a state, shape `(*state)`.
        t: time, default 0.

    Raises:
        AssertionError: calls disagree, or the field cannot be compiled.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_purity
        >>> check_purity(lambda t, y, rate: -rate * y, jnp.asarray(2.0), jnp.ones(3))

    Source: common practice, no source.
    """
    __tracebackhide__ = True
    prop, time = "purity of the field", jnp.asarray(t, y0.dtype)
    compiled = jax.jit(field)
    before = jax.tree.map(copy, params)
    field(time, y0, params)
    hint = "it writes into its argument: give a new value a new name."
    assert_close(f"{prop}: params", params, before, rtol=0.0, atol=0.0, hint=hint)
    for y in (y0, 0.8 * y0, y0):
        first, second = field(time, y, params), field(time, y, params)
        hint = "hidden state or hidden randomness: all that it depends on must be an argument."
        assert_close(prop, second, first, rtol=0.0, atol=0.0, hint=hint)
        dy = _traced(prop, lambda _, *x: compiled(*x), field, time, y, params)
        rounding = 1e3 * float(jnp.finfo(y.dtype).eps)
        size = float(jnp.max(jnp.abs(first)))
        hint = "a decision or a number is fixed when the function is traced."
        assert_close(f"{prop} under jit", dy, first, rtol=rounding, atol=rounding * size, hint=hint)


def check_batch(field: Field, params: Any, y0: State, *, key: Array, t: Time = 0.0) -> None:
    """Check that `vmap` over states and parameters equals a loop over them.

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: its parameters.
        y0: a state, shape `(*state)`.
        key: random key of the states around it.
        t: time, default 0.

    Raises:
        AssertionError: they differ by more than rounding.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_batch
        >>> check_batch(lambda t, y, k: -k * y, jnp.asarray(2.0), jnp.ones(3),
        ...             key=jax.random.key(0))

    Source: common practice, no source.
    """
    __tracebackhide__ = True
    time = jnp.asarray(t, y0.dtype)
    ys = [aside(y0, by) for by in jax.random.normal(key, (3, *y0.shape), y0.dtype)]
    ps = [scaled(params, scale) for scale in (1.0, 1.1, 0.9)]
    axes = jax.tree.map(lambda x: 0 if is_float(x) else None, params)
    stack = lambda *x: jnp.stack([jnp.asarray(part) for part in x]) if is_float(x[0]) else x[0]
    batch = jax.vmap(lambda y, p: field(time, y, p), in_axes=(0, axes))
    together = batch(jnp.stack(ys), jax.tree.map(stack, *ps))
    one = jax.jit(lambda y, p: field(time, y, p))
    alone = jnp.stack([one(y, p) for y, p in zip(ys, ps, strict=True)])
    rounding = 1e3 * float(jnp.finfo(y0.dtype).eps)
    size = float(jnp.max(jnp.abs(alone)))
    hint = "entries of different states are mixed."
    prop = "batch of states under vmap"
    assert_close(prop, together, alone, rtol=rounding, atol=rounding * size, hint=hint)


def check_traces_once(field: Field, params: Any, y0: State, *, t: Time = 0.0) -> None:
    """Check that new values of time, state and parameters do not compile the field anew.

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: its parameters.
        y0: a state, shape `(*state)`.
        t: time, default 0.

    Raises:
        AssertionError: it is traced again, or a number is kept where no value can be changed: in a
            static field of a module.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_traces_once
        >>> check_traces_once(lambda t, y, rate: -rate * y, jnp.asarray(2.0), jnp.ones(3))

    Source: common practice, no source.
    """
    __tracebackhide__ = True
    prop = "one trace for all values"
    for name in _static_numbers(params):
        fail(
            prop, leaf=f"params{name}", expected="an array", got="a number in a static field",
            hint="every new value would compile anew, and it gets no gradient: convert it to an "
            "array.",
        )  # fmt: skip
    count = 0

    def counted(t, y, params):
        nonlocal count
        count += 1
        return field(t, y, params)

    compiled = jax.jit(counted)
    for scale in (1.0, 1.1, 0.9):
        compiled(jnp.asarray(scale * t, y0.dtype), scale * y0, scaled(params, scale))
    if count > 1:
        fail(prop, expected="1 trace", got=f"{count}", hint="arrays whose shape or dtype changes?")


def _static_numbers(tree: Any, name: str = "") -> list[str]:
    """Name every float in a static field of a module, wherever in the tree."""
    if not dataclasses.is_dataclass(tree) or isinstance(tree, type):
        nodes = jax.tree.leaves(tree, is_leaf=dataclasses.is_dataclass)
        inner = [x for x in nodes if dataclasses.is_dataclass(x) and x is not tree]
        return [found for x in inner for found in _static_numbers(x, name)]
    found = []
    for field in dataclasses.fields(tree):
        value, place = getattr(tree, field.name, None), f"{name}.{field.name}"
        if field.metadata.get("static") and isinstance(value, float):
            found.append(place)
        elif not field.metadata.get("static"):
            found += _static_numbers(value, place)
    return found


def check_gradients(
    field: Field,
    params: Any,
    y0: State,
    *,
    key: Array,
    t: Time = 0.0,
    states: Sequence[State] = (),
    unused: Sequence[str] = (),
    origin: bool = True,
) -> None:
    """Check the derivatives of a field by its state and by every leaf of its parameters.

    At `y0` forward mode, reverse mode and central differences must agree. There, at the origin and
    at `states` all derivatives must be finite in both modes: a square root or an angle at rest is
    the usual way to lose them. Every parameter must move something in one of these states or in
    another one near `y0`. Needs 64-bit floats.

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: its parameters; whole numbers and truth values among them are held.
        y0: a state away from kinks, shape `(*state)`.
        key: random key of the directions.
        t: time, default 0.
        states: further states at which derivatives must be finite, such as states of rest.
        unused: names of parameters, as in messages (`params.gain`), that need not move anything.
        origin: whether the field is defined at the origin, default True; a pull by `1/r^2` is not.

    Raises:
        AssertionError: derivatives disagree, are not finite, or a parameter moves nothing.
        TypeError: not in 64-bit floats.
        ValueError: `unused` names no parameter.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_gradients
        >>> check_gradients(lambda t, y, rate: -rate * y, jnp.asarray(2.0), jnp.ones(3),
        ...                 key=jax.random.key(0))

    Source: common practice, no source.
    """
    __tracebackhide__ = True
    time, (near, key) = jnp.asarray(t, y0.dtype), jax.random.split(key)
    leaves, structure = jax.tree.flatten(params)
    labels = {k: name for k, (name, x) in enumerate(named_leaves(params, "params")) if is_float(x)}
    if missing := set(unused) - set(labels.values()):
        raise ValueError(
            f"`unused` must name parameters, {', '.join(labels.values())}; got {sorted(missing)}."
        )

    def by_leaf(y: Any, floats: dict) -> Any:
        whole = [floats.get(k, leaf) for k, leaf in enumerate(leaves)]
        return field(time, y, jax.tree.unflatten(structure, whole))

    floats = {k: leaves[k] for k in labels}
    both = jax.jit(
        lambda *x: [mode(by_leaf, argnums=(0, 1))(*x) for mode in (jax.jacfwd, jax.jacrev)]
    )
    places = {"`y0`": y0} | ({"the origin": jnp.zeros_like(y0)} if origin else {})
    places |= {f"`states[{i}]`": jnp.asarray(state) for i, state in enumerate(states)}
    found = {place: both(y, floats) for place, y in places.items()}
    for place, modes in found.items():
        for by_state, by_params in modes:
            named = [(labels[k], x) for k, x in by_params.items()]
            _finite(f"derivative at {place}", [("y", by_state), *named])
    check_derivatives(
        lambda y, params: field(time, y, params), y0, params, key=key, names=("y", "params")
    )
    found["near"] = both(aside(y0, jax.random.normal(near, y0.shape, y0.dtype)), floats)
    for k, label in labels.items():
        moves = any(np.any(modes[0][1][k] != 0) for modes in found.values())
        if not moves and label not in unused and np.size(leaves[k]):
            fail(
                f"influence of {label}", expected="a derivative somewhere", got="0 everywhere",
                hint="does the field use it? If it need not here, name it in `unused`.",
            )  # fmt: skip


def _finite(prop: str, leaves: list[tuple[str, Any]]) -> None:
    __tracebackhide__ = True
    for name, leaf in leaves:
        bad = np.argwhere(~np.isfinite(np.asarray(leaf)))
        if len(bad):
            index = tuple(int(i) for i in bad[0])
            got = np.asarray(leaf)[index]
            fail(
                prop, leaf=f"by {name}", index=index, expected="a finite number", got=got,
                hint="a root, norm, angle or division at zero? Replace its argument before it, by "
                "`jnp.where`, or write it without.",
            )  # fmt: skip
