"""A small training run as a program of its own, so that it can have any number of devices.

    python training.py DEVICES [PROCESS PROCESSES PORT] [--meshes N ...] [--free N ...] [--group N]
        [--steps N] [--file RUN.npz]

Prints a line of JSON: for each mesh, over so many devices, the bits of parameters, optimiser state
and losses; with --free also where the compiler shares the work out (`group=None`).
"""

import argparse
import json

import jax
import jax.numpy as jnp
import numpy as np
import optax

from oscillib.cohort import (
    batches,
    load_checkpoint,
    mean_over_recordings,
    recording_mesh,
    save_checkpoint,
)


UNITS, CHANNELS, SAMPLES = 5, 2, 6
SOURCE = list(np.random.default_rng(0).normal(size=(10, SAMPLES, CHANNELS)))


def loss(params, both):
    """Read a noisy recording by a recurrence and an attention over its outputs."""
    x, key = both
    x = x + 0.1 * jax.random.uniform(key, x.shape)

    def turn(h, x):
        h = jnp.tanh(params["back"] @ h + params["in"] @ x)
        return h, h

    _, h = jax.lax.scan(turn, jnp.zeros(UNITS, x.dtype), x)
    weights = jax.nn.softmax(h @ params["score"])
    return jnp.sum((params["out"] @ (weights @ h) - 0.7) ** 2)


def start():
    draw = np.random.default_rng(1).normal
    shapes = {"back": (UNITS, UNITS), "in": (UNITS, CHANNELS), "score": (UNITS,), "out": (3, UNITS)}
    params = {name: jnp.asarray(draw(size=shape)) for name, shape in shapes.items()}
    params = jax.device_put(params, jax.local_devices()[0])
    return params, OPTIMISER.init(params), jax.random.key(7)


OPTIMISER = optax.adam(1e-2)


@jax.jit
def update(params, memory, gradient):
    change, memory = OPTIMISER.update(gradient, memory)
    return optax.apply_updates(params, change), memory


@jax.jit
def keys_of(key, step, indices):
    key = jax.random.fold_in(key, step)
    return jax.vmap(jax.random.fold_in, (None, 0))(key, indices)


def train(mesh, *, group, steps, file=None, ready=lambda: None):
    """Run the loop of the room's documentation; with a file, go on from it and save every step."""
    params, memory, key = start()
    step, position, values = 0, None, []
    if file is not None and file.exists():
        saved = load_checkpoint(file, (params, memory), key=key)
        (params, memory), step, key, position, _ = saved
    mean = mean_over_recordings(loss, mesh, group=group)
    stream = batches(SOURCE, size=8, seed=3, last="pad", position=position)
    while step < steps:
        batch = next(stream)
        out = mean(params, (batch.recordings, keys_of(key, step, batch.indices)), batch.present)
        params, memory = update(params, memory, out.gradient)
        values.append((out.value, out.values))
        step += 1
        if file is not None:
            save_checkpoint(file, (params, memory), step=step, key=key, position=batch.position)
            ready()
    return params, memory, values


def bits(tree):
    return [np.asarray(leaf).tobytes().hex() for leaf in jax.tree.leaves(tree)]


def main():
    from pathlib import Path

    parser = argparse.ArgumentParser()
    parser.add_argument("devices", type=int)
    parser.add_argument("process", type=int, nargs="*")
    parser.add_argument("--meshes", type=int, nargs="+")
    parser.add_argument("--free", type=int, nargs="+", default=[])
    parser.add_argument("--group", type=int, default=2)
    parser.add_argument("--steps", type=int, default=4)
    parser.add_argument("--file", type=Path)
    given = parser.parse_args()
    jax.config.update("jax_num_cpu_devices", given.devices)
    jax.config.update("jax_enable_x64", True)
    if given.process:
        index, count, port = given.process
        jax.config.update("jax_cpu_collectives_implementation", "gloo")
        jax.distributed.initialize(f"localhost:{port}", count, index)
    results = {}
    for number in given.meshes or [len(jax.devices())]:
        mesh = recording_mesh(jax.devices()[:number])
        ready = lambda: print("saved", flush=True)
        results[number] = bits(
            train(mesh, group=given.group, steps=given.steps, file=given.file, ready=ready)
        )
        if number in given.free:
            results[f"free {number}"] = bits(train(mesh, group=None, steps=given.steps))
    print(json.dumps(results), flush=True)


if __name__ == "__main__":
    main()
