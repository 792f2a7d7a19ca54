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

    seed = _seed(request.node)

    def run(field, params, y0, **claims):
        __tracebackhide__ = True
        report = check_field(field, params, y0, key=jax.random.key(seed), **claims)
        report.require()
        return report

    return run


def _seed(node) -> int:
    """Return the seed that the marker sets, else one made from the name of the test."""
    marker = node.get_closest_marker("oscillib_seed")
    if marker is None:
        return zlib.crc32(node.nodeid.encode())
    if len(marker.args) != 1 or marker.kwargs or not isinstance(marker.args[0], int):
        raise pytest.UsageError(
            f"`oscillib_seed` takes one whole number, as in `oscillib_seed(3)`; {node.nodeid} "
            f"has {marker.args} {marker.kwargs or ''}".rstrip()
        )
    return marker.args[0]
