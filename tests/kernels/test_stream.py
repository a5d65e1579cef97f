"""The central test: any cut of the input gives the whole-array numbers, bit for bit."""

from __future__ import annotations

import pickle
import sys
from fractions import Fraction
from pathlib import Path

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.signal import butter

from pipeline_filters.chain.model import Chain, RecursionStage, TapsStage
from pipeline_filters.kernels.missing import mark_with_nan
from pipeline_filters.layout import Stretch
from pipeline_filters.stream import Stream

sys.path.insert(0, str(Path(__file__).parent))
import reference

RULES = ["zero", "hold", "even", "odd", "blank"]
FLOAT64 = np.dtype(np.float64)


class Case:
    """A random chain, recording and clock, from one seed."""

    def __init__(self, seed: int, kind: str, rule: str) -> None:
        rng = self.rng = np.random.default_rng(seed)
        p = int(rng.integers(1, 40))
        self.length = n = int(rng.integers(1, 300))
        self.rows = rows = int(rng.integers(1, 4))
        lead = int(rng.integers(0, p))
        hop = int(rng.choice([1, 2, 5, 16, 64, 200]))
        self.kind, self.rule = kind, rule
        self.bridge = int(rng.choice([0, 0, 1, 4]))
        self.before, self.after = p - 1 - lead, lead
        self.line = 0
        if kind == "taps" and rng.random() < 0.3:
            self.before, self.after, self.line = self.before // 2, self.after // 2, p
        self.taps, self.lead = rng.standard_normal(p), lead
        taps = TapsStage(
            self.taps, lead, self.before, self.after, self.line, hop, hop + p - 1 + n % 5
        )
        order, corner = int(rng.integers(1, 4)), float(rng.uniform(0.05, 0.9))
        sections = butter(order, corner, output="sos")
        self.recursion = RecursionStage(
            sections, int(rng.integers(1, 60)), int(rng.integers(0, 10))
        )
        stages = {
            "taps": (taps,),
            "recursion": (self.recursion,),
            "both": (self.recursion, taps),
        }[kind]
        self.chain = Chain(stages, Fraction(1000), "causal", rule, "float64", self.bridge, None)
        self.samples = rng.standard_normal((rows, n))
        if rng.random() < 0.6:
            for row in range(rows):
                for _ in range(int(rng.integers(0, 6))):
                    at = int(rng.integers(0, n))
                    self.samples[row, at : at + int(rng.choice([1, 2, 3, 6, 30]))] = np.nan
        self.stretch = Stretch(0, n, int(rng.integers(-1000, 10**12)))

    def cuts(self) -> list[int]:
        count = int(self.rng.integers(0, 20))
        return sorted(set(self.rng.integers(1, self.length + 1, size=count).tolist()))

    def run(self, cuts: list[int], start: int = 0, stop: int | None = None) -> np.ndarray:
        """Results from ``start`` on, pushed in pieces, the carry pickled on the way."""
        stream = Stream(self.chain, self.rows, self.stretch, start, stop or self.length)
        out = []
        for cut in [*cuts, self.length]:
            at = stream.next_input
            if cut <= at:
                continue
            if self.rng.random() < 0.3:
                thawed = pickle.loads(pickle.dumps(stream))
                assert thawed == stream
                stream = thawed
            piece = self.samples[:, at:cut]
            if self.rng.random() < 0.5:
                piece = np.asfortranarray(piece)
            out.append(mark_with_nan(stream.push(piece), FLOAT64))
        return np.concatenate(out, axis=1)

    def expected(self, row: int) -> np.ndarray:
        samples, recursion = self.samples[row], self.recursion
        if self.kind != "taps":
            samples = reference.recursed(
                samples,
                recursion.sections,
                recursion.rest,
                recursion.settle,
                self.rule,
                self.bridge,
            )
        if self.kind == "recursion":
            return samples
        bridge = self.bridge if self.kind == "taps" else 0
        return reference.filtered(
            samples, self.taps, self.lead, self.rule, bridge, self.before, self.after
        )


cases = st.builds(
    Case,
    st.integers(0, 2**32 - 1),
    st.sampled_from(["taps", "recursion", "both"]),
    st.sampled_from(RULES),
)


@settings(deadline=None, max_examples=150)
@given(case=cases)
def test_results_equal_the_whole_array_reference(case: Case) -> None:
    whole = case.run([])
    assert whole.shape == (case.rows, case.length)
    for row in range(case.rows):
        wanted = case.expected(row)
        np.testing.assert_array_equal(np.isnan(whole[row]), np.isnan(wanted))
        if not case.line:  # else stand-ins reach past the support, which the reference has not
            scale = 1 + np.nanmax(np.abs(wanted), initial=0)
            np.testing.assert_allclose(whole[row], wanted, rtol=0, atol=1e-9 * scale)


@settings(deadline=None, max_examples=150)
@given(case=cases)
def test_any_cut_of_the_input_gives_the_same_bits(case: Case) -> None:
    whole = case.run([]).tobytes()
    assert case.run(case.cuts()).tobytes() == whole
    assert case.run(list(range(1, case.length + 1))).tobytes() == whole


@settings(deadline=None, max_examples=150)
@given(case=cases)
def test_any_start_gives_the_same_bits(case: Case) -> None:
    if not case.chain.independent:
        return
    whole = case.run([])
    start = int(case.rng.integers(0, case.length))
    stop = int(case.rng.integers(start + 1, case.length + 1))
    part = case.run(case.cuts(), start, stop)
    assert part[:, : stop - start].tobytes() == whole[:, start:stop].tobytes()
    stream = Stream(case.chain, case.rows, case.stretch, start, stop)
    enough = case.chain.reach().last_offset(case.stretch, stop)
    stream.push(case.samples[:, stream.next_input : enough])
    assert stream.next_result >= stop
