"""The drawn edge of the basin against the limit cycle that it is, computed by scipy's DOP853."""

from pathlib import Path

import numpy as np
from scipy.integrate import solve_ivp
from scipy.spatial import cKDTree

from roa.kernel.outcomes import Outcome
from roa.loop.read import read
from roa.preparation import Preparation
from roa.report.plane import Plane, Slice, path_area

CONFIG = Path(__file__).parents[2] / "configs" / "van_der_pol.toml"
# Area of the basin: of the limit cycle, by the divergence theorem good to 4e-13 (computed independently).
AREA = 13.722219668


def limit_cycle():
    """Points (k, 2) of the limit cycle, 1e-4 s apart; the loop runs backwards in time, so integrate it so."""

    def backwards(t, x):
        return [x[1], -(x[0] + (x[0] ** 2 - 1) * x[1])]

    options = {"method": "DOP853", "rtol": 1e-12, "atol": 1e-12}
    on_it = solve_ivp(backwards, (0, 60), [2.0, 0.0], **options).y[:, -1]
    return solve_ivp(backwards, (0, 6.67), on_it, t_eval=np.arange(0, 6.67, 1e-4), **options).y.T


def test_the_drawn_edge_is_the_limit_cycle():
    prepared = Preparation(read(CONFIG), None, None)
    loop = prepared.configuration.loop
    plane = Plane(loop.states, loop.units, loop.box, prepared.equilibrium.x)
    basin = Slice(plane, prepared.lanes.run, 400).regions[Outcome.CONVERGED]
    (edge,) = basin.edges
    middles = (edge[1:] + edge[:-1]) / 2  # what is drawn between the vertices too
    distance, _ = cKDTree(limit_cycle()).query(np.concatenate([edge, middles]))
    assert distance.max() < 1e-3
    assert abs(path_area(basin.fill) / AREA - 1) < 1e-4
