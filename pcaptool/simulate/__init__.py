"""Simulated captures with known damage, and the truth of every frame."""

from pcaptool.simulate.plan import Burst, LinkPlan, Periodic, Plan, Weak, load_plan
from pcaptool.simulate.run import TRUTH, Simulation, simulate

__all__ = ["TRUTH", "Burst", "LinkPlan", "Periodic", "Plan", "Simulation", "Weak", "load_plan", "simulate"]
