"""The plugin, in a test run of its own."""

pytest_plugins = ["pytester"]

PROGRAM = """
    import jax, jax.numpy as jnp, pytest
    jax.config.update("jax_enable_x64", True)

    def spring(t, y, w):
        return jnp.stack([w * y[1], -w * y[0]])

    def test_sound(field_check):
        assert field_check(spring, jnp.asarray(2.0), jnp.array([1.0, 0.5])).passed

    @pytest.mark.oscillib_seed(7)
    def test_crooked(field_check):
        field_check(spring, jnp.asarray(2.0), jnp.array([1.0, 0.5]), fixed_points=[jnp.ones(2)])
"""


def test_fixture_and_marker(pytester):
    pytester.makepyfile(PROGRAM)
    out = pytester.runpytest_subprocess("--strict-markers", "-q")
    out.assert_outcomes(passed=1, failed=1)
    out.stdout.fnmatch_lines(["*claimed fixed point: [[]?[]]: expected 0*"])
    assert "_pytest.py" not in out.stdout.str().replace("_pytest/", "")


def test_plugin_imports_no_room(pytester):
    pytester.makeconftest(
        """
        import sys
        rooms = [name for name in sys.modules if name.startswith("oscillib.")]
        assert rooms == ["oscillib._pytest"], rooms
        assert "jax" not in sys.modules
        """
    )
    pytester.makepyfile("def test(): pass")
    pytester.runpytest_subprocess("-q").assert_outcomes(passed=1)
