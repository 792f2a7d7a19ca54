"""Cohorts: streams larger than memory, batches over many devices, checkpoints that resume.

One loop for one device, for several, and for several processes: nothing in it says how many there
are, and the result is the same to the last bit. Several processes run the same file and call
`jax.distributed.initialize()` first; the number of devices is that of `recording_mesh()`.

    >>> import pathlib, tempfile
    >>> import jax
    >>> import jax.numpy as jnp
    >>> import numpy as np
    >>> import optax
    >>> from oscillib.cohort import (
    ...     Position, batches, load_checkpoint, mean_over_recordings, recording_mesh,
    ...     save_checkpoint)
    >>> path = pathlib.Path(tempfile.mkdtemp()) / "run.npz"
    >>> source = [np.full(3, i) / 10 for i in range(10)]  # or `folder("slices", length=300)`
    >>> def loss(level, both):  # of one recording, with a key of its own
    ...     x, key = both
    ...     return jnp.mean((x + 0.1 * jax.random.normal(key, x.shape) - level) ** 2)
    >>> mean = mean_over_recordings(loss, recording_mesh(), group=2)
    >>> optimiser = optax.sgd(0.1)
    >>> @jax.jit
    ... def update(level, memory, gradient):
    ...     change, memory = optimiser.update(gradient, memory)
    ...     return optax.apply_updates(level, change), memory
    >>> @jax.jit
    ... def keys_of(key, step, indices):  # by recording, not by row: the same on every device
    ...     key = jax.random.fold_in(key, step)
    ...     return jax.vmap(jax.random.fold_in, (None, 0))(key, indices)
    >>> def train(steps):
    ...     level, key, step, position = jnp.zeros(()), jax.random.key(0), 0, Position()
    ...     memory = optimiser.init(level)
    ...     if path.exists():
    ...         (level, memory), step, key, position, _ = load_checkpoint(
    ...             path, (level, memory), key=key)
    ...     for b in batches(source, size=4, seed=0, last="pad", position=position):
    ...         both = b.recordings, keys_of(key, step, b.indices)
    ...         out = mean(level, both, b.present)
    ...         level, memory = update(level, memory, out.gradient)
    ...         step = step + 1
    ...         if jax.process_index() == 0:
    ...             save_checkpoint(
    ...                 path, (level, memory), step=step, key=key, position=b.position)
    ...         if step >= steps:
    ...             return level
    >>> print(train(3).round(3), train(6).round(3))  # the second call goes on from step 3
    0.243 0.327
"""

from ._checkpoint import (
    Checkpoint as Checkpoint,
    load_checkpoint as load_checkpoint,
    save_checkpoint as save_checkpoint,
)
from ._folder import Folder as Folder, folder as folder
from ._mean import CohortMean as CohortMean, mean_over_recordings as mean_over_recordings
from ._mesh import place as place, recording_mesh as recording_mesh, replicate as replicate
from ._stream import Batch as Batch, Position as Position, Source as Source, batches as batches
