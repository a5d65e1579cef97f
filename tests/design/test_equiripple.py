"""Equiripple designs against the figures of 1973, a textbook and linear programming."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import linprog

from pipeline_filters.design import length_search
from pipeline_filters.design.compliance import taps_magnitude
from pipeline_filters.design.contract import TapsResponse
from pipeline_filters.design.designing import design_filter
from pipeline_filters.design.minimax import Aim, errors_of, exchange_taps
from pipeline_filters.errors import SpecError, ToleranceError
from pipeline_filters.spec.model import Band, Filter

KHZ = Fraction(1000)

# McClellan, Parks and Rabiner, IEEE Trans. Audio Electroacoust. AU-21, 506-526, 1973:
# the printed taps of figures 7 and 9, optimal on the program's grid of density 16; and the
# true minimax deviation, by an exchange on a dense grid.
FIGURE_7 = [Aim(0, 0.08, 1, 1), Aim(0.16, 0.5, 0, 1)]
FIGURE_7_HALF = [
    0.0033740917, 0.014938299, 0.010569360, 0.0025415067, -0.015929392, -0.034085343,
    -0.038112177, -0.014629169, 0.040089541, 0.11540713, 0.18850752, 0.23354606,
]  # fmt: skip
FIGURE_9 = [Aim(0, 0.1, 0, 0.1), Aim(0.2, 0.35, 1, 1), Aim(0.425, 0.5, 0, 0.1)]
FIGURE_9_HALF = [
    -0.0057534121, 0.00099027198, 0.0075733545, -0.0065141192, 0.013960525, 0.0022951469,
    -0.019994067, 0.0071369560, -0.039657363, 0.011260114, 0.066233643, -0.010497223,
    0.085136133, -0.12024993, -0.29678577, 0.30410917,
]  # fmt: skip
FIGURES = [
    pytest.param(24, FIGURE_7, FIGURE_7_HALF, 0.01247549, 0.012550804, id="figure 7"),
    pytest.param(32, FIGURE_9, FIGURE_9_HALF, 0.01518015, 0.015363394, id="figure 9"),
]


def equiripple(*bands: Band, timing="causal") -> TapsResponse:
    response = design_filter(Filter("gravel", "equiripple", {}, bands), KHZ, timing)
    assert isinstance(response, TapsResponse)
    return response


def least_error(length: int, aims: list[Aim]) -> float:
    """The smallest largest error of any symmetric taps, by linear programming.

    Rates of 1; the error is bounded on a grid with ends at the edges, dense enough for five
    digits.
    """
    m = np.arange((length + 1) // 2) + (0.5 if length % 2 == 0 else 0)
    rows, bounds = [], []
    for aim in aims:
        t = (1 - np.cos(np.linspace(0, np.pi, 40 * length))) / 2
        cosines = np.cos(2 * np.pi * np.outer(aim.low_hz + t * (aim.high_hz - aim.low_hz), m))
        for sign in (1, -1):
            rows.append(np.column_stack([sign * cosines, np.full(t.size, -aim.half_width)]))
            bounds.append(np.full(t.size, sign * aim.centre))
    cost = np.zeros(m.size + 1)
    cost[-1] = 1
    free = [(None, None)] * m.size + [(0, None)]
    found = linprog(cost, np.concatenate(rows), np.concatenate(bounds), bounds=free)
    return float(found.fun)


@pytest.mark.parametrize(("length", "aims", "half", "best", "printed_error"), FIGURES)
def test_printed_taps_are_the_optimum_on_their_grid(length, aims, half, best, printed_error):
    taps = exchange_taps(length, aims, 1.0, density=16)
    np.testing.assert_allclose(taps[: len(half)], half, atol=1e-6)
    largest, _ = errors_of(taps, aims, 1.0)
    assert largest == pytest.approx(printed_error, abs=3e-6)


@pytest.mark.parametrize(("length", "aims", "half", "best", "printed_error"), FIGURES)
def test_dense_grids_come_to_the_true_optimum(length, aims, half, best, printed_error):
    taps = exchange_taps(length, aims, 1.0, density=256)
    np.testing.assert_allclose(taps[: len(half)], half, atol=2e-4)
    largest, proven = errors_of(taps, aims, 1.0)
    assert best * (1 - 1e-5) <= largest <= printed_error
    # The proven bound brackets the optimum from below, closely.
    assert best * (1 - 1e-3) <= proven <= best * (1 + 1e-6)


def test_the_bound_holds_for_taps_that_are_far_from_the_best():
    printed = np.array(FIGURE_7_HALF + FIGURE_7_HALF[::-1])
    _, proven = errors_of(printed, FIGURE_7, 1.0)
    assert 0 < proven <= 0.01247549 * (1 + 1e-6)
    _, nothing = errors_of(np.full(24, 1 / 24), FIGURE_7, 1.0)
    assert nothing <= 0.01247549


@pytest.mark.parametrize(("length", "best"), [(61, 0.00155946), (60, None)])
def test_linear_programming_agrees(length, best):
    # Proakis and Manolakis, example 8.2.3: 61 taps, 0 to 0.1 and 0.15 to 0.5, about -56 dB.
    aims = [Aim(0, 0.1, 1, 1), Aim(0.15, 0.5, 0, 1)]
    by_programming = least_error(length, aims)
    if best is not None:
        assert by_programming == pytest.approx(best, rel=1e-4)
    largest, proven = errors_of(exchange_taps(length, aims, 1.0, density=256), aims, 1.0)
    assert largest == pytest.approx(by_programming, rel=2e-4)
    assert proven == pytest.approx(by_programming, rel=2e-4)


def test_order_26_fails_and_27_passes():
    # Oppenheim and Schafer, section 7.7: 0.4 pi, 0.6 pi, 0.01 and 0.001; the estimate M = 26
    # misses (0.0116), M = 27 meets (0.0092): 28 taps.
    aims = [Aim(0, 0.2, 1, 0.01), Aim(0.3, 0.5, 0, 0.001)]
    for length, error in [(27, 1.16194), (28, 0.917695)]:
        largest, _ = errors_of(exchange_taps(length, aims, 1.0, density=256), aims, 1.0)
        assert largest == pytest.approx(error, rel=1e-4)
    response = equiripple(Band(0, 200, 1, 0.01, False), Band(300, None, 0, 0.001, False))
    assert response.taps.size == 28
    assert "proven the shortest" in response.notes[0]


@pytest.mark.parametrize(
    "bands",
    [
        (Band(0, 90, 1, 0.5, True), Band(130, None, 0, -50, True)),
        (Band(0, 90, 0, -45, True), Band(130, None, 2, 0.03, False)),
        (Band(0, 60, 0, -40, True), Band(90, 200, 1, 1, True), Band(230, None, 0, -35, True)),
    ],
)
def test_no_shorter_taps_of_either_parity_meet_the_bands(bands):
    response = equiripple(*bands)
    aims = []
    for band in bands:
        top = 500 if band.high_hz is None else band.high_hz
        if band.gain == 0:
            low, high = -(10 ** (band.tolerance / 20)), 10 ** (band.tolerance / 20)
        elif band.decibels:
            low, high = (band.gain * 10 ** (sign * band.tolerance / 20) for sign in (-1, 1))
        else:
            low, high = band.gain - band.tolerance, band.gain + band.tolerance
        aims.append(Aim(band.low_hz / 1000, top / 1000, (low + high) / 2, (high - low) / 2))
    assert least_error(response.taps.size, aims) <= 1 + 1e-6
    for shorter in (response.taps.size - 1, response.taps.size - 2):
        assert least_error(shorter, aims) > 1


@settings(deadline=None, max_examples=30)
@given(
    first=st.floats(5, 350),
    room=st.floats(15, 140),
    ripple_db=st.floats(0.01, 6),
    stop_db=st.floats(-100, -10),
    passes_low=st.booleans(),
    timing=st.sampled_from(["causal", "zero-phase"]),
)
def test_designs_meet_their_bands_on_an_independent_grid(
    first, room, ripple_db, stop_db, passes_low, timing
):
    gains = (1.0, 0.0) if passes_low else (0.0, 1.0)
    bands = [
        Band(low, high, gain, ripple_db if gain else stop_db, True)
        for (low, high), gain in zip([(0, first), (first + room, None)], gains, strict=True)
    ]
    response = equiripple(*bands, timing=timing)
    np.testing.assert_array_equal(response.taps, response.taps[::-1])
    for band in bands:
        at_hz = np.linspace(band.low_hz, band.high_hz or 500, 6007)
        level = taps_magnitude(response.taps, at_hz, 1000.0)
        level = 20 * np.log10((level**2 if timing == "zero-phase" else level) + 1e-300)
        assert (np.abs(level) if band.gain else level).max() <= band.tolerance + 1e-6


def test_gain_at_half_the_rate_takes_an_odd_length():
    assert equiripple(Band(0, 100, 0, -60, True), Band(140, None, 1, 0.1, True)).taps.size % 2 == 1


def test_a_tolerance_wider_than_the_gain_lets_the_sign_go():
    # |H| up to 1.1 is all that is asked above: one tap does it.
    response = equiripple(Band(0, 100, 0.9, 0.2, False), Band(140, None, 0, 1.1, False))
    np.testing.assert_allclose(response.taps.size, 1)


def test_two_equal_taps_do_where_they_can():
    # 2 c cos(w/2): 1 at 0 Hz, 0.707 at 250 Hz, 0 at 500 Hz.
    response = equiripple(Band(0, 50, 1, 0.02, False), Band(480, None, 0, 0.07, False))
    assert response.taps.size == 2


def test_wide_rooms_do_not_let_the_magnitude_run_away():
    bands = (Band(0, 15, 0, -60, True), Band(25, 200, 1, 0.1, True), Band(240, None, 0, -60, True))
    response = equiripple(*bands)
    level = taps_magnitude(response.taps, np.linspace(0, 500, 20_001), 1000.0)
    assert level.max() < 1.2
    assert response.taps.size <= 249
    assert "no room between bands counted wider than 15 Hz" in response.notes[0]
    assert "taps meet the bands too, but rise to" in response.notes[0]


def test_uneven_rooms_that_do_no_harm_still_give_the_shortest():
    bands = (Band(0, 60, 0, -40, True), Band(90, 200, 1, 1, True), Band(232, None, 0, -35, True))
    assert "proven the shortest for the bands" in equiripple(*bands).notes[0]


def test_a_pattern_on_which_the_plain_exchange_fails_is_still_designed():
    # Rooms of 20, 5 and 50 Hz: as stated, the amplitude between bands drowns all digits.
    response = equiripple(
        Band(0, 100, 1, 0.1, True),
        Band(120, 200, 0.5, 0.1, True),
        Band(205, 300, 2, 0.01, False),
        Band(350, None, 0, -80, True),
    )
    level = taps_magnitude(response.taps, np.linspace(0, 500, 20_001), 1000.0)
    assert level.max() < 2.25
    assert response.taps.size < 600


def test_what_cannot_be_met_says_how_near_it_came():
    with pytest.raises(ToleranceError) as caught:
        equiripple(Band(0, 200, 1, 0.1, True), Band(200.5, None, 0, -60, True))
    assert len(caught.value.problems) == 2
    assert "up to 4000 taps, misses the band from 200.5 Hz" in str(caught.value)
    assert "-60 dB is allowed" in str(caught.value)


def test_an_exchange_that_never_settles_is_said_so(monkeypatch):
    monkeypatch.setattr(length_search, "exchange_taps", lambda *_, **__: None)
    with pytest.raises(ToleranceError, match=r"does not settle on any of \d+ lengths up to 4000"):
        equiripple(Band(0, 200, 1, 0.1, True), Band(250, None, 0, -60, True))


def test_the_floor_of_precision_is_stated():
    with pytest.raises(ToleranceError, match=r"no finer than 1.*e-08; widen the tolerance, or use"):
        equiripple(Band(0, 200, 1, 0.1, True), Band(250, None, 0, -180, True))


@pytest.mark.parametrize(
    ("bands", "says"),
    [
        ((Band(0, 100, 1, 0.1, True),), "at least two"),
        ((Band(0, 100, 1, 0.1, True), Band(90, None, 0, -60, True)), "room between"),
        ((Band(0, 100, 1, 0.1, True), Band(100, None, 0, -60, True)), "room between"),
        ((Band(0, 100, 1, 0.1, True), Band(120, 600, 0, -60, True)), "half the rate, 500 Hz"),
        ((Band(0, 100, 1, 0.1, True), Band(120, None, 1, 1, True)), "different gains"),
        ((Band(0, 100, 1, 0, False), Band(120, None, 0, -60, True)), "tolerance above 0"),
        ((Band(0, 100, 1, 0.1, True), Band(120, None, 0, 0, False)), "tolerance above 0"),
    ],
)
@pytest.mark.parametrize("method", ["kaiser", "equiripple", "butterworth"])
def test_bands_that_make_no_filter_are_refused(bands, says, method):
    with pytest.raises(SpecError, match=says):
        design_filter(Filter("gravel", method, {}, bands), KHZ, "causal")
