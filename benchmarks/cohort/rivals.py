"""What a user would take instead: simple statistics and networks that know no equation."""

from functools import partial
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import optax
import slices

from oscillib import encoders, evaluate
from oscillib.integrate import rk4, rollout


BATCH = 16
ORDERS, RIDGES = (1, 2, 4), (1e-3, 1e-2, 1e-1, 1.0)
HIDDEN, RATES = 48, (1e-2, 3e-3)
CHECKS = 6  # looks at the validation part during a training, the best of which is kept


def error(forecasts: Any, cohort: slices.Cohort) -> np.ndarray:
    """Return the root mean square error of forecasts at each step, shape `(horizon,)`."""
    truth, seen = future(cohort)
    off = jnp.where(seen, forecasts - truth, 0.0)
    return np.sqrt(np.asarray(jnp.sum(off**2, (0, 1, 3)) / jnp.sum(seen, (0, 1, 3))))


def future(cohort: slices.Cohort) -> tuple[Any, Any]:
    """Return what follows the origins: values and mask, `(recording, origin, horizon, pixel)`."""
    follow = jax.vmap(partial(evaluate.targets, horizon=slices.HORIZON), (0, None))
    origins = jnp.array(slices.ORIGINS)
    return follow(cohort.values, origins), follow(cohort.mask, origins)


def simple(cohort: slices.Cohort, kind: str) -> Any:
    """Forecast by the time average or by persistence."""
    forecast = {"average": evaluate.time_average, "persistence": evaluate.persistence}[kind]
    return jax.vmap(lambda v, m: forecast(v, m, np.array(slices.ORIGINS), slices.HORIZON))(
        cohort.values, cohort.mask
    )


def autoregression(train: slices.Cohort, check: slices.Cohort, test: slices.Cohort) -> Any:
    """Forecast by one ridge vector autoregression; order and ridge are chosen on `check`."""

    @jax.jit
    def forecasts(model, cohort):
        return jax.lax.map(
            lambda x: evaluate.forecast_autoregression(
                model, x[0], x[1], np.array(slices.ORIGINS), slices.HORIZON
            ),
            (cohort.values, cohort.mask),
            batch_size=25,
        )

    best, found = np.inf, None
    for order in ORDERS:
        for ridge in RIDGES:
            values, mask = slices.beginning(train)
            model = evaluate.fit_autoregression(values, mask, order=order, ridge=ridge)
            score = np.mean(error(forecasts(model, check), check) ** 2)
            if score < best:
                best, found = score, model
    return forecasts(found, test)


class Recurrent(eqx.Module):
    """A recurrent predictor: reads up to the origin, then lives on its own forecasts."""

    cell: eqx.nn.GRUCell
    out: eqx.nn.Linear

    def __init__(self, *, key: Any):
        """Draw the weights."""
        keys = jax.random.split(key)
        self.cell = eqx.nn.GRUCell(2 * slices.PIXELS, HIDDEN, key=keys[0])
        self.out = eqx.nn.Linear(HIDDEN, slices.PIXELS, key=keys[1])

    def forecast(self, memory: Any) -> Any:
        """Forecast from what was read up to the origin, shape `(horizon, pixel)`."""

        def one(memory, _):
            read = self.out(memory)
            own = jnp.concatenate([read, jnp.ones_like(read)])
            return self.cell(own, memory), read

        return jax.lax.scan(one, memory, None, length=slices.HORIZON)[1]


class Latent(eqx.Module):
    """A latent state that moves by a free neural field; read linearly."""

    cell: eqx.nn.GRUCell
    start: eqx.nn.Linear
    field: encoders.Network
    out: eqx.nn.Linear

    def __init__(self, size: int, *, key: Any):
        """Draw the weights; `size` is that of the latent state."""
        keys = jax.random.split(key, 4)
        self.cell = eqx.nn.GRUCell(2 * slices.PIXELS, HIDDEN, key=keys[0])
        self.start = eqx.nn.Linear(HIDDEN, size, key=keys[1])
        self.field = encoders.Network(size, size, width=32, depth=1, key=keys[2])
        self.out = eqx.nn.Linear(size, slices.PIXELS, key=keys[3])

    def forecast(self, memory: Any) -> Any:
        """Forecast from what was read up to the origin, shape `(horizon, pixel)`."""
        step = rk4(lambda t, y, field: 0.3 * field(y))
        states = rollout(step, self.field, self.start(memory), 1.0, slices.HORIZON)
        return jax.vmap(self.out)(states[1:])


MAKERS = {
    "recurrent predictor": Recurrent,
    "neural field, 12 states": partial(Latent, 2 * slices.REGIONS),
    "neural field, 18 states": partial(Latent, 3 * slices.REGIONS),
}


def read(model: Any, values: Any, mask: Any) -> Any:
    """Return what the cell remembers after each sample, shape `(time, hidden)`."""
    inputs = jnp.concatenate([jnp.where(mask, 4 * (values - 0.5), 0), mask.astype(float)], axis=1)
    return encoders.recur(model.cell, inputs, jnp.ones(values.shape[0], bool))


def predict(model: Any, values: Any, mask: Any, origins: Any) -> Any:
    """Forecast one recording, shape `(origin, horizon, pixel)`, in units of the light."""
    memory = read(model, values, mask)[origins]
    return 0.5 + jax.vmap(model.forecast)(memory) / 4


OPTIMISER = optax.inject_hyperparams(optax.adam)(learning_rate=0.0)


@eqx.filter_jit
def _update(model: Any, memory: Any, data: Any, origins: Any, rate: Any):
    def loss(model):
        def one(values, mask, origins):
            off = predict(model, values, mask, origins)
            truth = evaluate.targets(values, origins, slices.HORIZON)
            seen = evaluate.targets(mask, origins, slices.HORIZON)
            return jnp.sum(jnp.where(seen, off - truth, 0) ** 2) / jnp.maximum(jnp.sum(seen), 1)

        return jnp.mean(jax.vmap(one)(data[0], data[1], origins))

    gradient = eqx.filter_grad(loss)(model)
    memory.hyperparams["learning_rate"] = rate
    change, memory = OPTIMISER.update(gradient, memory)
    return eqx.apply_updates(model, change), memory


@eqx.filter_jit
def _forecasts(model: Any, cohort: slices.Cohort) -> Any:
    return jax.vmap(predict, (None, 0, 0, None))(
        model, cohort.values, cohort.mask, jnp.array(slices.ORIGINS)
    )


def network(
    kind: str, train: slices.Cohort, check: slices.Cohort, test: slices.Cohort, steps: int, key: Any
) -> Any:
    """Train a network to forecast, keep the rate and the moment that do best on `check`."""
    best, found = np.inf, None
    values, mask = slices.beginning(train)
    for rate in RATES:
        model = MAKERS[kind](key=key)
        memory = OPTIMISER.init(eqx.filter(model, eqx.is_inexact_array))
        for step in range(steps):
            draw, at = jax.random.split(jax.random.fold_in(key, step))
            chosen = jax.random.randint(draw, (BATCH,), 0, values.shape[0])
            origins = jax.random.randint(at, (BATCH, 4), 16, slices.SEEN - slices.HORIZON)
            now = jnp.asarray(rate * (1 + np.cos(np.pi * step / steps)) / 2)
            data = (values[chosen], mask[chosen])
            model, memory = _update(model, memory, data, origins, now)
            if (step + 1) % (steps // CHECKS) == 0:
                score = np.mean(error(_forecasts(model, check), check) ** 2)
                if score < best:
                    best, found = score, model
    return _forecasts(found, test)
