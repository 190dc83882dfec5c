"""Simulated captures with known damage, and the truth of every frame."""

from pcaptool.simulate.even import even_plan
from pcaptool.simulate.load import load_plan, make_plan
from pcaptool.simulate.plan import BackhaulPlan, Burst, Generator, LinkPlan, Periodic, Plan, Restart
from pcaptool.simulate.run import Simulation, simulate
from pcaptool.simulate.truth import TRUTH, truth_columns

__all__ = [
    "TRUTH", "BackhaulPlan", "Burst", "Generator", "LinkPlan", "Periodic", "Plan", "Restart", "Simulation",
    "even_plan", "load_plan", "make_plan", "simulate", "truth_columns",
]
