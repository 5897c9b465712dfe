"""Root search on a curve that may end in a cliff: where does pushout reach its limit, next to the safe side?

The curve maps an offset to a pushout (delay over reference, less one). Larger offsets are safer. Far on
the safe side the pushout is nearly zero; towards the other side it grows roughly exponentially, so
``log(pushout / limit)`` is nearly straight in the offset, until the register no longer captures at all:
the cliff, where there is no pushout to measure. A real curve may also dip below zero, or turn back below
the limit after having passed it.

Three phases. *Survey*: without a guess, walk from the safe side in coarse steps to the first failing
offset, which finds the crossing next to the safe side unless a feature is narrower than a step.
*Bracket*: from a guess, step until one offset passes and one fails. *Close*: secant steps in log pushout,
aimed a fraction of the resolution to either side of the predicted root so that the bracket closes from
both ends, and bisection whenever a step would leave the bracket or two steps have not halved it.

Methods: regula falsi variants with a bisection safeguard (Brent 1973; Oliveira and Takahashi, "An
Enhancement of the Bisection Method Average Performance Preserving Minmax Optimality", ACM TOMS 47(1),
2020); that setup time is best found as a scalar root on the state transition rather than by bisection
(Srivastava and Roychowdhury, "Rapid and Accurate Latch Characterization via Direct Newton Solution of
Setup/Hold Times", DATE 2007).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from enum import StrEnum
from itertools import pairwise

SURVEY = (1.0, 0.5, 0.25, 0.1, 0.0, -0.1, -0.25, -0.5, -1.0)  # parts of the range, denser about its middle
FAR = 4  # how far beyond the surveyed range a search may go, in units of that range
MEASURABLE = 2e-4  # pushouts smaller than this, relative to the limit's own 1, are noise of the transient


class Ending(StrEnum):
    """How a search ended; the first three carry a value."""

    PUSHOUT = "pushout"
    CLIFF = "cliff"
    RAMPS = "limited by its ramps"
    NEVER_FAILS = "never fails"
    NEVER_PASSES = "never passes"


@dataclass(frozen=True)
class Sample:
    """One offset [s] tried. ``push`` is the pushout as a fraction, None where nothing was captured."""

    offset: float
    push: float | None

    def passes(self, limit: float) -> bool:
        """Tell whether the register captured within the pushout ``limit``."""
        return self.push is not None and self.push <= limit

    def height(self, limit: float) -> float | None:
        """Return log(push / limit), or None where the pushout is absent or too small to say anything."""
        if self.push is None or self.push < MEASURABLE * max(limit, 0.02):
            return None
        return math.log(self.push / limit)


Shape = tuple[tuple[float, float], ...]  # (log of pushout over limit, offset from the crossing [s]), sorted


@dataclass(frozen=True)
class Guess:
    """Where the crossing is expected [s], how sure that is [s], and how fast log pushout falls [s per e].

    ``shape`` is the curve of a similar point, which says more than one slope does.
    """

    offset: float
    spread: float
    slope: float
    shape: Shape = ()


@dataclass(frozen=True)
class Crossing:
    """The result of a search: ``fails`` < crossing <= ``passes`` [s], every sample, and the slope [s]."""

    ending: Ending
    value: float | None
    fails: float
    passes: float
    samples: tuple[Sample, ...]
    slope: float

    @property
    def bracket(self) -> float:
        """Width of the bracket [s]."""
        return self.passes - self.fails


@dataclass
class Search:
    """One search. ``measure`` maps an offset [s] to a pushout or None.

    ``safe`` and ``unsafe`` [s] bound the survey (a search goes beyond them, up to :data:`FAR` times their
    distance, only where it must), ``resolution`` [s] is the widest final bracket,
    ``lookout`` the distances [s] above a crossing
    found from a guess at which the curve must still pass. ``confirm`` measures the passing side of a cliff
    once more with more patience: a register on the edge may lose its value late.
    """

    measure: Callable[[float], float | None]
    limit: float
    resolution: float
    safe: float
    unsafe: float
    lookout: tuple[float, ...] = ()
    confirm: Callable[[float], float | None] | None = None
    samples: list[Sample] = field(default_factory=list)
    shape: Shape = ()

    def run(self, guess: Guess | None) -> Crossing:
        """Return the crossing next to the safe side."""
        slope = guess.slope if guess else (self.safe - self.unsafe) / 60
        self.shape = guess.shape if guess else ()
        self._bracket(guess) if guess else self._walk()
        distances = list(self.lookout) if guess else []
        while self.fails is not None and self.passes is not None:
            self._close(slope)
            while distances:
                if not self._try(self.passes.offset + distances.pop(0)).passes(self.limit):
                    self._climb(slope)
                    break
            else:
                if self._confirmed():
                    return self._crossing(slope)
                self._climb(slope)
        return self._ended(Ending.NEVER_FAILS if self.fails is None else Ending.NEVER_PASSES, slope)

    @property
    def fails(self) -> Sample | None:
        """The failing sample nearest to the safe side."""
        return max(
            (s for s in self.samples if not s.passes(self.limit)), key=lambda s: s.offset, default=None
        )

    @property
    def passes(self) -> Sample | None:
        """The passing sample next to it on the safe side."""
        floor = self.fails.offset if self.fails else -math.inf
        above = (s for s in self.samples if s.offset > floor and s.passes(self.limit))
        return min(above, key=lambda s: s.offset, default=None)

    def _try(self, offset: float) -> Sample:
        sample = Sample(offset, self.measure(offset))
        self.samples.append(sample)
        return sample

    def _confirmed(self) -> bool:
        passes, fails = self.passes, self.fails
        if self.confirm is None or passes is None or fails is None or fails.push is not None:
            return True
        again = Sample(passes.offset, self.confirm(passes.offset))
        if again.passes(self.limit):
            return True
        self.samples[self.samples.index(passes)] = again
        self.measure = self.confirm  # from here on every sample is watched that long
        return False

    def _walk(self) -> None:
        """Survey from the safe end down to the first failing offset; without one, on in growing steps."""
        middle, half = (self.safe + self.unsafe) / 2, (self.safe - self.unsafe) / 2
        for part in (*SURVEY, *(-(2.0**power) for power in range(1, 4))):
            if not self._try(middle + part * half).passes(self.limit):
                break
        if self.passes is None:
            self._climb(half / 4)

    def _climb(self, step: float) -> None:
        """Step to the safe side until an offset passes."""
        last = self.safe + FAR * (self.safe - self.unsafe)
        while self.passes is None and self.fails is not None and self.fails.offset < last:
            self._try(min(self.fails.offset + step, last))
            step *= 3

    def _bracket(self, guess: Guess) -> None:
        """Find one passing and one failing offset around the guess, steps growing threefold."""
        reach = FAR * (self.safe - self.unsafe)
        # A capture that comes late can be measured, one that does not come cannot: err to the safe side.
        self._try(guess.offset + (guess.slope if guess.spread > 2.5 * guess.slope else 0.0))
        step = max(guess.spread, 2 * self.resolution)
        trusted = 2  # predictions believed before steps grow whatever they say
        while self.passes is None or self.fails is None:
            up = self.passes is None
            edge = self.fails if up else self.passes
            assert edge is not None
            if not self.unsafe - reach < edge.offset < self.safe + reach:
                return
            root = self._predicted(guess.slope)
            if edge.height(self.limit) is not None and root is not None and trusted:
                trusted -= 1
                over = 0.4 * self.resolution
                self._try(max(root, edge.offset) + over if up else min(root, edge.offset) - over)
            else:
                self._try(edge.offset + step if up else edge.offset - step)
                step *= 3

    def _close(self, slope: float) -> None:
        """Shrink the bracket to the resolution."""
        widths: list[float] = []
        while (width := self._width()) > self.resolution:
            widths.append(width)
            stuck = len(widths) > 2 and width > widths[-3] / 2  # two steps have not halved it
            offset = None if stuck else self._aimed(slope, width)
            if offset is None:
                assert self.passes is not None
                offset = self.passes.offset - width / 2
            self._try(offset)
            if stuck:
                widths.clear()

    def _width(self) -> float:
        assert self.passes is not None
        assert self.fails is not None
        return self.passes.offset - self.fails.offset

    def _aimed(self, slope: float, width: float) -> float | None:
        """Return the next offset from the predicted root, or None where the curve gives no prediction."""
        assert self.passes is not None
        assert self.fails is not None
        low, high = self.fails.offset, self.passes.offset
        root = self._predicted(slope)
        if root is None or not low - slope < root < high + slope:
            return None
        if self.fails.push is None and root < low + slope / 4:  # the curve ends before the predicted root
            return None
        over = 0.3 * self.resolution
        if high - root <= 0.65 * self.resolution:
            aim = high - 0.9 * self.resolution if high - root < 0.5 * self.resolution else root - over
        elif root - low <= 0.65 * self.resolution:
            aim = low + 0.9 * self.resolution if root - low < 0.5 * self.resolution else root + over
        else:
            aim = root + over if high - root >= root - low else root - over
        margin = min(0.02 * width, 0.1 * self.resolution)
        return aim if low + margin < aim < high - margin else None

    def _predicted(self, slope: float) -> float | None:
        """Return the root of log pushout through the measurable samples nearest to it.

        Each sample alone puts the root where the expected shape says; what two of them disagree on is
        extrapolated to zero (a secant on the residual of the shape).
        """
        points = sorted(
            (
                (abs(h), h, s.offset)
                for s in self.samples
                if (h := s.height(self.limit)) is not None and abs(h) < 6
            ),
        )[:3]
        if not points:
            return None
        roots = [(h, x - along(self.shape, h, slope)) for _, h, x in points]
        (h0, r0), *rest = roots
        if not rest:
            return r0
        (h1, r1) = rest[0]
        (_, _, x0), (_, _, x1), *_ = points
        if h1 == h0 or (x1 - x0) / (h1 - h0) > 0:  # not falling: the pair says nothing
            return r0
        if len(rest) == 2 and abs(h0) < 1.5 and not self.shape:
            curved = _inverse_quadratic(*((h, x) for _, h, x in points))
            if curved is not None:
                return curved
        return r0 - h0 * (r1 - r0) / (h1 - h0)

    def _crossing(self, slope: float) -> Crossing:
        assert self.passes is not None
        assert self.fails is not None
        low, high = self.fails, self.passes
        below, above = low.height(self.limit), high.height(self.limit)
        if low.push is None:
            return self._ended(Ending.CLIFF, self._slope(slope), high.offset)
        value = high.offset
        if below is not None and above is not None and below > above:
            value = low.offset + (high.offset - low.offset) * below / (below - above)
        return self._ended(Ending.PUSHOUT, self._slope(slope), value)

    def _slope(self, otherwise: float) -> float:
        """Return the fall of log pushout [s per e] around the crossing, from the samples."""
        points = [
            (h, s.offset) for s in self.samples if (h := s.height(self.limit)) is not None and abs(h) < 2.5
        ]
        if len(points) < 2:
            return otherwise
        (h0, x0), (h1, x1) = min(points), max(points)
        return (x1 - x0) / (h0 - h1) if h1 - h0 > 0.05 and x1 < x0 else otherwise

    def _ended(self, ending: Ending, slope: float, value: float | None = None) -> Crossing:
        low = self.fails.offset if self.fails else self.unsafe
        high = self.passes.offset if self.passes else self.safe
        return Crossing(ending, value, low, high, tuple(self.samples), slope)


def along(shape: Shape, height: float, slope: float) -> float:
    """Return the offset from the crossing [s] where ``shape`` has this log pushout; beyond it, straight."""
    if len(shape) < 2:
        return -slope * height
    for (h0, x0), (h1, x1) in pairwise(shape):
        if height <= h1 or (h1, x1) == shape[-1]:
            if height < h0:
                return x0 - slope * (height - h0)
            if height > h1:
                return x1 - slope * (height - h1)
            return x0 + (x1 - x0) * (height - h0) / (h1 - h0)
    raise AssertionError(shape)


def shape_of(crossing: Crossing, limit: float) -> Shape:
    """Return the measured curve around a crossing, thinned to where it falls."""
    if crossing.value is None:
        return ()
    points = [(h, s.offset - crossing.value) for s in crossing.samples if (h := s.height(limit)) is not None]
    kept: list[tuple[float, float]] = []
    for h, x in sorted([*((h, x) for h, x in points if 0.15 < abs(h) < 5), (0.0, 0.0)]):
        if not kept or (x < kept[-1][1] and h - kept[-1][0] > 0.1):
            kept.append((h, x))
    return tuple(kept) if any(h == 0.0 for h, _ in kept) else ()


def _inverse_quadratic(*points: tuple[float, float]) -> float | None:
    """Return x at h = 0 of the quadratic x(h) through three (h, x) points, None where it is not falling."""
    (h0, x0), (h1, x1), (h2, x2) = points
    if len({h0, h1, h2}) < 3:
        return None
    root = (
        x0 * h1 * h2 / ((h0 - h1) * (h0 - h2))
        + x1 * h0 * h2 / ((h1 - h0) * (h1 - h2))
        + x2 * h0 * h1 / ((h2 - h0) * (h2 - h1))
    )
    ordered = sorted(points)
    falling = all(a[1] > b[1] for a, b in pairwise(ordered))
    return root if falling and math.isfinite(root) else None
