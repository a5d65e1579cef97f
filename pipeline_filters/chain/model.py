"""One result's chain: stages with reach and blocks. Light to load, as every worker loads it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction
from math import log2
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.layout import TapsReach
from pipeline_filters.spec.model import Ends, Precision, Timing

if TYPE_CHECKING:
    from pipeline_filters.design.compliance import BandFinding

# The largest error seen of a block's results was 3.5 eps * |x| * |h| (lone impulses in float64
# at N = 48), hardly growing with N; 0.26 eps * log2(N) * |x| * |h| at N = 1,536, and 0.18 in
# float32. Below 1,024 the logarithm falls faster than the errors do, so N counts as that.
ROUNDING_FACTOR = 0.5
_LEAST_COUNTED = 1024


@dataclass(frozen=True, eq=False)
class TapsStage:
    """A run of taps: one response, applied by overlap-add (or summed directly at hop 1).

    Attributes:
        taps: shape (P,), float64; y[n] = sum of taps[k] * x[n + lead - k].
        lead: samples a result looks ahead.
        support_before, support_after: samples before and after a result's own that its
            value counts as depending on: missing samples and blank ends follow them.
        line: how far a stand-in for a missing sample looks for its neighbours; 0: not.
        hop, transform: the block rule B and N.
    """

    taps: NDArray[np.float64]
    lead: int
    support_before: int
    support_after: int
    line: int
    hop: int
    transform: int


@dataclass(frozen=True, eq=False)
class RecursionStage:
    """Second-order sections run forward in time.

    Attributes:
        sections: shape (S, 6), float64.
        rest: samples of extension before a start, after which rest is reached.
        settle: results marked missing after a restart.
    """

    sections: NDArray[np.float64]
    rest: int
    settle: int


Stage = TapsStage | RecursionStage


@dataclass(frozen=True, eq=False)
class Chain:
    """All that a result's numbers depend on besides the samples.

    Attributes:
        notes: facts about the designs, for people.
        findings: what was found in the bands that the result states.
        filter_findings: what was found in the bands of each filter.
    """

    stages: tuple[Stage, ...]
    rate_hz: Fraction
    timing: Timing
    ends: Ends
    precision: Precision
    bridge: int
    delay_samples: Fraction | None
    notes: tuple[str, ...] = ()
    findings: tuple[BandFinding, ...] = ()
    filter_findings: tuple[tuple[str, tuple[BandFinding, ...]], ...] = ()

    @property
    def dtype(self) -> np.dtype[Any]:
        """The working precision."""
        return np.dtype(self.precision)

    @property
    def line(self) -> int:
        """How far stand-ins of the first stage's input look for neighbours."""
        first = self.stages[0]
        return first.line if isinstance(first, TapsStage) else 0

    @property
    def independent(self) -> bool:
        """Whether results may be computed from any start, warmed up over the block reach."""
        return len(self.stages) == 1 and isinstance(self.stages[0], TapsStage)

    @property
    def half_sample(self) -> bool:
        """Whether results are stamped half a sample later than their inputs."""
        first = self.stages[0]
        return (
            self.timing == "aligned" and isinstance(first, TapsStage) and first.taps.size % 2 == 0
        )

    @property
    def look_ahead(self) -> int:
        """Samples that the filling of missing ones may wait for."""
        return max(self.bridge + 1 if self.bridge else 0, self.line)

    def reach(self) -> TapsReach:
        """The reach of an independent chain's results.

        Raises:
            ValueError: the chain holds a recursion, which reaches back without bound.
        """
        if not self.independent:
            raise ValueError("a chain with a recursion has no bounded reach")
        stage = self.stages[0]
        assert isinstance(stage, TapsStage)
        look_back = max(self.bridge + 1 if self.bridge else 0, self.line + 1 if self.line else 0)
        return TapsReach(stage.hop, stage.taps.size, stage.lead, look_back, self.look_ahead)

    @property
    def hold_back(self) -> int:
        """Samples after a result's own that must have come before it is published, at most.

        Where ends are mirrored, a start waits for the samples that its extension mirrors.
        """
        mirrored = self.ends in ("even", "odd")
        held = self.look_ahead
        for stage in self.stages:
            if isinstance(stage, TapsStage):
                before = stage.taps.size - 1 - stage.lead
                held += max(stage.lead + stage.hop - 1, before if mirrored else 0)
            else:
                held += stage.rest if mirrored else 0
        return held

    @property
    def support(self) -> tuple[int | None, int]:
        """Samples before (None: without bound) and after a result that its value depends on."""
        before: int | None = 0
        after = 0
        for stage in self.stages:
            if isinstance(stage, TapsStage):
                before = None if before is None else before + stage.support_before
                after += stage.support_after
            else:
                before = None
        return before, after

    def rounding_bound(self) -> float | None:
        """The bound on a result's error per |x|_2 of a block: c * eps * log2(N) * |h|_2.

        With c = 0.5, and N counted as 1,024 where it is less: seen, not proven. A direct sum
        has its proven bound (P + 1) eps / 2 * |h|_2 per |x|_2 of the samples under its taps
        (Higham, Accuracy and Stability of Numerical Algorithms, section 3.1; one more for
        taps taken to the working precision). None for a chain that is not one run of taps.
        """
        if not self.independent:
            return None
        stage = self.stages[0]
        assert isinstance(stage, TapsStage)
        eps = float(np.finfo(self.dtype).eps)
        norm = float(np.linalg.norm(stage.taps))
        if stage.hop == 1:
            part = (stage.taps.size + 1) * eps / 2
            return part / (1 - part) * norm
        return ROUNDING_FACTOR * eps * log2(max(stage.transform, _LEAST_COUNTED)) * norm

    def to_store(self) -> tuple[dict[str, Any], dict[str, NDArray[np.float64]]]:
        """The chain as JSON facts and arrays, from which `from_store` makes it again."""
        arrays: dict[str, NDArray[np.float64]] = {}
        stages: list[dict[str, Any]] = []
        for index, stage in enumerate(self.stages):
            facts = dict(vars(stage))
            kind = "taps" if isinstance(stage, TapsStage) else "sections"
            arrays[f"{index}_{kind}"] = facts.pop(kind)
            stages.append({"kind": kind, **facts})
        return {
            "stages": stages,
            "rate_hz": str(self.rate_hz),
            "timing": self.timing,
            "ends": self.ends,
            "precision": self.precision,
            "bridge": self.bridge,
            "delay_samples": None if self.delay_samples is None else str(self.delay_samples),
            "notes": list(self.notes),
        }, arrays

    @classmethod
    def from_store(cls, facts: Mapping[str, Any], arrays: Mapping[str, NDArray[Any]]) -> Chain:
        """The chain that `to_store` wrote down."""
        stages: list[Stage] = []
        for index, entry in enumerate(facts["stages"]):
            rest = {key: value for key, value in entry.items() if key != "kind"}
            numbers = np.asarray(arrays[f"{index}_{entry['kind']}"], np.float64)
            if entry["kind"] == "taps":
                stages.append(TapsStage(taps=numbers, **rest))
            else:
                stages.append(RecursionStage(sections=numbers, **rest))
        delay = facts["delay_samples"]
        return cls(
            tuple(stages),
            Fraction(facts["rate_hz"]),
            facts["timing"],
            facts["ends"],
            facts["precision"],
            facts["bridge"],
            None if delay is None else Fraction(delay),
            tuple(facts["notes"]),
        )
