"""Estimates: pure functions from counts to the residual, its error bars, and what guards them."""

from daq.estimate.blinding import Blinding, blind_offset
from daq.estimate.blocks import jackknife
from daq.estimate.charts import cusum, cusum_run_length, ewma, ewma_run_length
from daq.estimate.counting import dead_time_two_source_s, poisson_interval, seen_rate_hz, true_rate_hz
from daq.estimate.dataset import estimate_run, plan_of_dataset, readings_of_dataset
from daq.estimate.drift import allan_deviation, structure_function
from daq.estimate.judge import Judge
from daq.estimate.limits import null_limit
from daq.estimate.peeking import anytime_multiplier
from daq.estimate.plan import Plan
from daq.estimate.pooling import Pooled, pool
from daq.estimate.quality import Rules
from daq.estimate.rejudge import judged_again
from daq.estimate.residual import Residual, kappa, residual, terms
from daq.estimate.running import Running
from daq.estimate.shown import shown
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
    "Blinding",
    "Estimate",
    "Judge",
    "Plan",
    "Pooled",
    "Residual",
    "Rules",
    "Running",
    "Sums",
    "allan_deviation",
    "anytime_multiplier",
    "blind_offset",
    "cusum",
    "cusum_run_length",
    "dead_time_two_source_s",
    "estimate_run",
    "estimate_sums",
    "ewma",
    "ewma_run_length",
    "expected_rates_hz",
    "jackknife",
    "jet_speed_m_s",
    "judged_again",
    "kappa",
    "null_limit",
    "plan_of_dataset",
    "planned_weights",
    "poisson_interval",
    "pool",
    "readings_of_dataset",
    "residual",
    "seen_rate_hz",
    "shown",
    "slit_pattern",
    "structure_function",
    "terms",
    "true_rate_hz",
    "use",
    "wavelength_m",
]
