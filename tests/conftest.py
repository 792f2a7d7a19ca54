"""Settings of every test: 64-bit floats, nothing broadcast or promoted silently."""

import os

import jax
import jaxtyping
import pytest


jax.config.update("jax_enable_x64", True)
jax.config.update("jax_numpy_rank_promotion", "raise")
jax.config.update("jax_numpy_dtype_promotion", "strict")


def pytest_configure(config):
    """Load our own plugin, late enough; keep what is compiled: it is most of a run."""
    config.pluginmanager.import_plugin("oscillib._pytest")
    jax.config.update("jax_compilation_cache_dir", str(config.cache.mkdir("compiled")))
    jax.config.update("jax_persistent_cache_min_compile_time_secs", 0)
    jax.config.update("jax_persistent_cache_min_entry_size_bytes", -1)
    # Short tests compile longer than they run, so they take what compiles fastest: no optimisation,
    # and the older code generator. The long ones, and users, take the optimised code.
    if config.option.markexpr == "not long":
        jax.config.update("jax_disable_most_optimizations", True)
        os.environ.setdefault("XLA_FLAGS", "--xla_cpu_use_fusion_emitters=false")


@pytest.fixture
def user_errors():
    """Switch the type checker off: a user without it must meet the library's own message."""
    jaxtyping.config.update("jaxtyping_disable", True)
    yield
    jaxtyping.config.update("jaxtyping_disable", False)
