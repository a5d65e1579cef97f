"""The notch: its zero, and half-power points exactly as far apart as stated."""

from __future__ import annotations

from fractions import Fraction

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.signal import iirnotch

from pipeline_filters.design.compliance import check_bands, sections_magnitude
from pipeline_filters.design.contract import SectionsResponse
from pipeline_filters.design.designing import design_filter
from pipeline_filters.errors import SpecError
from pipeline_filters.spec.model import Band, Filter


def notch(centre, width, rate_hz=Fraction(1000), timing="causal") -> SectionsResponse:
    stated = {"centre": Fraction(centre), "width": Fraction(width)}
    response = design_filter(Filter("hum", "notch", stated), rate_hz, timing)
    assert isinstance(response, SectionsResponse)
    return response


@pytest.mark.parametrize(("centre", "width"), [(50, 2), (50, 120), (480, 60), (20, 470)])
def test_half_power_points_in_extended_precision(centre, width):
    row = [mpmath.mpf(float(value)) for value in notch(centre, width).sections[0]]

    def excess(hz):
        back = mpmath.expj(-2 * mpmath.pi * hz / 1000)
        top = row[0] + back * (row[1] + back * row[2])
        bottom = row[3] + back * (row[4] + back * row[5])
        return abs(top / bottom) ** 2 - mpmath.mpf(1) / 2

    with mpmath.workdps(30):
        low = mpmath.findroot(excess, (mpmath.mpf(0), centre), solver="anderson", tol=1e-24)
        high = mpmath.findroot(excess, (centre, mpmath.mpf(500)), solver="anderson", tol=1e-24)
    assert float(high - low) == pytest.approx(width, abs=1e-10)


@settings(deadline=None, max_examples=50)
@given(centre=st.integers(5, 495), width=st.floats(0.01, 490))
def test_shape_and_agreement_with_scipy(centre, width):
    response = notch(centre, Fraction(width))
    level = sections_magnitude(response.sections, np.array([0.0, centre, 500.0]), 1000.0)
    np.testing.assert_allclose(level, [1, 0, 1], atol=1e-8)
    # scipy.signal.iirnotch takes the centre over the width, and comes to the same recursion.
    b, a = iirnotch(centre, centre / width, fs=1000)
    np.testing.assert_allclose(response.sections[0], [*b, *a], atol=1e-9)


def test_magnitude_never_passes_one():
    found = check_bands([notch(50, 2)], [Band(0, None, 0, 0, True)], 1000.0, False)[0]
    assert found.deviation <= 1e-12


def test_it_says_where_its_half_power_points_lie():
    assert "half power at 49.0097 Hz and 51.0097 Hz" in notch(50, 2).notes[0]
    assert "-6.02 dB" in notch(50, 2, timing="zero-phase").notes[1]


def test_every_setting_outside_is_named():
    with pytest.raises(SpecError) as caught:
        notch(600, 0)
    assert len(caught.value.problems) == 2
    assert "centre: 600 Hz at a sample rate of 1000 Hz" in str(caught.value)


@pytest.mark.parametrize("width", [Fraction(1, 10**7), Fraction(1, 10**12)])
def test_a_notch_that_never_comes_to_rest_is_refused(width):
    with pytest.raises(SpecError, match=r"come to rest|unstable"):
        notch(50, width)


def test_settle_is_handed_on():
    filter = Filter("hum", "notch", {"centre": Fraction(50), "width": Fraction(2)}, settle=0.02)
    response = design_filter(filter, Fraction(1000), "causal")
    assert isinstance(response, SectionsResponse)
    assert response.settle == 0.02
