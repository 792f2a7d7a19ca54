"""Plugin for pytest: the fixture `field_check`, and the marker that sets its seed.

Imported by every pytest run where the library is installed: it must stay light, and must not
import a room before the run-time type checker had a chance to hook in.
"""

import zlib

import pytest


def pytest_configure(config):
    """Register the marker."""
    config.addinivalue_line(
        "markers",
        "oscillib_seed(number): seed of the random states and directions of `field_check`; "
        "default: made from the name of the test",
    )


@pytest.fixture
def field_check(request):
    """Run `oscillib.checks.check_field` and fail the test with all that is wrong.

    `field_check(field, params, y0, ...)` takes the arguments of `check_field` but the key, and
    returns its report.
    """
    import jax

    from oscillib.checks import check_field

    marker = request.node.get_closest_marker("oscillib_seed")
    seed = marker.args[0] if marker else zlib.crc32(request.node.name.encode())

    def run(field, params, y0, **claims):
        __tracebackhide__ = True
        report = check_field(field, params, y0, key=jax.random.key(seed), **claims)
        report.require()
        return report

    return run
