"""Freshness curves against published half-lives and the shape that the contract promises."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from scoring.curves import Ages, Curve, HalfLife, Power

HOUR_MS = 3_600_000.0
DAY_MS = 86_400_000.0

# Half-lives: OpenStax, Chemistry, Appendix M "Half-Lives for Several Radioactive Isotopes" (retyped).
# Fractions: 2^(-age/H), recomputed.
NUCLIDES = [
    (
        "I-131",
        8.040 * DAY_MS,
        {8.04: 0.5, 16.08: 0.25, 24.12: 0.125, 1: 0.9173994137, 7: 0.5469016174, 14: 0.2991013791},
    ),
    ("P-32", 14.29 * DAY_MS, {7: 0.7120976298, 14: 0.5070830344, 30: 0.233360099}),
    ("Rn-222", 3.82 * DAY_MS, {1: 0.8340581611, 7: 0.2807852910, 10: 0.162915859, 14: 0.0788403797}),
    ("Na-24", 15.0 * HOUR_MS, {1: 0.329876978}),
    ("Po-210", 138.4 * DAY_MS, {365.25: 0.160529506}),
]

CURVES: list[Curve] = [HalfLife(HOUR_MS), HalfLife(30 * DAY_MS), Power(HOUR_MS, 1.0), Power(DAY_MS, 1.5)]

ages_ms = st.floats(min_value=0.0, max_value=60 * DAY_MS)
curves = st.one_of(
    st.builds(HalfLife, st.floats(min_value=1.0, max_value=400 * DAY_MS)),
    st.builds(Power, st.floats(min_value=1.0, max_value=400 * DAY_MS), st.floats(min_value=0.01, max_value=20.0)),
)


@pytest.mark.parametrize(("nuclide", "half_life_ms", "left_by_days"), NUCLIDES)
def test_half_life_agrees_with_published_decay(
    nuclide: str, half_life_ms: float, left_by_days: dict[float, float]
) -> None:
    """What a half-life leaves is what is left of an isotope of that half-life."""
    ages: Ages = np.array([days * DAY_MS for days in left_by_days], dtype=np.float64)
    expected = np.array(list(left_by_days.values()))
    assert HalfLife(half_life_ms).freshness(ages) == pytest.approx(expected, rel=4e-9), nuclide


def test_whole_half_lives_halve_exactly() -> None:
    """After n half-lives exactly 2^-n is left: 1/32 after five and 1/128 after seven.

    DOE-HDBK-1019/1-93, Nuclear Physics and Reactor Theory, volume 1, figure 10 (retyped).
    """
    left = HalfLife(6 * HOUR_MS).freshness(np.arange(8.0) * 6 * HOUR_MS)
    assert left.tolist() == [1.0, 0.5, 0.25, 0.125, 0.0625, 1 / 32, 1 / 64, 1 / 128]


def test_power_curve_has_its_closed_form() -> None:
    """A power curve of exponent 1 is 1/(1 + age/scale), and of exponent 2 its square."""
    ages = np.array([0.0, 6.0, 18.0, 714.0]) * HOUR_MS
    assert Power(6 * HOUR_MS, 1.0).freshness(ages) == pytest.approx(np.array([1.0, 1 / 2, 1 / 4, 1 / 120]), rel=1e-14)
    assert Power(6 * HOUR_MS, 2.0).freshness(ages) == pytest.approx(
        np.array([1.0, 1 / 4, 1 / 16, 1 / 14400]), rel=1e-14
    )


def test_power_curve_half_way_to_the_landmark_is_the_same_at_every_time() -> None:
    """(age + scale) doubled leaves 2^-exponent, whatever the scale.

    The relative decay of Cormode et al., "Forward Decay", ICDE 2009 (from memory, recomputed).
    """
    for scale_ms in (10.0, 20.0, 100.0):
        assert Power(scale_ms, 2.0).freshness(np.array([scale_ms]))[0] == pytest.approx(0.25, rel=1e-15)


@pytest.mark.parametrize("curve", CURVES)
def test_an_edge_ahead_of_the_clock_is_entirely_fresh(curve: Curve) -> None:
    """A negative age counts as age 0, where freshness is exactly 1."""
    assert curve.freshness(np.array([-5 * 60_000.0, -1.0, 0.0])).tolist() == [1.0, 1.0, 1.0]


@pytest.mark.parametrize("curve", CURVES)
def test_freshness_keeps_the_shape_of_the_ages(curve: Curve) -> None:
    """Empty, flat and two-dimensional ages give values of the same shape."""
    for shape in ((0,), (3,), (2, 3)):
        assert curve.freshness(np.zeros(shape)).shape == shape


@pytest.mark.parametrize("curve", CURVES)
def test_very_old_edges_leave_nothing_and_no_warning(curve: Curve) -> None:
    """A thousand years leave next to nothing, and nothing that is not a number."""
    left = curve.freshness(np.array([1000 * 365.25 * DAY_MS]))[0]
    assert 0.0 <= left < 1e-3


@given(curves, ages_ms, ages_ms)
def test_freshness_starts_at_one_and_never_rises(curve: Curve, first_ms: float, second_ms: float) -> None:
    """The older of two edges never has more left, and both have from 0 to 1."""
    younger, older = curve.freshness(np.array(sorted((first_ms, second_ms))))
    assert 0.0 <= older <= younger <= 1.0
    assert curve.freshness(np.zeros(1))[0] == 1.0


@given(st.floats(min_value=1000.0, max_value=100 * DAY_MS), ages_ms, ages_ms)
def test_half_life_forgets_where_it_started(half_life_ms: float, first_ms: float, second_ms: float) -> None:
    """Decay over a sum of spans is the product of the decays over each: what lazy decay rests on."""
    curve = HalfLife(half_life_ms)
    first, second, both = curve.freshness(np.array([first_ms, second_ms, first_ms + second_ms]))
    assert both == pytest.approx(first * second, rel=1e-9, abs=1e-300)


@pytest.mark.parametrize("curve", CURVES)
def test_curvature_is_the_second_derivative(curve: Curve) -> None:
    """The curvature agrees with a central difference of the curve."""
    ages, step = np.array([0.5, 2.0, 30.0]) * HOUR_MS, 60_000.0
    difference = curve.freshness(ages + step) - 2 * curve.freshness(ages) + curve.freshness(ages - step)
    assert curve.curvature(ages) == pytest.approx(difference / step**2, rel=2e-3, abs=1e-24)


@pytest.mark.parametrize("value", [0.0, -1.0, float("nan"), float("inf")])
def test_curves_refuse_what_is_no_span(value: float) -> None:
    """A half-life, scale or exponent that is not a finite number above 0 is refused by name."""
    with pytest.raises(ValueError, match=r"^half_life_ms: .* is not allowed: it is a finite number above 0"):
        HalfLife(value)
    with pytest.raises(ValueError, match=r"^scale_ms: "):
        Power(value, 1.0)
    with pytest.raises(ValueError, match=r"^exponent: "):
        Power(HOUR_MS, value)
