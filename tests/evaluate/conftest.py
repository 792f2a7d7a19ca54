from pathlib import Path

import jax.numpy as jnp
import pytest

from oscillib.evaluate import fit_autoregression


@pytest.fixture(scope="session")
def germany():
    """Log differences of West German investment, income, consumption, 1960Q2-1978Q4."""
    import pandas as pd
    import statsmodels

    path = Path(statsmodels.__file__).parent / "tsa/tests/results/lutkepohl2.dta"
    levels = pd.DataFrame(pd.read_stata(path))[["inv", "inc", "consump"]].to_numpy(dtype=float)
    values = jnp.diff(jnp.log(jnp.asarray(levels[:76])), axis=0)
    return values, jnp.ones(values.shape, dtype=bool)


@pytest.fixture(scope="session")
def german_model(germany):
    return fit_autoregression(*germany, order=2, ridge=0.0)
