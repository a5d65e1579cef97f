"""The search for the shortest equiripple taps that meet a filter's bands."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from pipeline_filters.design.compliance import BandFinding, check_bands
from pipeline_filters.design.contract import TapsResponse
from pipeline_filters.design.minimax import Aim, errors_of, exchange_taps, scaled_taps
from pipeline_filters.design.verdicts import unmet
from pipeline_filters.errors import Problem, ToleranceError
from pipeline_filters.spec.model import Filter

MOST_EQUIRIPPLE_TAPS = 4000
# Grid points for each extreme, tried in turn while a length is neither met nor excluded.
_DENSITIES = (16, 64, 256)
_COARSE_ABOVE = 1000
# A bound proven to be this far above 1 excludes a length.
_PROOF = 1e-6


class LengthSearch:
    """Designs of trial lengths for one set of aims, each made once."""

    def __init__(
        self,
        filter: Filter,
        aims: Sequence[Aim],
        rate_hz: float,
        squared: bool,
        longest: int = MOST_EQUIRIPPLE_TAPS,
    ) -> None:
        """Takes the aims that drive the designs; the filter's bands judge them."""
        self._longest = min(longest, MOST_EQUIRIPPLE_TAPS)
        self._filter = filter
        self._aims = aims
        self._rate_hz = rate_hz
        self._squared = squared
        top = aims[-1]
        # An even number of symmetric taps is zero at half the rate.
        self._odd_only = top.high_hz >= rate_hz / 2 and top.centre - top.half_width > 0
        self._found: dict[int, NDArray[np.float64] | None] = {}
        self._unsettled: set[int] = set()
        self._nearest: tuple[float, tuple[BandFinding, ...]] = (np.inf, ())

    def shortest(self, start: int) -> NDArray[np.float64]:
        """The shortest taps that meet the bands, sought from a length of ``start``.

        Raises:
            ToleranceError: not met with up to the longest allowed, or 4,000 taps.
        """
        return self._either_parity(self._shortest_of_parity(start | 1 if self._odd_only else start))

    def shorter(self, than: int) -> NDArray[np.float64] | None:
        """The shortest taps that meet the bands, if any of less than a length do."""
        for length in (than - 1, than - 2):
            if length >= 1 and self._allowed(length) and self._meets(length):
                return self._either_parity(self._shortest_of_parity(length))
        return None

    def doubtful_below(self, length: int) -> list[int]:
        """Lengths tried below one that were neither met nor proven too short."""
        return sorted(n for n in self._unsettled if n < length)

    def _either_parity(self, length: int) -> NDArray[np.float64]:
        # The other parity can only do better from a length below on.
        if length > 1 and self._allowed(length - 1) and self._meets(length - 1):
            length = self._shortest_of_parity(length - 1)
        taps = self._found[length]
        assert taps is not None  # a length gets here only once it has met
        return taps

    def _allowed(self, length: int) -> bool:
        return length % 2 == 1 or not self._odd_only

    def _shortest_of_parity(self, start: int) -> int:
        """Monotone in one parity: a longer filter may end in zeros."""
        least = 1 if start % 2 else 2
        longest = self._longest - (self._longest - least) % 2
        length = missed = min(start, longest)
        step = 2
        if self._meets(length):
            while missed >= least and self._meets(missed):
                length, missed, step = missed, missed - step, 2 * step
            missed = max(missed, least - 2)
        else:
            while not self._meets(length):
                if length == longest:
                    raise self._refusal()
                missed, length, step = length, min(length + step, longest), 2 * step
        while length - missed > 2:
            middle = missed + (length - missed) // 4 * 2
            if self._meets(middle):
                length = middle
            else:
                missed = middle
        return length

    def _refusal(self) -> ToleranceError:
        settled = sum(n not in self._unsettled for n in self._found)
        remedy = "widen the tolerance or the room between the bands, or use kaiser"
        _, findings = self._nearest
        if all(finding.complies for finding in findings):  # nothing was ever found to judge
            return ToleranceError(
                Problem(
                    self._filter.place("bands"),
                    f"filter {self._filter.name} (equiripple): the exchange does not settle on "
                    f"any of {len(self._found)} lengths up to {self._longest} taps",
                    "bands on which it does",
                    remedy,
                )
            )
        within = f"{self._longest} taps"
        if settled < len(self._found):
            within += f" (settled on {settled} of {len(self._found)} lengths tried)"
        return unmet(self._filter, findings, squared=self._squared, within=within, remedy=remedy)

    def _meets(self, length: int) -> bool:
        if length not in self._found:
            self._found[length] = self._design(length)
        return self._found[length] is not None

    def _design(self, length: int) -> NDArray[np.float64] | None:
        if length <= 2:
            taps = scaled_taps(length, self._aims, self._rate_hz)
            return taps if taps is not None and self._complies(taps, np.inf) else None
        for density in _DENSITIES[: 2 if length > _COARSE_ABOVE else 3]:
            taps = exchange_taps(length, self._aims, self._rate_hz, density)
            if taps is None:
                continue
            largest, least = errors_of(taps, self._aims, self._rate_hz)
            if self._complies(taps, largest):
                return taps
            if least > 1 + _PROOF:
                return None
        self._unsettled.add(length)
        return None

    def _complies(self, taps: NDArray[np.float64], error: float) -> bool:
        response = TapsResponse(taps, True)
        findings = check_bands([response], self._filter.bands, self._rate_hz, self._squared)
        if error <= self._nearest[0]:
            self._nearest = error, findings
        return all(finding.complies for finding in findings)
