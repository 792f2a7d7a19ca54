import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fitting import bootstrap
from oscillib.parameters import Fixed, Positive


COUNT = 4000
CONSTRAINTS = {"scale": Positive(), "length": Fixed()}


def simulate(params, key):
    return params["scale"] * jax.random.normal(key, (5,))


def fit(data, params):
    return params | {"scale": jnp.sqrt(jnp.mean(data**2))}, True


@pytest.fixture(scope="module")
def found():
    params = {"scale": jnp.asarray(2.0), "length": jnp.asarray(7.0)}
    return jax.jit(
        lambda key: bootstrap(simulate, fit, params, CONSTRAINTS, key=key, count=COUNT, batch=COUNT)
    )(jax.random.key(1))


def test_bias_and_spread_of_a_scale_in_closed_form(found):
    # 5 x*^2 / scale^2 is chi-square of 5 degrees: the mean of log x* is
    # log scale + (digamma(5/2) + log 2 - log 5) / 2 and its variance trigamma(5/2) / 4
    # (closed form, from memory).
    digamma, trigamma = 0.7031566406452432, 0.4903577561002348
    shift = (digamma + np.log(2) - np.log(5)) / 2
    error = np.sqrt(trigamma) / 2
    mean = np.log(2) + shift
    four_sigma = 4 * error / np.sqrt(COUNT)
    assert abs(np.mean(found.replicates) - mean) < four_sigma
    assert abs(np.sqrt(found.covariance[0, 0]) / error - 1) < 4 / np.sqrt(COUNT)
    np.testing.assert_allclose(
        np.log(found.corrected["scale"]), 2 * np.log(2) - np.mean(found.replicates), rtol=1e-12
    )
    np.testing.assert_allclose(
        found.bias["scale"], np.exp(np.mean(found.replicates)) - 2, rtol=1e-12
    )
    half = 1.6448536269514722 * np.sqrt(1 + 1 / COUNT) * np.sqrt(found.covariance[0, 0])
    ratio = np.log(found.upper["scale"] / found.lower["scale"])
    np.testing.assert_allclose(ratio, 2 * half, rtol=1e-12)
    assert found.corrected["length"] == 7 and found.upper["length"] == 0
    assert found.enough


def test_failed_refits_are_left_out_and_counted():
    def sometimes(data, params):
        good = data[0] > -1.0
        return {
            "scale": jnp.where(good, 1.0 + data[1] ** 2, jnp.nan),
            "length": params["length"],
        }, True

    def flagged(data, params):
        return {"scale": 1.0 + data[1] ** 2, "length": params["length"]}, data[0] > -1.0

    params = {"scale": jnp.asarray(1.0), "length": jnp.asarray(7.0)}
    outs = [
        bootstrap(simulate, f, params, CONSTRAINTS, key=jax.random.key(0), count=50, batch=50)
        for f in (sometimes, flagged)
    ]
    for out in outs:
        assert 30 < out.good.sum() < 50
        assert np.isfinite(out.corrected["scale"]) and np.isfinite(out.upper["scale"])
        assert np.isnan(out.replicates[~out.good]).all()
        np.testing.assert_allclose(
            out.covariance[0, 0], np.var(out.replicates[out.good], ddof=1), rtol=1e-12
        )
        assert bool(out.enough) == (out.good.sum() >= 40)
    np.testing.assert_array_equal(outs[0].good, outs[1].good)


def test_nothing_good_is_no_success():
    params = {"scale": jnp.asarray(1.0), "length": jnp.asarray(7.0)}
    out = bootstrap(
        simulate, lambda d, p: (p, False), params, CONSTRAINTS, key=jax.random.key(0), count=4
    )
    assert not out.enough and np.isnan(out.corrected["scale"])


@pytest.mark.usefixtures("user_errors")
@pytest.mark.parametrize(
    ("changes", "error", "match"),
    [
        ({"level": 1.0}, ValueError, "`level` must lie strictly between 0 and 1; got 1.0"),
        ({"count": 2}, ValueError, "`count` must be at least 3; got 2"),
        ({"count": 3.0}, TypeError, "`count` must be a Python int"),
        ({"fit": lambda d, p: (p, jnp.ones(2, bool))}, ValueError, "`good` must have shape"),
    ],
)
def test_messages(changes, error, match):
    params = {"scale": jnp.asarray(1.0), "length": jnp.asarray(7.0)}
    given = {"fit": fit, "key": jax.random.key(0), "count": 4} | changes
    with pytest.raises(error, match=match):
        bootstrap(simulate, given.pop("fit"), params, CONSTRAINTS, **given)
