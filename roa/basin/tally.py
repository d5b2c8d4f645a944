"""The tally that fits the design of a sweep."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from roa.basin.edge_share import EdgeShare
from roa.basin.ray_share import RayShare
from roa.basin.share import Share, Tally
from roa.loop.model import Loop
from roa.sweep import designs
from roa.sweep.designs import Design, RoundDesign
from roa.sweep.designs.boundary import Boundary
from roa.sweep.designs.rays import Rays
from roa.sweep.samples import Samples


def in_rounds(samples: Samples) -> bool:
    """Whether the starts were drawn in rounds, so that they are not spread evenly over the domain."""
    return designs.load(samples.design).in_rounds


def tally_of(samples: Samples, loop: Loop, centre: NDArray[np.float64]) -> Tally:
    """Return an empty tally; `centre` is the equilibrium, float64 (n,), state units."""
    if not in_rounds(samples):
        return Share(samples.design, samples.replicates)
    stored = samples.attributes
    return tally_for(
        designs.make(samples.design, loop.box, stored["seed"], stored["replicates"], stored["asked"], centre)
    )


def tally_for(design: Design | RoundDesign) -> RayShare | EdgeShare:
    """Return an empty tally for a design in rounds."""
    if isinstance(design, Boundary):
        return EdgeShare(design)
    assert isinstance(design, Rays)
    return RayShare(design)
