"""Estimates: pure functions from counts to the residual, its error bars, and what guards them."""

from daq.estimate.blocks import jackknife
from daq.estimate.counting import dead_time_two_source_s, poisson_interval, seen_rate_hz, true_rate_hz
from daq.estimate.dataset import estimate_run, plan_of_dataset
from daq.estimate.peeking import anytime_multiplier
from daq.estimate.plan import Plan
from daq.estimate.residual import Residual, kappa, residual, terms
from daq.estimate.running import Running
from daq.estimate.slits import (
    expected_rates_hz,
    jet_speed_m_s,
    planned_weights,
    slit_pattern,
    wavelength_m,
)
from daq.estimate.sums import Sums
from daq.estimate.use import use
from daq.estimate.whole import Estimate, estimate_sums

__all__ = [
    "Estimate",
    "Plan",
    "Residual",
    "Running",
    "Sums",
    "anytime_multiplier",
    "dead_time_two_source_s",
    "estimate_run",
    "estimate_sums",
    "expected_rates_hz",
    "jackknife",
    "jet_speed_m_s",
    "kappa",
    "plan_of_dataset",
    "planned_weights",
    "poisson_interval",
    "residual",
    "seen_rate_hz",
    "slit_pattern",
    "terms",
    "true_rate_hz",
    "use",
    "wavelength_m",
]
