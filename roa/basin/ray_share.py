"""The share of the domain by rays: how far the basin reaches in every direction, summed over the directions."""

from __future__ import annotations

from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.stats import t

from roa.basin.intervals import Interval, clopper_pearson, clopper_pearson_upper
from roa.basin.round_answers import RoundAnswers
from roa.bound.volume import ball_volume
from roa.sweep.designs.rays import Bundle, RayCourse, Rays

Array = NDArray[np.float64]

# In the plane: the rays are taken as so many combs of equal spacing.
COMBS = 4
# Rays that do as much as all: fewer than this part of them, or this number, and a few rays decide the volume.
FEWEST_PART, FEWEST = 1 / 20, 32


class RayShare(RoundAnswers[RayCourse]):
    """What the answers of a sweep with rays say of the share."""

    def __init__(self, design: Rays) -> None:
        super().__init__(design)
        self._design = design

    @cached_property
    def _none_outside(self) -> bool:
        return all(bool(yes.all()) for yes in self._answers)

    @cached_property
    def refusal(self) -> str:
        """Why no share is stated, a sentence; empty where one is."""
        course, n = self._course, len(self._design.box)
        other = 'design = "boundary"' if n <= 3 else 'design = "sobol"'
        if course.bundle is None or not course.looks:
            return "The sweep ended before its rays had found the edge; carry it on."
        contrary = course.contrary + course.bundle.crossed
        if contrary:
            return (
                "Rays give no volume here: the basin is not star-shaped from the equilibrium "
                f"({contrary} starts or rays found a part of it behind a gap); use {other}."
            )
        if self._rays_that_count < max(FEWEST, FEWEST_PART * len(self._power)) and n > 2:
            return (
                "Rays give no volume here: the radii spread so widely that a few rays decide it (as if there were "
                f"{self._rays_that_count:.0f} rays); use {other}."
            )
        return ""

    @property
    def looks(self) -> tuple[int, int]:
        """Starts that looked for what contradicts a star shape, and how many found it."""
        bundle = self._course.bundle
        return self._course.looks, self._course.contrary + (0 if bundle is None else bundle.crossed)

    @property
    def fraction(self) -> float:
        """Share of the domain; NaN where it is refused."""
        return float(np.nan) if self.refusal else float(np.mean(self._controlled) / self._domain)

    def interval(self, n: int, confidence: float) -> Interval:
        """Interval of the share; it holds if the basin is star-shaped."""
        if self.refusal:
            return Interval(0.0, 1.0, confidence, "none: rays give no volume here")
        if self._none_outside:
            few = clopper_pearson(self._course.looks, self._course.looks, confidence)
            return Interval(few.low, few.high, confidence, f"{few.method} of the starts beside the rays")
        # The middle of a bracket is right on average as far as an edge is as likely to lie in one half as in the
        # other; an eighth of all brackets covers what the edge's curve makes of that.
        brackets = float(np.mean(self._bundle.high**n - self._bundle.low**n)) / (2 if n == 1 else 8)
        error, method = self._sum_error(confidence)
        half = float(max((error + brackets) / self._domain, 1e-12))
        looks = clopper_pearson_upper(0, self._course.looks, confidence)
        method += (
            f"; if the basin is star-shaped, which {self._course.looks} looks beside the rays did not contradict "
            f"(of all such looks at most {100 * looks:.2g} % would)"
        )
        share = self.fraction
        return Interval(max(share - half, 0.0), min(share + half, 1.0), confidence, method)

    def _sum_error(self, confidence: float) -> tuple[float, str]:
        """Half-width for the mean of the power over all directions, and how it was found."""
        values, R = self._controlled, self._design.replicates
        n = len(self._design.box)
        if n == 1:
            return 0.0, "both edges bracketed"
        if n == 2:
            # What equal spacing makes of a kink is at most an eighth of the second differences there (of a smooth
            # curve it is less by far); a jump shows in the comparison of combs, which err in proportion to spacing.
            bends = float(np.abs(np.roll(values, 1) - 2 * values + np.roll(values, -1)).mean()) / 8
            combs = np.array([values[k::COMBS].mean() for k in range(COMBS)])
            spread = float(np.abs(combs - values.mean()).max()) * 2 / COMBS
            return max(bends, spread), "deterministic: from second differences between the rays, and combs of them"
        means = [values[r::R].mean() for r in range(R)]
        error = float(np.std(means, ddof=1)) / np.sqrt(R)
        return float(
            t.isf((1 - confidence) / 2, R - 1)
        ) * error, f"Student's t between {R} independent replicates of rays"

    @property
    def _bundle(self) -> Bundle:
        assert self._course.bundle is not None
        return self._course.bundle

    @cached_property
    def _power(self) -> Array:
        """r^n of the edge on each ray, float64 (m,)."""
        return np.asarray(((self._bundle.low + self._bundle.high) / 2) ** len(self._design.box))

    @cached_property
    def _domain(self) -> float:
        """Mean of r^n of the faces over all directions, exactly: the domain's volume in those of the frame's ball."""
        n, bundle = len(self._design.box), self._bundle
        frame = abs(float(np.linalg.det(bundle.frame)))
        return float(np.prod(2 * self._design.half_widths)) / (frame * ball_volume(n))

    @cached_property
    def _controlled(self) -> Array:
        """`_power` with that of the faces as a control variate, whose mean is known, float64 (m,)."""
        faces = self._bundle.face ** len(self._design.box)
        centred = faces - faces.mean()
        spread = float(centred @ centred)
        slope = float(centred @ self._power) / spread if spread > 0 else 0.0
        return np.asarray(self._power - slope * (faces - self._domain))

    @property
    def _rays_that_count(self) -> float:
        return float(self._power.sum() ** 2 / np.sum(self._power**2))
