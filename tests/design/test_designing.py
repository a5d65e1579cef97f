"""Given taps, moving averages, claims, and the table of methods."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from pipeline_filters.design.contract import TapsResponse
from pipeline_filters.design.designing import design_filter
from pipeline_filters.design.registry import METHODS
from pipeline_filters.errors import SpecError, ToleranceError
from pipeline_filters.spec.model import Amount, Band, Filter, Place

KHZ = Fraction(1000)


def given(taps, *bands: Band, timing="causal") -> TapsResponse:
    response = design_filter(Filter("g", "taps", {"taps": tuple(taps)}, bands), KHZ, timing)
    assert isinstance(response, TapsResponse)
    return response


def average(amount: Amount, rate_hz=KHZ) -> TapsResponse:
    response = design_filter(Filter("m", "moving-average", {"length": amount}), rate_hz, "causal")
    assert isinstance(response, TapsResponse)
    return response


def test_the_methods_of_the_table():
    assert list(METHODS) == [
        "taps",
        "moving-average",
        "window",
        "kaiser",
        "equiripple",
        "butterworth",
        "notch",
    ]
    assert all(name == method.name for name, method in METHODS.items())


@pytest.mark.parametrize(
    ("taps", "linear_phase"),
    [
        ([1, 2, 1], True),
        ([1, 0, -1], True),
        ([1, 2, 3], False),
        ([3], True),
        ([1, 5, 1 + 4e-12], True),
        ([1, 5, 1 + 6e-12], False),
    ],
)
def test_symmetry_is_told_to_a_trillionth_of_the_largest_tap(taps, linear_phase):
    response = given(taps)
    assert response.linear_phase is linear_phase
    np.testing.assert_array_equal(response.taps, taps)


@pytest.mark.parametrize(
    ("taps", "says"),
    [([], "0 taps"), ([0, 0], "all 0"), ([1, np.nan], "tap 1"), ([np.inf], "tap 0 .* is inf")],
)
def test_taps_that_do_nothing_good_are_refused(taps, says):
    with pytest.raises(SpecError, match=says):
        given(taps)


def test_a_claim_that_holds_passes_and_one_that_fails_lists_each_band():
    # 2 cos(w/2)/2: 0.7071 at 250 Hz, 0 at 500 Hz.
    given([0.5, 0.5], Band(0, 250, 1, 3.02, True), Band(490, None, 0, 0.04, False))
    claims = (
        Band(0, 250, 1, 3, True, Place("weir.yaml", 5, 3)),
        Band(0, 1, 1, 1, True, Place("weir.yaml", 6, 3)),
        Band(400, None, 0, -40, True, Place("weir.yaml", 7, 3)),
    )
    with pytest.raises(ToleranceError) as caught:
        given([0.5, 0.5], *claims)
    assert str(caught.value).splitlines() == [
        "weir.yaml:5:3: filter g (taps) misses the band from 0 Hz to 250 Hz (gain 1): a deviation "
        "of 3.01 dB is reached at 250 Hz; 3 dB is allowed; change the filter's settings, or the "
        "claim that the band makes",
        "weir.yaml:7:3: filter g (taps) misses the band from 400 Hz to half the rate (gain 0): a "
        "level of -10.2 dB is reached at 400 Hz; -40 dB is allowed; change the filter's settings, "
        "or the claim that the band makes",
    ]


def test_a_claim_is_on_the_square_under_zero_phase():
    claim = Band(0, 250, 1, 4, True)
    given([0.5, 0.5], claim)
    with pytest.raises(ToleranceError, match=r"run forward and backward misses .* 6.021 dB"):
        given([0.5, 0.5], claim, timing="zero-phase")


def test_the_figure_reached_is_told_from_the_limit():
    with pytest.raises(ToleranceError, match=r"deviation of 0\.2500001 is reached"):
        given([1.2500001], Band(0, None, 1, 0.25, False))


@pytest.mark.parametrize(
    ("amount", "length"),
    [
        (Amount("5 samples", Fraction(5)), 5),
        (Amount("20 ms", None, Fraction(20, 1000)), 20),
        (Amount("1 sample", Fraction(1)), 1),
    ],
)
def test_moving_average(amount, length):
    response = average(amount)
    np.testing.assert_array_equal(response.taps, np.full(length, 1 / length))
    assert response.linear_phase


def test_a_duration_at_an_awkward_rate_is_exact():
    # 0.3 s at 10/3 Hz is one sample exactly, though not in floats.
    assert average(Amount("0.3 s", None, Fraction(3, 10)), Fraction(10, 3)).taps.size == 1


@pytest.mark.parametrize(
    ("amount", "says"),
    [
        (Amount("2.5 ms", None, Fraction(25, 10000)), "2.5 samples at 1000 Hz.* 2 samples or 3"),
        (Amount("0.2 ms", None, Fraction(2, 10000)), "state 1 sample$"),
        (Amount("0 samples", Fraction(0)), "0 samples; a whole number .*state 1 sample$"),
        (Amount("-3 samples", Fraction(-3)), "state 1 sample$"),
        (Amount("1 h", None, Fraction(3600)), "state 1048576 samples"),
    ],
)
def test_a_length_that_is_not_whole_samples_is_refused_with_the_nearest(amount, says):
    with pytest.raises(SpecError, match=says):
        average(amount)


def test_a_misspelt_method_is_refused_with_the_nearest():
    with pytest.raises(SpecError, match=r"method butterwort; .*did you mean butterworth"):
        design_filter(Filter("b", "butterwort", {}), KHZ, "causal")


@pytest.mark.parametrize("value", [None, "five", 5, True])
def test_a_setting_of_the_wrong_type_is_refused(value):
    with pytest.raises(SpecError, match="method moving-average needs length"):
        average(value)
