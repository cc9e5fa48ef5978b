"""Veil: rates moved by a hidden offset, so that whatever is worked out from them is hidden too."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from daq import openings as names
from daq.estimate.arrays import FloatArray
from daq.estimate.contrast import order_terms
from daq.estimate.plan import Plan
from daq.estimate.tables import Tables, over, plan_contrast


def veiled(tables: Tables, plan: Plan) -> Tables:
    """Return the tables that may be worked with: moved by the hidden offsets while a run is blinded.

    Notes
    -----
    P_S moves by the sum of o_T delta_T over the terms T within S of order three and above; every such term
    then moves by exactly o_T delta_T, and kappa by o of the term of all slits. Counting variances are those
    of the moved rates: a bar made from the true ones would give kappa back.
    """
    if not plan.blinding.hides:
        return tables
    rates = moved(tables.rates, plan)
    return replace(
        tables,
        rates=rates,
        variances=tables.variances * np.abs(over(rates, tables.rates, 1.0)),
        without=moved(tables.without, plan),
    )


def moved(rates: FloatArray, plan: Plan) -> FloatArray:
    """Return rates (..., J, K) moved by the hidden offsets.

    Raises
    ------
    ValueError
        Under another normalisation than the pairwise one, whose divisor no offset touches, and where an
        offset is not at hand.
    """
    if plan.normalisation != "pairwise":
        raise ValueError("only a residual of the pairwise normalisation can be blinded")
    what, signs = plan_contrast(plan)
    terms = signs * (rates @ what.pairs.T)
    added = np.zeros_like(rates)
    for term in (name for name in order_terms(plan.slits) if len(name) > 2):
        members = [set(pair) <= set(term) for pair in what.pair_names]
        offset = plan.blinding.offset(term)
        above = [mask & names.mask(term) == names.mask(term) for mask in map(int, plan.openings)]
        added[..., above] += offset * terms[..., members].sum(axis=-1, keepdims=True)
    return rates + added
