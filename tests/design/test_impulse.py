"""How long recursions last, against closed forms and a much longer computation."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.signal import butter, sosfilt

from pipeline_filters.design.impulse import (
    impulse_response,
    pole_radius,
    poles_of,
    settling_samples,
)
from pipeline_filters.errors import SpecError


def one_pole(radius: float) -> np.ndarray:
    return np.array([[1.0, 0, 0, 1, -radius, 0]])


@pytest.mark.parametrize("radius", [0.5, 0.9, 0.999, 0.99999])
@pytest.mark.parametrize("share", [0.5, 1e-3, 1e-12])
def test_settling_of_one_pole_is_a_geometric_series(radius, share):
    # Of sum r^k the rest from n on is r^n of the whole.
    expected = int(np.ceil(np.log(share) / np.log(radius) - 1e-9))
    assert settling_samples(one_pole(radius), share) == expected


def test_settling_of_a_repeated_pole():
    # (1 - r z^-1)^-2 has h[k] = (k + 1) r^k, whose rest from n on over its whole is
    # r^n (1 + n (1 - r)).
    r, share = 0.99, 1e-6
    double = np.array([[1.0, 0, 0, 1, -2 * r, r * r]])
    n = settling_samples(double, share)
    rest = r ** np.array([n - 1, n]) * (1 + np.array([n - 1, n]) * (1 - r))
    assert rest[0] > share >= rest[1]


@settings(deadline=None, max_examples=30)
@given(
    order=st.integers(1, 8),
    corner=st.floats(0.005, 0.45),
    high=st.booleans(),
    exponent=st.integers(1, 12),
)
def test_what_is_cut_off_is_below_the_share(order, corner, high, exponent):
    sections = butter(order, 2 * corner, "high" if high else "low", output="sos")
    share = 10.0**-exponent
    n = settling_samples(sections, share)
    impulse = np.zeros(20 * n + 2000)
    impulse[0] = 1
    rest = np.cumsum(np.abs(sosfilt(sections, impulse))[::-1])[::-1]
    assert rest[n] <= share * rest[0] * (1 + 1e-9)
    assert n == 0 or rest[n - 1] > share * rest[0] * (1 - 1e-5)
    response = impulse_response(sections, share)
    np.testing.assert_array_equal(response, sosfilt(sections, impulse)[: max(n, 1)])


def test_a_response_without_poles_ends():
    sections = np.array([[1.0, 2, 3, 1, 0, 0]])
    np.testing.assert_array_equal(impulse_response(sections), [1, 2, 3])
    assert settling_samples(sections, 1e-12) == 3


def test_a_share_of_the_whole_takes_no_samples():
    assert settling_samples(one_pole(0.9), 1.0) == 0


def test_poles_in_closed_form():
    # Pairs 0.9 exp(+-0.3j), 0.5 and -0.2, and one pole at 0.8 beside one at 0.
    sections = np.array(
        [
            [1, 0, 0, 1, -2 * 0.9 * np.cos(0.3), 0.81],
            [1, 0, 0, 1, -0.3, -0.1],
            [1, 0, 0, 1, -0.8, 0],
        ]
    )
    expected = [0.9 * np.exp(0.3j), 0.9 * np.exp(-0.3j), 0.5, -0.2, 0.8, 0]
    np.testing.assert_allclose(
        np.sort_complex(poles_of(sections)), np.sort_complex(np.array(expected)), atol=1e-15
    )
    radius, pole = pole_radius(sections)
    assert radius == pytest.approx(0.9, abs=1e-15)
    assert abs(pole) == radius


@pytest.mark.parametrize("sections", [one_pole(1.0), one_pole(-1.5)])
def test_an_unstable_recursion_is_refused_naming_its_pole(sections):
    with pytest.raises(SpecError, match=r"weir.yaml:3:1: unstable: pole .* has magnitude 1"):
        impulse_response(sections, where="weir.yaml:3:1")


def test_a_pole_too_near_to_the_circle_is_refused_at_once():
    with pytest.raises(SpecError, match="does not come to rest within 16777216 samples: pole"):
        settling_samples(one_pole(1 - 1e-9), 1e-12)
    assert settling_samples(one_pole(1 - 1e-5), 1e-3, most=1_000_000) == 690_773
    with pytest.raises(SpecError, match="within 1000 samples"):
        settling_samples(one_pole(1 - 1e-5), 1e-3, most=1000)


def test_coefficients_that_are_not_finite_are_refused():
    with pytest.raises(SpecError, match="not finite"):
        impulse_response(np.array([[np.nan, 0, 0, 1, 0, 0]]))
