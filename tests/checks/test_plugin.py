"""The plugin, as a user's pytest finds it: by its entry point, in a folder of their own."""

import subprocess
import sys

import jax.numpy as jnp
import pytest

import oscillib.checks  # noqa: F401  # loaded once, not by every run inside a run


pytest_plugins = "pytester"

TESTS = """
import jax
import jax.numpy as jnp
import pytest


def decay(t, y, rate):
    return -rate * y


def growth(t, y, rate):
    return jnp.sum(rate * y)


def test_sound(field_check):
    assert field_check(decay, jnp.asarray(2.0), jnp.ones(2), fixed_points=[jnp.zeros(2)]).passed


def test_faulty(field_check):
    field_check(growth, jnp.asarray(2.0), jnp.ones(2))


def test_wrong_claim(field_check):
    field_check(decay, jnp.asarray(2.0), jnp.ones(2), fixed_points=[jnp.ones(2)])
"""

SEEDS = """
import jax
import pytest

import oscillib.checks
from oscillib.checks import Report


@pytest.fixture
def seed(monkeypatch, request):
    keys = []
    def note(field, params, y0, *, key):
        keys.append(int(jax.random.key_data(key)[-1]))
        return Report("nothing", ())
    monkeypatch.setattr(oscillib.checks, "check_field", note)
    request.getfixturevalue("field_check")(None, None, None)
    return keys[0]


def test_default(seed, record_property):
    record_property("seed", seed)


def test_other_name(seed, record_property):
    record_property("seed", seed)


@pytest.mark.oscillib_seed(7)
def test_marked(seed, record_property):
    record_property("seed", seed)


@pytest.mark.oscillib_seed("seven")
def test_marked_in_words(seed):
    pass
"""


def run(pytester, text):
    pytester.makepyfile(text)
    # The plugins of others would be imported anew by every run.
    others = ("cacheprovider", "hypothesispytest", "xdist", "xdist.looponfail", "jaxtyping")
    without = [word for name in others for word in ("-p", f"no:{name}")]
    return pytester.inline_run("--strict-markers", *without)


def test_fixture_fails_a_test_with_what_is_wrong(pytester):
    result = run(pytester, TESTS)
    passed, _, failed = result.listoutcomes()
    assert [r.location[2] for r in passed] == ["test_sound"]
    told = {r.location[2]: r.longreprtext for r in failed}
    assert set(told) == {"test_faulty", "test_wrong_claim"}
    assert "output of the field: dy: expected shape (2,)" in told["test_faulty"]
    assert "claimed fixed point" in told["test_wrong_claim"]
    # The traceback shows the user's test, not the inside of the library.
    assert "_pytest.py" not in told["test_faulty"]
    assert "_report.py" not in told["test_faulty"]


def seeds_of(result):
    passed = result.listoutcomes()[0]
    return {r.location[2]: dict(r.user_properties)["seed"] for r in passed}


def test_seed_is_that_of_the_marker_or_made_from_the_name(pytester):
    result = run(pytester, SEEDS)
    seeds = seeds_of(result)
    assert seeds["test_marked"] == 7
    assert seeds["test_default"] != seeds["test_other_name"]
    (report,) = result.listoutcomes()[2]
    assert report.location[2] == "test_marked_in_words"
    assert "takes one whole number" in report.longreprtext
    assert seeds_of(run(pytester, SEEDS)) == seeds


def test_loading_the_plugin_imports_no_room():
    script = (
        "import sys, oscillib._pytest;"
        "rooms = [m for m in sys.modules if m.startswith('oscillib.') and m != 'oscillib._pytest'];"
        "sys.exit(', '.join([*rooms, *({'jax', 'numpy', 'equinox'} & set(sys.modules))]) or None)"
    )
    out = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True)
    assert out.returncode == 0, out.stderr


def test_marker_is_documented(pytester):
    result = pytester.runpytest_inprocess("--markers")
    words = "@pytest.mark.oscillib_seed(number): seed of the random states and directions"
    assert any(line.startswith(words) for line in result.outlines)


def test_fixture_is_here_too(field_check):
    # This project keeps the plugin from loading early and loads it by hand.
    with pytest.raises(AssertionError, match="output of the field"):
        field_check(lambda t, y, p: y[:1], (), jnp.ones(2))
