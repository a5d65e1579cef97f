"""Butterworth designs against handbook polynomials, textbook examples and published orders."""

from __future__ import annotations

from fractions import Fraction
from math import atan, pi

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy.signal import butter, buttord

from pipeline_filters.design.butterworth import Prototype
from pipeline_filters.design.compliance import sections_magnitude
from pipeline_filters.design.contract import SectionsResponse
from pipeline_filters.design.designing import design_filter
from pipeline_filters.design.impulse import pole_radius
from pipeline_filters.errors import SpecError, ToleranceError
from pipeline_filters.spec.model import Band, Filter

KHZ = Fraction(1000)


def by_order(order: int, shape: str, *corners, rate_hz=KHZ, timing="causal") -> SectionsResponse:
    stated = {
        "order": order,
        "shape": shape,
        "corners": tuple(Fraction(corner) for corner in corners),
    }
    response = design_filter(Filter("b", "butterworth", stated), rate_hz, timing)
    assert isinstance(response, SectionsResponse)
    return response


def by_bands(*bands: Band, timing="causal") -> SectionsResponse:
    response = design_filter(Filter("b", "butterworth", {}, bands), KHZ, timing)
    assert isinstance(response, SectionsResponse)
    return response


def order_of(response: SectionsResponse) -> int:
    return int(response.notes[0].split()[2])


# Normalised polynomials s^n + ... + 1 and their quadratics' s-coefficients (any handbook,
# for instance Weinberg; from memory, and confirmed by the poles' closed form).
POLYNOMIALS = {
    2: [1, 1.414213562, 1],
    3: [1, 2, 2, 1],
    4: [1, 2.61312593, 3.414213562, 2.61312593, 1],
    5: [1, 3.236067977, 5.236067977, 5.236067977, 3.236067977, 1],
    6: [1, 3.863703305, 7.464101615, 9.141620173, 7.464101615, 3.863703305, 1],
    8: [1, 5.125830895, 13.13707118, 21.84615097, 25.68835593, 21.84615097, 13.13707118,
        5.125830895, 1],
}  # fmt: skip


@pytest.mark.parametrize("order", POLYNOMIALS)
def test_denominators_are_the_handbook_polynomials(order):
    # At a quarter of the rate the warped corner is 1; s = (1 - z^-1)/(1 + z^-1) undone.
    polynomial = np.ones(1)
    for _, _, _, _, a1, a2 in by_order(order, "low-pass", 250).sections:
        quadratic = np.array([1 - a1 + a2, 2 * (1 - a2), 1 + a1 + a2])
        if abs(a2) < 1e-15:  # a single pole: its factor 1 + z^-1 goes
            quadratic = np.array([1 - a1, 1 + a1])
        polynomial = np.convolve(polynomial, quadratic / quadratic[0])
    np.testing.assert_allclose(polynomial, POLYNOMIALS[order], rtol=1e-8)


def test_the_order_six_example_of_the_textbook():
    # Oppenheim and Schafer, bilinear example: 0.89125 to 0.2 pi, 0.17783 from 0.3 pi, the
    # stop band met exactly, Omega_c = 0.7662309579 at Td = 1.
    corner = Fraction(1000 * atan(0.7662309579 / 2) / pi)
    sections = by_order(6, "low-pass", corner).sections
    printed = [(-1.2686, 0.7051), (-1.0106, 0.3583), (-0.9044, 0.2155)]
    computed = [
        (-1.2686450101026, 0.7051278704826),
        (-1.0105771918998, 0.3582706915333),
        (-0.9043644567906, 0.2155150007036),
    ]
    found = sorted((tuple(section[4:]) for section in sections), key=lambda pair: -pair[1])
    np.testing.assert_allclose(found, printed, atol=5.1e-5)
    np.testing.assert_allclose(found, computed, atol=1e-10)
    assert np.prod(sections[:, 0]) == pytest.approx(0.0007378266819677, rel=1e-8)
    level = sections_magnitude(sections, np.array([100.0, 150.0]), 1000.0)
    np.testing.assert_allclose(level, [0.9372148932, 0.17783], atol=1e-5)


def test_the_slack_of_the_textbook_bands_deepens_the_stop_band():
    # The same bands. The textbook puts the slack of order 5.304 -> 6 into the pass band; here,
    # as in scipy.signal.buttord, the pass edge is met exactly and the stop band gains.
    response = by_bands(Band(0, 100, 1, 1, True), Band(150, None, 0, -15, True))
    assert order_of(response) == 6
    np.testing.assert_allclose(
        sections_magnitude(response.sections, np.array([100.0]), 1000.0), 10 ** (-1 / 20), rtol=1e-9
    )
    order, natural = buttord(0.2, 0.3, 1, 15)
    expected = butter(order, natural, output="sos")
    np.testing.assert_allclose(response.sections, expected, rtol=1e-9)
    assert natural == pytest.approx(0.2220394, abs=5e-7)
    assert "the slack deepens the stop bands" in response.notes[0]


def lowest(prototype: Prototype) -> int:
    return next(n for n in range(1, 40) if np.subtract(*prototype.half_power(n)) <= 0)


def test_worked_orders_of_a_textbook():
    # Proakis and Manolakis 8.3.6: -3 dB at 500 Hz, -40 dB at 1000 Hz: 6.64 -> 7; and
    # 0.9 at 0.2 pi, 0.2 at 0.4 pi: 3.34 -> 4, Omega_c = 0.75317569 with the pass band exact.
    first = Prototype("low-pass", ((500.0, 1.0),), ((1000.0, 1e4 - 1),), lambda at: [at])
    assert lowest(first) == 7
    passing, stopping = (0.2 * pi, 0.9**-2 - 1), (0.4 * pi, 0.2**-2 - 1)
    second = Prototype("low-pass", (passing,), (stopping,), lambda at: [at])
    assert lowest(second) == 4
    assert second.half_power(4)[0] == pytest.approx(0.75317569, abs=1e-8)


@pytest.mark.parametrize(
    ("bands", "order", "corners"),
    [
        # A vendor's documentation of order selection: n = 5 and n = 16; corners as scipy's,
        # with the pass band met exactly.
        ([Band(0, 40, 1, 3, True), Band(150, None, 0, -60, True)], 5, "40.0188 Hz"),
        (
            [Band(0, 50, 0, -40, True), Band(60, 200, 1, 3, True), Band(250, None, 0, -40, True)],
            16,
            "59.9949 Hz and 200.013 Hz",
        ),
        # Oppenheim and Schafer's comparison of designs: order 14.
        ([Band(0, 200, 1, 0.01, False), Band(300, None, 0, 0.001, False)], 14, None),
    ],
)
def test_published_orders(bands, order, corners):
    response = by_bands(*bands)
    assert order_of(response) == order
    if corners:
        assert f"-3.01 dB in one pass at {corners};" in response.notes[0]


@settings(deadline=None, max_examples=40)
@given(
    shape=st.sampled_from(["low-pass", "high-pass", "band-pass", "band-stop"]),
    order=st.integers(1, 10),
    corners=st.tuples(st.integers(5, 240), st.integers(245, 490)),
)
def test_corners_read_half_power_for_every_shape(shape, order, corners):
    used = corners if shape.startswith("band") else corners[:1]
    response = by_order(order, shape, *used)
    level = sections_magnitude(response.sections, np.array(used, float), 1000.0)
    np.testing.assert_allclose(20 * np.log10(level), -10 * np.log10(2), atol=1e-5)
    assert pole_radius(response.sections)[0] < 1
    assert response.sections.shape[1] == 6


@settings(deadline=None, max_examples=40)
@given(
    cuts=st.lists(st.integers(2, 48), min_size=4, max_size=4, unique=True),
    pattern=st.sampled_from(["10", "01", "010", "101"]),
    pass_db=st.floats(0.2, 3),
    stop_db=st.floats(-50, -10),
    timing=st.sampled_from(["causal", "zero-phase"]),
)
def test_bands_are_met_with_the_lowest_order(cuts, pattern, pass_db, stop_db, timing):
    ends_hz = [10.0 * cut for cut in sorted(cuts)[: 2 * (len(pattern) - 1)]]
    ends_hz = [0.0, *ends_hz, 500.0]
    bands = [
        Band(low, high, float(gain), pass_db if gain == "1" else stop_db, True)
        for low, high, gain in zip(ends_hz[::2], ends_hz[1::2], pattern, strict=True)
    ]
    try:
        response = by_bands(*bands, timing=timing)
    except ToleranceError:
        # Too little room for order 32; the next test sees what is then said.
        assume(False)
    passes = 2 if timing == "zero-phase" else 1
    for band in bands:
        at_hz = np.linspace(band.low_hz, band.high_hz, 3001)
        level = sections_magnitude(response.sections, at_hz, 1000.0)
        level = passes * 20 * np.log10(level + 1e-300)
        assert (np.abs(level) if band.gain else level).max() <= band.tolerance + 1e-6
    if len(pattern) == 2:
        edges = [bands[0].high_hz / 500, bands[1].low_hz / 500]
        ordered = edges if pattern == "10" else edges[::-1]
        lowest_order, _ = buttord(*ordered, pass_db / passes, -stop_db / passes)
        assert order_of(response) == lowest_order


def test_bands_beyond_the_highest_order_say_what_it_reaches():
    with pytest.raises(
        ToleranceError, match=r"up to order 32, misses the band from 41 Hz .* -80 dB"
    ):
        by_bands(Band(0, 40, 1, 0.01, True), Band(41, None, 0, -80, True))


def test_several_bands_of_one_kind_all_count():
    loose = by_bands(Band(0, 40, 1, 1, True), Band(80, None, 0, -20, True))
    strict = by_bands(
        Band(0, 40, 1, 1, True), Band(80, 150, 0, -20, True), Band(160, None, 0, -70, True)
    )
    assert order_of(strict) > order_of(loose)


def test_the_stricter_of_two_pass_bands_sets_the_corners():
    # Both pass edges stand at the prototype's 1, so the looser band changes nothing.
    def stop(upper_db: float) -> SectionsResponse:
        return by_bands(
            Band(0, 100, 1, 0.5, True),
            Band(150, 200, 0, -30, True),
            Band(260, None, 1, upper_db, True),
        )

    np.testing.assert_array_equal(stop(3).sections, stop(0.5).sections)


def test_order_and_corners_under_zero_phase_say_what_they_read():
    response = by_order(4, "low-pass", 50, timing="zero-phase")
    assert any("-6.02 dB at its corners" in note for note in response.notes)


@pytest.mark.parametrize(
    ("stated", "says"),
    [
        ({"order": 0, "shape": "low-pass", "corners": (Fraction(50),)}, "order 0; 1 to 32"),
        ({"order": 33, "shape": "low-pass", "corners": (Fraction(50),)}, "order 33; 1 to 32"),
        ({"order": 2, "shape": "low-pass", "corners": (Fraction(500),)}, "below half the rate"),
        ({"order": 2, "shape": "band-pass", "corners": (Fraction(50),)}, "1 corners for shape"),
        ({"order": 2, "shape": "low-pass", "corners": (Fraction(5),) * 2}, "state a single one"),
        ({"order": 2, "shape": "band-pass", "corners": (Fraction(9), Fraction(5))}, "rising"),
        ({"order": 2, "shape": "loop"}, "shape loop"),
        ({"shape": "low-pass", "corners": (Fraction(50),)}, "no order"),
        ({}, "no order"),
    ],
)
def test_settings_that_make_no_filter_are_refused(stated, says):
    with pytest.raises(SpecError, match=says):
        design_filter(Filter("b", "butterworth", stated), KHZ, "causal")


def test_two_problems_at_once():
    stated = {"order": 0, "shape": "low-pass", "corners": (Fraction(500),)}
    with pytest.raises(SpecError) as caught:
        design_filter(Filter("b", "butterworth", stated), KHZ, "causal")
    assert len(caught.value.problems) == 2


def test_a_corner_too_low_to_come_to_rest_is_refused():
    with pytest.raises(SpecError, match="lower rate"):
        by_order(8, "band-pass", Fraction(1, 10**6), Fraction(2, 10**6))


@pytest.mark.parametrize(
    "bands",
    [
        [Band(0, 40, 2, 0.1, True), Band(80, None, 0, -20, True)],
        [
            Band(0, 40, 1, 1, True),
            Band(80, 90, 0, -20, True),
            Band(100, 110, 1, 1, True),
            Band(200, None, 0, -20, True),
        ],
        [Band(0, 40, 1, 1.5, False), Band(80, None, 0, -20, True)],
    ],
)
def test_patterns_that_it_cannot_make_name_what_can(bands):
    with pytest.raises(SpecError, match="use kaiser or equiripple"):
        by_bands(*bands)
