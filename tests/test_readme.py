"""The README's programs run as printed and find what it says."""

import pathlib
import re
import runpy

import jax
import jax.numpy as jnp
import numpy as np
import pytest


ROOT = pathlib.Path(__file__).parents[1]
TEXT = (ROOT / "README.md").read_text()
LOOP, OWN_FIELD, ENCODER = re.findall(r"```python\n(.*?)```", TEXT, re.DOTALL)


def lines(text):
    return [line for line in text.splitlines() if line.strip()]


def test_loop_recovers_the_frequencies_within_forty_lines(capsys):
    assert len(LOOP.splitlines()) <= 40
    namespace = {}
    with jax.numpy_dtype_promotion("standard"):  # optax's Adam mixes dtypes
        exec(LOOP, namespace)
    fitted = namespace["constrain"](
        namespace["variables"][0], namespace["rules"], namespace["guess"]
    )
    np.testing.assert_allclose(fitted.frequency, jnp.array([6.3, 5.8]), atol=0.05)
    printed = np.fromstring(capsys.readouterr().out.strip("[]\n"), sep=" ")
    np.testing.assert_allclose(printed, fitted.frequency, rtol=1e-6)


def test_field_of_ones_own_is_checked_and_fitted_within_forty_lines(capsys):
    example = ROOT / "examples" / "own_field.py"
    code = example.read_text().split('"""', 2)[2]
    assert lines(OWN_FIELD) == lines(code)
    assert len(lines(code)) <= 40
    with jax.numpy_dtype_promotion("standard"):  # as in a notebook
        found = runpy.run_path(str(example))
    known, truth = found["known"], found["truth"] | {"noise": 0.05, "reading": 0.05}
    for name, value in truth.items():  # twice the width of a 90 percent interval
        middle = (known.lower[name] + known.upper[name]) / 2
        assert abs(value - middle) < known.upper[name] - known.lower[name]
        assert known.upper[name] / known.lower[name] < 1.6
    assert capsys.readouterr().out.count("converged") == 2


@pytest.mark.long
def test_encoder_goes_on_from_the_field_of_ones_own(capsys):
    with jax.numpy_dtype_promotion("standard"):
        found = runpy.run_path(str(ROOT / "examples" / "own_field.py"))
        exec(ENCODER, found)
    # The entropy of the prior is what an untrained proposal scores on average.
    assert found["value"] < found["prior"].law.entropy() - 1
    assert abs(found["proposed"]["b"] / 2.5 - 1) < 0.3  # a standard deviation of the prior
    assert "reading" in capsys.readouterr().out.splitlines()[-1]
