"""Networks and EPANET's own law of loss, for comparison with EPANET 2.2 through wntr.

The law is that of the EPANET 2.2 manual: Hagen-Poiseuille below Re 2000, Swamee and Jain above 4000, between them a
cubic that meets both in value and slope (J. Dunlop 1991). EPANET counts in feet with 32.2 ft/s2 and 1.1e-5 ft2/s.
"""

import logging
import tempfile
import warnings
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from morph.flow.grid import Grid

FOOT_M = 0.3048
GRAVITY = 32.2 * FOOT_M
VISCOSITY = 1.1e-5 * FOOT_M**2
LOG_FACTOR = -2.0 / np.log(10.0)
AT_4000 = 5.74 / 4000.0**0.9
SLOPE_AT_4000 = -1.8 * AT_4000 * LOG_FACTOR


@dataclass
class Case:
    """Pipes between nodes; heads in m at `fixed`, demands in m3/s taken from other nodes."""

    n_nodes: int
    start: np.ndarray
    end: np.ndarray
    length_m: np.ndarray
    bore_m: np.ndarray
    roughness_m: np.ndarray
    minor: np.ndarray
    fixed: np.ndarray
    head_m: np.ndarray
    demand_m3_s: np.ndarray

    @property
    def grid(self):
        return Grid(self.n_nodes, self.start, self.end, self.fixed)


class EpanetLaw:
    """Head loss in m at flows in m3/s."""

    def __init__(self, case):
        self.case = case
        d = case.bore_m
        self.per_head = 8.0 / (np.pi**2 * GRAVITY * d**4)
        self.friction_length = case.length_m / d
        self.re_per_flow = 4.0 / (np.pi * VISCOSITY * d)

    def typical_flow(self):
        return 0.25 * np.pi * self.case.bore_m**2 * FOOT_M  # EPANET starts at 1 ft/s

    def drop(self, flow):
        size = np.abs(flow)
        re = self.re_per_flow * size
        rel = self.case.roughness_m / self.case.bore_m
        held = np.maximum(re, 1e-9)
        # turbulent
        y1 = 5.74 / np.maximum(held, 2000.0) ** 0.9
        y2 = rel / 3.7 + y1
        y3 = LOG_FACTOR * np.log(y2)
        f_high, slope_high = 1.0 / y3**2, -2.0 / y3**3 * LOG_FACTOR / y2 * (-0.9 * y1)
        # cubic
        z2 = rel / 3.7 + AT_4000
        z3 = LOG_FACTOR * np.log(z2)
        fa = 1.0 / z3**2
        fb = (2.0 - SLOPE_AT_4000 / (z2 * z3)) * fa
        r = held / 2000.0
        x1, x2 = 7.0 * fa - fb, 0.128 - 17.0 * fa + 2.5 * fb
        x3, x4 = -0.128 + 13.0 * fa - 2.0 * fb, 0.032 - 3.0 * fa + 0.5 * fb
        f_mid = x1 + r * (x2 + r * (x3 + r * x4))
        slope_mid = r * (x2 + r * (2.0 * x3 + 3.0 * r * x4))
        f = np.where(re >= 4000.0, f_high, f_mid)
        f_slope = np.where(re >= 4000.0, slope_high, slope_mid)
        local = self.per_head * size
        low = re <= 2000.0
        rate = np.where(low, self.per_head * self.friction_length * 64.0 / self.re_per_flow, 0.0)
        rate = rate + np.where(low, 0.0, f * self.friction_length * local) + self.case.minor * local
        slope = rate + np.where(low, 0.0, (f + f_slope) * self.friction_length * local) + self.case.minor * local
        return rate * flow, slope


def solve_epanet(case, accuracy=1e-5):
    """Returns flows (m,) of EPANET in m3/s."""
    import wntr

    logging.getLogger("wntr").setLevel(logging.ERROR)
    with tempfile.TemporaryDirectory() as folder, warnings.catch_warnings():
        warnings.simplefilter("ignore")
        model = make_model(case, accuracy)
        result = wntr.sim.EpanetSimulator(model).run_sim(file_prefix=str(Path(folder) / "net"))
    row = result.link["flowrate"].iloc[0]
    return np.array([row[f"P{k}"] for k in range(len(case.start))])


def make_model(case, accuracy=1e-5):
    import wntr

    model = wntr.network.WaterNetworkModel()
    options = model.options
    options.hydraulic.headloss = "D-W"
    options.hydraulic.viscosity = 1.0
    options.hydraulic.accuracy = accuracy
    options.hydraulic.trials = 200
    options.hydraulic.inpfile_units = "LPS"
    options.time.duration = 0
    given = dict(zip(case.fixed.tolist(), case.head_m.tolist(), strict=True))
    for node in range(case.n_nodes):
        if node in given:
            model.add_reservoir(f"N{node}", base_head=given[node])
        else:
            model.add_junction(f"N{node}", base_demand=float(case.demand_m3_s[node]), elevation=0.0)
    for k in range(len(case.start)):
        model.add_pipe(
            f"P{k}",
            f"N{case.start[k]}",
            f"N{case.end[k]}",
            length=float(case.length_m[k]),
            diameter=float(case.bore_m[k]),
            roughness=float(case.roughness_m[k]),
            minor_loss=float(case.minor[k]),
        )
    return model


def random_case(seed, n_nodes, millimetres):
    """A connected network with loops: a random tree and as many other pipes again; two fixed heads, some demands."""
    random = np.random.default_rng(seed)
    tree = np.array([[random.integers(0, k), k] for k in range(1, n_nodes)])
    extra = random.integers(0, n_nodes, (n_nodes, 2))
    extra = extra[extra[:, 0] != extra[:, 1]]
    ends = np.concatenate([tree, extra])
    m = len(ends)
    bore = random.uniform(3e-3, 10e-3, m) if millimetres else random.uniform(0.05, 0.5, m)
    length = bore * random.uniform(5.0, 50.0, m) if millimetres else random.uniform(20.0, 900.0, m)
    demand = np.zeros(n_nodes)
    taken = random.integers(1, n_nodes - 1, n_nodes // 4)
    demand[taken] = random.uniform(0.0, 1e-5 if millimetres else 5e-3, len(taken))
    head = np.array([random.uniform(5.0, 20.0) if millimetres else random.uniform(50.0, 90.0), 3.0])
    return Case(
        n_nodes,
        ends[:, 0],
        ends[:, 1],
        length,
        bore,
        bore * random.uniform(0.0, 0.02, m),
        random.uniform(0.0, 2.0, m),
        np.array([0, n_nodes - 1]),
        head,
        demand,
    )


def square_case(side, seed=0):
    """A street grid of side x side nodes with two fixed heads."""
    random = np.random.default_rng(seed)
    node = np.arange(side * side).reshape(side, side)
    ends = np.concatenate(
        [
            np.stack([node[:, :-1].ravel(), node[:, 1:].ravel()], axis=1),
            np.stack([node[:-1].ravel(), node[1:].ravel()], axis=1),
        ]
    )
    m, n = len(ends), side * side
    demand = random.uniform(0.0, 1e-5, n)
    demand[[0, n - 1]] = 0.0
    return Case(
        n,
        ends[:, 0],
        ends[:, 1],
        random.uniform(50.0, 200.0, m),
        random.uniform(0.1, 0.5, m),
        random.uniform(1e-5, 5e-4, m),
        np.zeros(m),
        np.array([0, n - 1]),
        np.array([60.0, 50.0]),
        demand,
    )
