"""The demo tray: reproducible, with the gap, the losses and the truth that it promises."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.demo import tray
from oscillib.recordings import gaps


RECORDED = [
    720.009361387091,
    351.7419560120124,
    571.1588090413599,
]  # rows 0, 100, 282 of three channels


@pytest.fixture(scope="module")
def made():
    return tray(key=jax.random.key(0))


def test_same_key_same_tray(made):
    again = tray(key=jax.random.key(0))
    np.testing.assert_array_equal(made.recording.values, again.recording.values)
    other = tray(key=jax.random.key(1))
    assert float(jnp.max(jnp.abs(other.recording.values - made.recording.values))) > 100


def test_six_days_of_half_hours_with_one_gap(made):
    times = np.asarray(made.recording.times)
    assert times[0] == 0 and times[-1] == 143.5
    assert gaps(made.recording, longer_than=2.0) == [(70.0, 73.0)]
    lost = 1 - float(jnp.mean(made.recording.mask))
    assert 0.002 < lost < 0.02  # a hundredth, of 1,698 readings


def test_only_untreated_slices_are_coupled(made):
    assert made.treated == (False,) * 3 + (True,) * 3
    coupling = np.array(made.params.field.coupling)
    inside = coupling[:3, :3][~np.eye(3, dtype=bool)]
    assert np.all(inside > 0)
    coupling[:3, :3] = 0
    assert not coupling.any()


def test_the_default_tray_is_what_it_always_was(made):
    # Recorded before `effect` existed, which must not have moved a draw.
    np.testing.assert_allclose(made.recording.values[[0, 100, 282], [0, 2, 5]], RECORDED, rtol=1e-9)


def test_treatment_that_damps_leaves_the_coupling(made):
    damped = tray(key=jax.random.key(0), effect="damped")
    growth = np.asarray(damped.params.field.growth)
    np.testing.assert_array_equal(growth[:3], made.params.field.growth[:3])
    assert np.all(growth[3:] < 0)
    coupling = np.asarray(damped.params.field.coupling)
    np.testing.assert_array_equal(coupling[3:, 3:], coupling[:3, :3])
    np.testing.assert_array_equal(coupling[:3], made.params.field.coupling[:3])
    # Untreated slices are the same recordings, up to rounding; treated ones glow more evenly.
    np.testing.assert_allclose(
        damped.recording.values[:, :3], made.recording.values[:, :3], rtol=1e-9
    )
    spread = lambda out: np.nanstd(np.asarray(out.recording.nan_values)[:, 3:], axis=0)
    assert np.all(spread(damped) < spread(made))


def test_periods_are_circadian(made):
    # Human free-running periods lie near 24.2 h; Czeisler et al. 1999 (abstract). The tray's are
    # invented around 24 h.
    period = 2 * np.pi / np.asarray(made.params.field.frequency)
    assert np.all((period > 22.4) & (period < 25.6))


def test_arguments_are_checked(user_errors):
    with pytest.raises(ValueError, match="`effect` must be 'uncoupled' or 'damped'; got 'none'"):
        tray(key=jax.random.key(0), effect="none")  # pyright: ignore[reportArgumentType]
    with pytest.raises(ValueError, match="`slices` must be at least 1"):
        tray(key=jax.random.key(0), slices=0)
    with pytest.raises(TypeError, match="`regions` must be a Python int"):
        tray(key=jax.random.key(0), regions=2.0)  # pyright: ignore[reportArgumentType]
