"""The whole suite on every field the library ships, and its report."""

import jax
import jax.numpy as jnp
import pytest

from oscillib import fields
from oscillib.checks import check_field, relabelling, rotation


KEY = jax.random.key(3)
PAIR = jnp.array([[0.3, -0.2], [0.1, 0.4]])
COUPLING = jnp.array([[0.0, 0.5], [0.2, 0.0]])
HOPF = fields.HopfParams([0.2, -0.3], [3.0, 2.0], shear=[0.9, 0.4], coupling=COUPLING)
SWAP = relabelling([1, 0])
REST = [jnp.zeros((2, 2))]
GOODWIN = fields.GoodwinParams(jnp.full((3, 2), 1.0), jnp.full((3, 2), 0.5), [8.0, 10.0])
LIGHT = fields.Input([0.0, 12.0], [[1.0], [6.0]], kind="linear")
TURNS = {"fixed_points": REST, "symmetries": [SWAP, rotation(0.7)], "autonomous": True}

SHIPPED = {
    "Hopf network, diffusive": (fields.HopfNetwork(), HOPF, PAIR, TURNS),
    "Hopf network, additive": (fields.HopfNetwork(kind="additive"), HOPF, PAIR, TURNS),
    "van der Pol": (
        fields.van_der_pol,
        fields.VanDerPolParams([1.0, 2.0]),
        PAIR,
        {"fixed_points": REST, "symmetries": [SWAP], "autonomous": True},
    ),
    "FitzHugh-Nagumo": (
        fields.fitzhugh_nagumo,
        fields.FitzHughNagumoParams(drive=[0.5, 0.3]),
        PAIR,
        {"symmetries": [SWAP], "autonomous": True},
    ),
    "Wilson-Cowan": (
        fields.wilson_cowan,
        fields.WilsonCowanParams(drive_e=[1.25, 1.0]),
        PAIR,
        {"symmetries": [SWAP], "autonomous": True, "unused": ("params.gain",)},
    ),
    "Goodwin": (
        fields.goodwin,
        GOODWIN,
        jnp.array([[0.7, 1.1], [1.2, 0.8], [0.9, 1.4]]),
        {"fixed_points": [fields.goodwin_rest(GOODWIN)], "symmetries": [SWAP]},
    ),
    "Kuramoto": (
        fields.kuramoto,
        fields.KuramotoParams([1.0, 2.0], COUPLING, lag=0.3),
        jnp.array([[0.2, 1.3]]),
        {"symmetries": [SWAP]},
    ),
    "linear network": (
        fields.LinearNetwork(),
        fields.LinearParams.turning([-0.1, -0.2], [6.0, 5.0], coupling=COUPLING),
        PAIR,
        {"fixed_points": REST, "symmetries": [rotation(0.7)]},
    ),
    "Hopf unit": (
        fields.hopf_unit,
        fields.HopfUnitParams([0.2, -0.1], [6.0, 6.5]),
        PAIR,
        {"fixed_points": REST, "symmetries": [SWAP, rotation(0.7)]},
    ),
    "coupled units": (
        fields.coupled(fields.van_der_pol),
        fields.CoupledParams(fields.VanDerPolParams([1.0, 2.0]), COUPLING),
        PAIR,
        {"fixed_points": REST, "symmetries": [SWAP]},
    ),
    "field with a correction": (
        fields.corrected(fields.van_der_pol),
        fields.CorrectedParams(
            fields.VanDerPolParams([1.0, 2.0]), fields.Correction(2, width=4, depth=1, key=KEY)
        ),
        PAIR,
        # Zero at first: the inner layer moves nothing before the outer one has left zero.
        {"unused": ("params.correction.layers[0].weight", "params.correction.layers[0].bias")},
    ),
    "field with input": (
        fields.forced(fields.HopfNetwork()),
        fields.ForcedParams(HOPF, LIGHT, weight=[[0.5], [0.2]]),
        PAIR,
        {"t": 3.0},  # between two samples: at one of them the input has a kink
    ),
}


@pytest.mark.parametrize("name", SHIPPED)
def test_shipped_field_is_not_refused(name, field_check):
    field, params, y0, claims = SHIPPED[name]
    report = field_check(field, params, y0, **claims)
    assert report.passed and name


def test_report_reads_as_a_table_and_names_every_failure():
    def crooked(t, y, p):
        return fields.HopfNetwork()(t, y, p) + 0.01 * jnp.sin(t + 1.0)

    report = check_field(crooked, HOPF, PAIR, key=KEY, **TURNS)
    assert not report.passed
    lines = str(report).splitlines()
    assert lines[0] == "crooked: FAILED"
    failed = {f.prop for f in report.failures}
    assert failed == {"fixed point 0", "symmetry: rotation by 0.7", "autonomy"}
    assert all(any(prop in line and "failed" in line for line in lines) for prop in failed)
    with pytest.raises(AssertionError, match=r"claimed fixed point(.*\n)+symmetry") as caught:
        report.require()
    assert "is `t` used?" in str(caught.value)


def test_what_fails_at_the_output_is_not_asked_more():
    report = check_field(lambda t, y, p: y[:1], HOPF, PAIR, key=KEY)
    assert [f.prop for f in report.findings] == ["output of the field"]
    assert "[0" not in report.findings[0].message and "(1, 2)" in report.findings[0].message
