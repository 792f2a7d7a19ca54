"""The README's loop runs as printed and finds what it says."""

import pathlib
import re

import jax
import jax.numpy as jnp
import numpy as np


README = pathlib.Path(__file__).parents[1] / "README.md"


def test_loop_recovers_the_frequencies_within_forty_lines(capsys):
    (block,) = re.findall(r"```python\n(.*?)```", README.read_text(), re.DOTALL)
    assert len(block.splitlines()) <= 40
    namespace = {}
    with jax.numpy_dtype_promotion("standard"):  # optax's Adam mixes dtypes
        exec(block, namespace)
    fitted = namespace["constrain"](
        namespace["variables"][0], namespace["rules"], namespace["guess"]
    )
    np.testing.assert_allclose(fitted.frequency, jnp.array([6.3, 5.8]), atol=0.05)
    printed = np.fromstring(capsys.readouterr().out.strip("[]\n"), sep=" ")
    np.testing.assert_allclose(printed, fitted.frequency, rtol=1e-6)
