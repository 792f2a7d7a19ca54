"""Time one training step's mean over a cohort against recordings, devices and processes.

Run: `python benchmarks/scaling.py`. The work is the loss of an encoder, and its gradient, over
simulated recordings of 100 samples and 4 channels with gaps. Three ways of taking the mean:

    group  `mean_over_recordings` in groups of 16 recordings: the same bits on any number of devices
    plain  what one writes without it: `jit(value_and_grad(mean(vmap(loss))))`, the batch cut over
           the devices by `jax.sharding` (`group=None` does this too); the compiler adds up
           gradients over the devices where it finds them, here at every sample of the recurrence
    shard  the same within `jax.shard_map`, so that gradients are added over devices once

Every row is a program of its own, so that its devices, what it compiles and its memory are its own.
Time is the best of several calls after the first. Compile time is by how much longer the first
call took: `group` compiles one small program for each device, `plain` one large one. Memory is by
how much the program's peak grew from the first call on; some 200 MiB of it are the compiler's own.
Bits: do value and gradient equal, to the last bit, those of the same way on one device.

Virtual devices share the cores of the machine: on 2 cores, 8 of them give at most what 2 cores
give, and show what cutting the work costs, not what 8 machines would gain.
"""

import argparse
import hashlib
import json
import os
import resource
import socket
import subprocess
import sys
import time

import jax
import jax.numpy as jnp
import numpy as np
from jax.sharding import PartitionSpec

from oscillib.cohort import mean_over_recordings, place, recording_mesh, replicate
from oscillib.encoders import AttentionPool, Encoder, GaussianHead, Prior, Recurrence, SampleMap
from oscillib.fields import HopfParams
from oscillib.losses import posterior_loss


SAMPLES, CHANNELS, WIDTH, GROUP, COUNT, REPEATS = 100, 4, 16, 16, 256, 20


def make_work(count):
    """An encoder, its loss, and rhythms of random frequency with reading noise and gaps."""
    hopf = HopfParams(growth=[0.1] * CHANNELS, frequency=[6.0] * CHANNELS)
    prior = Prior(hopf, hopf.constraints(), sd=0.3)
    keys = jax.random.split(jax.random.key(0), 4)
    encoder = Encoder(
        SampleMap(CHANNELS, WIDTH, key=keys[0]),
        Recurrence(WIDTH, WIDTH, key=keys[1]),
        AttentionPool(2 * WIDTH, heads=2, key=keys[2]),
        GaussianHead(2 * WIDTH, prior.size, key=keys[3]),
    )

    rng = np.random.default_rng(0)
    # A new head is at zero, which lets no gradient through: this one has been moved off it.
    encoder = jax.tree.map(lambda w: w + 0.1 * rng.standard_normal(w.shape), encoder)

    def loss(encoder, row):
        values, mask, free = row
        return posterior_loss(encoder(None, values, mask, prior).law, free)

    free = np.asarray(prior.law.mean) + 0.3 * rng.standard_normal((count, prior.size))
    frequency = np.asarray(jax.vmap(prior.params)(jnp.asarray(free)).frequency)[:, None]
    phase = frequency * 0.1 * np.arange(SAMPLES)[:, None] + rng.uniform(0, 6, frequency.shape)
    values = np.cos(phase) + 0.2 * rng.standard_normal(phase.shape)
    mask = rng.random(phase.shape) > 0.1
    return loss, encoder, (np.where(mask, values, np.nan), mask, free)


def make_call(way, mesh, loss, encoder, rows):
    """Return a function of nothing that gives value and gradient, the batch being there."""
    if way != "group":
        encoder, rows = replicate(encoder, mesh), place(rows, mesh)
        both = jax.value_and_grad(lambda p, rows: jnp.mean(jax.vmap(loss, (None, 0))(p, rows)))
        if way == "shard":
            # Without the check of what varies over devices, gradients stay those of one device.
            program = jax.jit(
                jax.shard_map(
                    lambda p, rows: jax.lax.pmean(both(p, rows), "recording"),
                    mesh=mesh,
                    in_specs=(PartitionSpec(), PartitionSpec("recording")),
                    out_specs=PartitionSpec(),
                    check_vma=False,
                )
            )
        else:
            program = jax.jit(both)
        return lambda: program(encoder, rows)
    mean = mean_over_recordings(loss, mesh, group=GROUP)
    present = np.ones(len(rows[0]), bool)
    return lambda: mean(encoder, rows, present)[:2]


def peak():
    """Most megabytes this program ever had."""
    size = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return size / 2**20 if sys.platform == "darwin" else size / 2**10


def measure(way, count, process, processes, port):
    """Print one row's figures as JSON; this runs in a program of its own."""
    jax.config.update("jax_enable_x64", True)
    if processes > 1:
        jax.config.update("jax_cpu_collectives_implementation", "gloo")
        jax.distributed.initialize(f"localhost:{port}", processes, process)
    loss, encoder, rows = make_work(count)
    encoder = jax.device_put(encoder, jax.local_devices()[0])
    own = slice(process * count // processes, (process + 1) * count // processes)
    call = make_call(way, recording_mesh(), loss, encoder, tuple(x[own] for x in rows))
    before, begin = peak(), time.perf_counter()
    out = jax.block_until_ready(call())
    first, seconds = time.perf_counter() - begin, []
    for _ in range(REPEATS):
        begin = time.perf_counter()
        jax.block_until_ready(call())
        seconds.append(time.perf_counter() - begin)
    bits = hashlib.sha256()
    for leaf in jax.tree.leaves(out):
        assert np.any(leaf.addressable_data(0)), "a gradient of zeros would compare nothing"
        bits.update(np.asarray(leaf.addressable_data(0)).tobytes())
    best = min(seconds)
    found = {"ms": 1e3 * best, "compile": first - best, "memory": peak() - before}
    print(json.dumps(found | {"bits": bits.hexdigest(), "value": float(out[0])}))


def run(way, count, devices, processes=1):
    """Return a row's figures: time, compile time and memory of the process with the most of it."""
    flags = f"{os.environ.get('XLA_FLAGS', '')} --xla_force_host_platform_device_count={devices}"
    with socket.socket() as free:
        free.bind(("localhost", 0))
        port = free.getsockname()[1]
    programs = [
        subprocess.Popen(
            [sys.executable, __file__, "--one", way, *map(str, (count, k, processes, port))],
            env=os.environ | {"XLA_FLAGS": flags, "JAX_PLATFORMS": "cpu"},
            stdout=subprocess.PIPE,
            text=True,
        )
        for k in range(processes)
    ]
    outputs = [program.communicate()[0] for program in programs]
    if any(program.returncode for program in programs):
        raise RuntimeError(f"{way}, {count} recordings, {devices} devices: see the error above")
    found = [json.loads(output.splitlines()[-1]) for output in outputs]
    if len({one["bits"] for one in found}) > 1:
        raise RuntimeError(f"{way}: the processes have different results")
    return found[0] | {k: max(one[k] for one in found) for k in ("ms", "compile", "memory")}


def show(label, found, reference, bits=""):
    print(
        f"{label} {found['ms']:9.1f} {reference['ms'] / found['ms']:9.2f}"
        f" {found['compile']:9.1f} {found['memory']:10.0f}{bits}",
        flush=True,
    )


def check_same_value(found):
    """All ways and cuts must have computed the same mean, before anything is made of the times."""
    values = [one["value"] for one in found]
    np.testing.assert_allclose(values, values[0], rtol=1e-10)


def main():
    print(f"{os.cpu_count()} cores; groups of {GROUP}; {SAMPLES} samples, {CHANNELS} channels\n")
    print("One device: recordings (speed-up over plain)")
    print("recordings way          ms  speed-up compile/s memory/MiB")
    alone = {}
    for count in (16, 64, COUNT, 1024):
        plain, group = (run(way, count, 1) for way in ("plain", "group"))
        check_same_value([plain, group])
        show(f"{count:10} plain", plain, plain)
        show(f"{count:10} group", group, plain)
        if count == COUNT:
            alone = {"plain": plain, "shard": plain, "group": group}
    print(f"\n{COUNT} recordings: devices (speed-up over the same way on one; shard: over plain)")
    print("processes devices way          ms  speed-up compile/s memory/MiB  bits as on one")
    for processes, devices in ((1, 2), (1, 4), (1, 8), (2, 1)):
        for way, one in alone.items():
            this = run(way, COUNT, devices, processes)
            check_same_value([one, this])
            same = "the same" if this["bits"] == one["bits"] else "differ"
            show(f"{processes:9} {devices:7} {way}", this, one, f"  {same}")
    print("\nThe same bits are promised for `group` alone. All values agree to 1e-10, as checked.")


if __name__ == "__main__":
    parser = argparse.ArgumentParser()
    parser.add_argument("--one", nargs=5, help="way, recordings, process, processes, port")
    given = parser.parse_args().one
    if given:
        measure(given[0], *map(int, given[1:]))
    else:
        main()
