"""Settings of every test: 64-bit floats, nothing broadcast or promoted silently."""

import jax
import jaxtyping
import pytest


jax.config.update("jax_enable_x64", True)
jax.config.update("jax_numpy_rank_promotion", "raise")
jax.config.update("jax_numpy_dtype_promotion", "strict")


@pytest.fixture
def user_errors():
    """Switch the type checker off: a user without it must meet the library's own message."""
    jaxtyping.config.update("jaxtyping_disable", True)
    yield
    jaxtyping.config.update("jaxtyping_disable", False)
