"""Cuts: masks whose slits were cut apart to 1 nm and measured to 0.3 nm, a billion counts each."""

from __future__ import annotations

from typing import Any

import numpy as np

from daq import openings
from daq.estimate import planned_weights, slit_pattern
from daq.estimate.arrays import FloatArray
from daq.estimate.contrast import contrast, epsilon_and_delta
from daq.estimate.cuts import Mask
from daq.estimate.fitted import fitted
from daq.estimate.lit import light_of
from daq.estimate.loads import Instance
from daq.estimate.marginal import marginal
from tests.studies.bench import generator_of
from tests.studies.figures import within
from tests.studies.rows import Each, rows

DRAWS = 2000
COUNTS = 1e9
WAVELENGTH_M = 50e-12
PLACE_M, WIDTH_M, CUT_M, KNOWN_M = {"A": -300e-9, "B": 0.0, "C": 300e-9}, 100e-9, 1e-9, 0.3e-9
SINE = np.linspace(-0.8, 0.8, 41) / WIDTH_M
ASIDE = 0.01 / PLACE_M["C"]  # a hundredth of a fringe
BACKGROUND = 0.02
# By row: visibility of AB, AC, BC, and how far the pattern of AB is seen aside.
ROWS = {
    "as the model has it": ((1.0, 1.0, 1.0), 0.0),
    "visibility 0.98, 0.96, 0.98": ((0.98, 0.96, 0.98), 0.0),
    "AB seen 1 % of a fringe aside": ((1.0, 1.0, 1.0), ASIDE),
}
MASKS = range(8)


def study(draws: int = DRAWS, each: Each = rows) -> dict[str, Any]:
    """Return kappa before and after the cuts are accounted for, by row; the true one is zero."""
    return {
        "about": "41 positions, slits of 100 nm cut to 1 nm, measured to 0.3 nm, unevenly lit (5 %, 0.2 rad)",
        "rows": each("cuts:row", {name: [name, draws] for name in ROWS}),
    }


def row(name: str, draws: int) -> dict[str, Any]:
    """Return the figures of one row."""
    visibility, aside = ROWS[name]
    generator = generator_of("cuts", name)
    every = [_draw(generator, np.array(visibility), aside) for _ in range(draws)]
    before, kappa, se, joint, ratio, fits, differ = np.array(every, float).T
    found = {
        "nights": draws,
        "before_rms": _rms(before),
        "rms": _rms(kappa),
        "coverage_95": float(np.mean(np.abs(kappa) <= 1.96 * se)),
        "joint_rms": _rms(joint),
        "chi2_over_dof": float(np.nanmedian(ratio)),
        "flagged": float(np.mean(differ)),
    }
    if aside:
        return found | {"meets": {"flagged": found["flagged"] >= 0.99 and not fits.any()}}
    return found | {
        "meets": {
            "before": within(found["before_rms"], 1e-3, 1e-2) or draws < DRAWS,
            "rms": found["rms"] <= 1.7e-4,
            "coverage": within(found["coverage_95"], 0.88, 0.98),
            "joint": found["joint_rms"] <= 6e-5,
            "chi2": within(found["chi2_over_dof"], 0.9, 1.12),
        }
    }


def _rms(values: FloatArray) -> float:
    return float(np.sqrt(np.nanmean(values**2)))


def _draw(generator: np.random.Generator, visibility: FloatArray, aside: float) -> tuple[float, ...]:
    """Return kappa before; after, its error; of all patterns, chi-squared, whether it fits; the flag."""
    true = _cuts(generator, PLACE_M, CUT_M)
    light = (1 + 0.05 * generator.normal(size=3)) * np.exp(0.2j * generator.normal(size=3))
    rates = np.stack([_rates(true[mask], light, visibility, aside * (mask == 3)) for mask in MASKS], axis=-1)
    live = COUNTS / rates.sum()
    counts = generator.poisson(rates * live)
    seen, variance = counts / live, np.maximum(counts, 1) / live**2
    mask = _measured(generator, true)
    what = contrast(tuple(MASKS), 3)
    even = np.stack([_rates(_nominal()[mask], np.ones(3), np.ones(3), 0.0) for mask in MASKS], axis=-1)
    weights, by_pair = planned_weights(even, MASKS, 3)
    signs = np.stack([by_pair[pair] for pair in what.pair_names], axis=-1)
    epsilon, delta = epsilon_and_delta(seen, what, "pairwise", signs)
    lit = light_of(mask, seen, variance)
    after = marginal(mask, lit, what.residual, epsilon, delta, variance @ what.residual**2)
    plain = float(weights @ epsilon / (weights @ delta))
    try:
        joint = fitted(mask, lit, seen, variance, delta)
    except ValueError:  # it does not settle, and is not shown
        return plain, after.kappa, after.se, np.nan, np.nan, False, True
    differ = not joint.fits or abs(joint.kappa - after.kappa) > 3 * after.se
    return plain, after.kappa, after.se, joint.kappa, joint.chi2 / joint.dof, joint.fits, differ


Cuts = dict[int, dict[str, tuple[float, float]]]


def _nominal() -> Cuts:
    return {mask: {letter: (PLACE_M[letter], WIDTH_M) for letter in _letters(mask)} for mask in MASKS}


def _letters(mask: int) -> str:
    return openings.name(mask) if mask else ""


def _cuts(generator: np.random.Generator, place_m: dict[str, float], sd_m: float) -> Cuts:
    """Return the slits of every opening, cut apart."""
    return {
        mask: {
            letter: (place_m[letter] + generator.normal(0, sd_m), WIDTH_M + generator.normal(0, sd_m))
            for letter in _letters(mask)
        }
        for mask in MASKS
    }


def _measured(generator: np.random.Generator, true: Cuts) -> Mask:
    cuts = tuple(
        Instance(
            f"{letter} of {openings.name(mask)}", letter, (mask,),
            centre + generator.normal(0, KNOWN_M), width + generator.normal(0, KNOWN_M), KNOWN_M, KNOWN_M,
        )
        for mask in MASKS
        for letter, (centre, width) in true[mask].items()
    )  # fmt: skip
    return Mask(np.arange(8), 3, cuts, SINE, 0.0)


def _rates(
    cuts: dict[str, tuple[float, float]], light: FloatArray, visibility: FloatArray, aside: float
) -> FloatArray:
    """Return the rates of an opening from `slit_pattern`, which shares no line with the model."""
    angle_rad = np.arcsin((SINE + aside) * WAVELENGTH_M)
    lit = dict(zip("ABC", light, strict=True))

    def behind(letters: str) -> FloatArray:
        centres, widths = zip(*(cuts[letter] for letter in letters), strict=True)
        strengths = [lit[letter] * width / WIDTH_M for letter, width in zip(letters, widths, strict=True)]
        return np.asarray(slit_pattern(angle_rad, WAVELENGTH_M, centres, widths, strengths))

    letters = "".join(cuts)
    total = np.full(len(SINE), BACKGROUND) + sum(behind(letter) for letter in letters)
    for contrast_of, pair in zip(visibility, ("AB", "AC", "BC"), strict=True):
        if set(pair) <= set(letters):
            total = total + contrast_of * (behind(pair) - behind(pair[0]) - behind(pair[1]))
    return total
