"""Bands checked on the true response, against dense independent evaluation."""

from __future__ import annotations

from fractions import Fraction

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline_filters.design.compliance import check_bands, magnitude, taps_magnitude
from pipeline_filters.design.contract import SectionsResponse, TapsResponse
from pipeline_filters.design.extremes import local_maxima
from pipeline_filters.design.minimax import Aim, exchange_taps
from pipeline_filters.design.notch import design_notch
from pipeline_filters.errors import SpecError
from pipeline_filters.spec.model import Band, Filter, Place

RATE = 1000.0


def taps_response(taps) -> TapsResponse:
    return TapsResponse(np.asarray(taps, float), False)


def test_taps_magnitude_against_extended_precision():
    taps = np.random.default_rng(1).normal(size=301)
    freq_hz = np.array([0.0, 12.3, 333.1, 500.0])
    for hz, value in zip(freq_hz, taps_magnitude(taps, freq_hz, RATE), strict=True):
        with mpmath.workdps(40):
            turn = mpmath.expj(-2 * mpmath.pi * mpmath.mpf(float(hz)) / 1000)
            exact = abs(mpmath.fsum(mpmath.mpf(float(tap)) * turn**k for k, tap in enumerate(taps)))
        assert value == pytest.approx(float(exact), rel=1e-11)


def test_series_multiplies_magnitudes():
    mean = taps_response(np.full(4, 0.25))
    pole = SectionsResponse(np.array([[0.5, 0, 0, 1, -0.5, 0]]), 1e-3)
    freq_hz = np.linspace(0, 500, 50)
    z = np.exp(-2j * np.pi * freq_hz / RATE)
    expected = np.abs((1 + z + z**2 + z**3) / 4 * 0.5 / (1 - 0.5 * z))
    np.testing.assert_allclose(magnitude([mean, pole], freq_hz, RATE), expected, atol=1e-14)


def test_local_maxima_of_an_uneven_parabola():
    x = np.array([0.0, 0.5, 1.3, 2.0, 3.0])
    places, heights = local_maxima(x, 5 - (x - 1.1) ** 2)
    np.testing.assert_allclose([places[0], heights[0]], [1.1, 5.0], atol=1e-12)
    assert places.size == 1


def test_local_maxima_at_ends_and_of_plateaus():
    x = np.arange(6.0)
    places, heights = local_maxima(x, np.array([3.0, 1, 2, 2, 0, 4]))
    assert places[0] == 0
    assert places[-1] == 5
    assert 2 <= places[1] <= 3
    assert heights.max() == 4


@settings(deadline=None, max_examples=60)
@given(
    seed=st.integers(0, 10_000),
    length=st.integers(1, 100),
    edges=st.tuples(st.floats(0, 499), st.floats(0, 500)),
    squared=st.booleans(),
    gain=st.sampled_from([0.0, 1.0]),
)
def test_worst_deviation_is_that_of_a_far_denser_grid(seed, length, edges, squared, gain):
    low, high = sorted(edges)
    # About a gain of 1 or 0, as filters are: near a zero of |H| its deviation has a kink.
    taps = 0.5 * np.random.default_rng(seed).normal(size=length) / length
    taps[length // 2] += gain
    band = Band(low, high, gain, 1.0, False)
    finding = check_bands([taps_response(taps)], [band], RATE, squared)[0]

    def deviation(freq_hz):
        values = taps_magnitude(taps, freq_hz, RATE)
        return np.abs((values**2 if squared else values) - gain)

    dense = deviation(np.linspace(low, high, 1000 + 300 * length))
    assert finding.deviation >= dense.max() * (1 - 1e-7)
    assert low <= finding.worst_hz <= high
    assert finding.deviation == pytest.approx(
        deviation(np.array([finding.worst_hz]))[0], rel=1e-9, abs=1e-15
    )
    assert finding.deviation == abs(finding.worst_magnitude - gain)


def test_decibels_of_pass_and_stop_bands():
    # 20 lg(1.25) = 1.938200 dB.
    bands = [Band(0, None, 1, 1.94, True), Band(0, None, 1, 1.93, True), Band(0, None, 0, 2, True)]
    found = check_bands([taps_response([1.25])], bands, RATE, False)
    assert [finding.complies for finding in found] == [True, False, True]
    assert found[0].deviation == pytest.approx(1.938200, abs=1e-6)
    squared = check_bands([taps_response([1.25])], bands, RATE, True)[0]
    assert squared.deviation == pytest.approx(2 * 1.938200, abs=1e-6)


def test_a_deviation_at_its_limit_complies_and_just_past_it_does_not():
    limit = 0.25
    for past, complies in [(0.0, True), (1e-12, True), (1e-6, False)]:
        found = check_bands(
            [taps_response([1 + limit + past])], [Band(0, None, 1, limit, False)], RATE, False
        )
        assert found[0].complies is complies


def test_the_zero_of_a_notch_is_found_in_a_band_without_width():
    filter = Filter("hum", "notch", {"centre": Fraction(50), "width": Fraction(2)})
    notch = design_notch(filter, Fraction(1000), "causal")
    found = check_bands([notch], [Band(50, 50, 0, -200, True)], RATE, False)[0]
    assert found.complies
    assert found.worst_hz == 50


def test_no_filter_at_all_is_a_wire():
    assert check_bands([], [Band(0, None, 1, 1e-9, False)], RATE, False)[0].complies


def test_a_resonance_between_taps_is_seen():
    # Radius 1 - 1e-7: a peak 1e-5 Hz wide; the taps before it are long and flat.
    sections = np.array([[1e-7, 0, 0, 1, -2 * (1 - 1e-7) * np.cos(0.7), (1 - 1e-7) ** 2]])
    taps = np.zeros(1001)
    taps[500] = 1
    found = check_bands(
        [taps_response(taps), SectionsResponse(sections, 1e-3)],
        [Band(0, None, 0, -40, True)],
        RATE,
        False,
    )[0]
    assert found.worst_hz == pytest.approx(0.7 / (2 * np.pi) * RATE, abs=1e-5)
    # The peak of one pair, 1e-7 / ((1 - r) |1 - r exp(-2j w)|).
    assert found.worst_magnitude == pytest.approx(1 / (2 * np.sin(0.7)), rel=1e-4)


def test_a_peak_beside_two_poles_is_seen():
    # A zero on the circle at 0.7 with poles behind it at 1 - 1e-4 and 1 - 1e-6: about
    # d / (|d + 1e-4j| |d + 1e-6j|) at a distance d, highest where d^2 = 1e-10.
    def pair(radius):
        return [1.0, -2 * radius * np.cos(0.7), radius**2]

    sections = np.array(
        [[*pair(1.0), *pair(1 - 1e-4)], [1e-4, 0.0, 0.0, *pair(1 - 1e-6)]],
    )
    found = check_bands(
        [SectionsResponse(sections, 1e-3)], [Band(0, None, 0, -40, True)], RATE, False
    )[0]
    away = abs(found.worst_hz * 2 * np.pi / RATE - 0.7)
    assert away == pytest.approx(1e-5, rel=0.02)


def test_the_worst_of_many_nearly_equal_extremes_is_found():
    # Narrow lobes crowd at the edges of an equiripple stop band.
    bands = (Band(0, 160.19140625, 0, -100, True), Band(181.19140625, None, 1, 0.01, True))
    taps = exchange_taps(
        215,
        [Aim(0, 160.19140625, 0, 1e-5), Aim(181.19140625, 500, 1, 10**0.0005 - 1)],
        RATE,
        density=16,
    )
    for band in bands:
        top = band.high_hz or 500
        dense = taps_magnitude(taps, np.linspace(band.low_hz, top, 200_001), RATE)
        expected = np.abs(20 * np.log10(dense)).max() if band.gain else 20 * np.log10(dense.max())
        found = check_bands([TapsResponse(taps, True)], [band], RATE, False)[0]
        assert expected - 1e-9 <= found.deviation <= expected + 1e-5


def test_every_band_past_half_the_rate_is_named():
    bands = [
        Band(10, 600, 1, 0.1, True, Place("weir.yaml", 7, 9)),
        Band(0, 5, 0, -60, True),
        Band(501, None, 0, -60, True, Place("weir.yaml", 9, 9)),
    ]
    with pytest.raises(SpecError) as caught:
        check_bands([taps_response([1])], bands, RATE, False)
    assert [problem.where for problem in caught.value.problems] == [
        "weir.yaml:7:9",
        "weir.yaml:9:9",
    ]
    assert "half the rate, 500 Hz" in str(caught.value)


def test_an_edge_at_half_a_fractional_rate_is_at_half_the_rate():
    rate_hz = float(Fraction(1, 3))
    found = check_bands([taps_response([1])], [Band(0, 0.5 / 3, 1, 0.1, True)], rate_hz, False)
    assert found[0].complies
