"""Designs against published values and independent computation."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.signal import sosfreqz

from pipeline_filters.design.compliance import check_bands
from pipeline_filters.design.contract import SectionsResponse, TapsResponse
from pipeline_filters.design.designing import design_filter
from pipeline_filters.design.impulse import impulse_response, settling_samples
from pipeline_filters.design.windowed import kaiser_beta
from pipeline_filters.errors import SpecError, ToleranceError
from pipeline_filters.spec.model import Band, Filter

KHZ = Fraction(1000)


def test_kaiser_beta_of_the_published_examples():
    # Oppenheim and Schafer, Discrete-Time Signal Processing, section 7.6: A = 60, 33.56.
    assert kaiser_beta(60) == pytest.approx(5.653, abs=5e-4)
    assert kaiser_beta(33.5556) == pytest.approx(2.6, abs=5e-3)


def test_equiripple_finds_the_published_shortest_length():
    # Oppenheim and Schafer, section 7.7: order 26 (27 taps) misses, order 27 (28 taps) meets.
    bands = (Band(0, 200, 1, 0.01, False), Band(300, None, 0, 0.001, False))
    response = design_filter(Filter("f", "equiripple", {}, bands), KHZ, "causal")
    assert isinstance(response, TapsResponse)
    assert response.taps.size == 28
    assert response.linear_phase


def test_butterworth_order_six_of_the_textbook():
    # Oppenheim and Schafer's example, 0.89125 to 0.2 pi and 0.17783 from 0.3 pi: order 6.
    # They let the slack fall to the pass band; here it falls to the stop band.
    bands = (Band(0, 100, 1, 1, True), Band(150, None, 0, -15, True))
    response = design_filter(Filter("f", "butterworth", {}, bands), KHZ, "causal")
    assert isinstance(response, SectionsResponse)
    assert response.sections.shape == (3, 6)


def test_butterworth_second_order_polynomial():
    # Normalised polynomial s^2 + 1.414213562 s + 1 (any handbook), by the bilinear transform
    # at a quarter of the rate, where the warped corner is 1.
    settings = {"order": 2, "shape": "low-pass", "corners": (Fraction(250),)}
    response = design_filter(Filter("f", "butterworth", settings), KHZ, "causal")
    root = 1.4142135623730951
    whole = 1 + root + 1
    wanted = [1 / whole, 2 / whole, 1 / whole, 1, 0, (1 - root + 1) / whole]
    np.testing.assert_allclose(response.sections[0], wanted, atol=1e-12)


@pytest.mark.parametrize(("centre", "width"), [(50, 2), (50, 40), (480, 10)])
def test_notch_half_power_points_are_exactly_apart(centre, width):
    settings = {"centre": Fraction(centre), "width": Fraction(width)}
    response = design_filter(Filter("f", "notch", settings), KHZ, "causal")

    def above(freq_hz):
        _, values = sosfreqz(response.sections, worN=[2 * np.pi * freq_hz / 1000])
        return abs(values[0]) - 0.5**0.5

    low = brentq(above, 1e-3, centre - 1e-6, xtol=1e-12)
    high = brentq(above, centre + 1e-6, 500 - 1e-3, xtol=1e-12)
    assert high - low == pytest.approx(width, abs=1e-6)


@pytest.mark.parametrize("method", ["kaiser", "equiripple"])
@pytest.mark.parametrize("timing", ["causal", "zero-phase"])
def test_designs_meet_their_bands_on_a_fine_grid(method, timing):
    bands = (
        Band(0, 15, 0, -60, True),
        Band(25, 200, 1, 0.1, True),
        Band(240, None, 0, -60, True),
    )
    response = design_filter(Filter("f", method, {}, bands), KHZ, timing)
    power = 2 if timing == "zero-phase" else 1
    spectrum = np.abs(np.fft.rfft(response.taps, 1 << 18)) ** power
    freq_hz = np.fft.rfftfreq(1 << 18, 1e-3)
    passed = (freq_hz >= 25) & (freq_hz <= 200)
    assert np.abs(20 * np.log10(spectrum[passed])).max() <= 0.1 + 1e-6
    stopped = (freq_hz <= 15) | (freq_hz >= 240)
    assert spectrum[stopped].max() <= 1e-3 * (1 + 1e-6)


def test_a_claim_that_is_missed_is_refused():
    settings = {"taps": (0.5, 0.5)}
    claim = (Band(100, 200, 0, -60, True),)
    with pytest.raises(ToleranceError, match="is allowed"):
        design_filter(Filter("f", "taps", settings, claim), KHZ, "causal")


def test_an_unstable_recursion_is_refused_by_its_pole():
    with pytest.raises(SpecError, match="unstable: pole"):
        impulse_response(np.array([[1.0, 0, 0, 1, -2.1, 1.1]]), 1e-12)


def test_settling_of_one_pole():
    # The rest of the sum of r^k from n on is r^n of the whole.
    sections = np.array([[1.0, 0, 0, 1, -0.9, 0]])
    assert settling_samples(sections, 1e-3) == int(np.ceil(np.log(1e-3) / np.log(0.9)))


def test_a_narrow_resonance_does_not_fall_between_grid_points():
    sections = np.array([[1e-5, 0, 0, 1, -2 * 0.99999 * np.cos(0.3), 0.99999**2]])
    response = SectionsResponse(sections, 1e-3)
    finding = check_bands([response], [Band(0, None, 0, -6, True)], 1000.0, False)[0]
    assert finding.worst_hz == pytest.approx(0.3 / (2 * np.pi) * 1000, abs=1e-3)
    assert not finding.complies
