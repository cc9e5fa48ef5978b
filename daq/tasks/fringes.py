"""Fringes: period, middle and visibility of every pair of slits, from slits alone and together."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import ceil

import numpy as np
from numpy.polynomial.chebyshev import chebvander
from scipy.optimize import least_squares

from daq.estimate.arrays import FloatArray
from daq.tasks.refusals import hopeless

NAME = "scale"
NONE, SECTIONS = "none", 4
NONE_TERMS, ROUNDS = 3, 3  # of the background over the range; of fit and weights in turn
LEAST_TERMS, TERMS_A_LOBE = 5, 2  # of the amplitude of one slit
COARSEST_REL = 0.02  # error of a period, all else known: above it there is no fringe
VISIBLE, EVEN = 0.9, 1.0  # where the fit of a pair begins: visibility, and its light over that of both slits


@dataclass(frozen=True, slots=True)
class Fringe:
    """A fringe as it was fitted: period and middle [mm], visibility, and their standard errors."""

    period_mm: float
    middle_mm: float
    visibility: float
    period_se_mm: float
    middle_se_mm: float


@dataclass(frozen=True, slots=True)
class Fringes:
    """All fringes of a scan, the covariance of their periods [mm2], what was fitted, and how well.

    `bent_mm` says how far the fringes of each section of the range are still shifted, `bent_se_mm` how well
    that is known: a stage whose scale is even shifts none.
    """

    by_pair: Mapping[str, Fringe]
    period_covariance: FloatArray
    fitted: Mapping[str, FloatArray]
    bent_mm: FloatArray
    bent_se_mm: FloatArray
    chi2: float
    dof: int


@dataclass(frozen=True, slots=True)
class _Shape:
    """Where the values of slits, background and pairs stand among the parameters."""

    place_mm: FloatArray
    smooth: FloatArray  # terms of an amplitude at every place
    slits: tuple[str, ...]
    pairs: tuple[str, ...]

    @property
    def terms(self) -> int:
        """How many terms an amplitude has."""
        return self.smooth.shape[1]

    @property
    def first_pair(self) -> int:
        """Where the parameters of pairs begin."""
        return NONE_TERMS + len(self.slits) * self.terms

    def of_slit(self, slit: str) -> slice:
        """Return where the amplitude of a slit stands."""
        begin = NONE_TERMS + self.slits.index(slit) * self.terms
        return slice(begin, begin + self.terms)

    def of_pair(self, pair: str) -> slice:
        """Return where period, middle, visibility and light of a pair stand."""
        begin = self.first_pair + 4 * self.pairs.index(pair)
        return slice(begin, begin + 4)

    @property
    def names(self) -> tuple[str, ...]:
        """What was counted, in the order of the rows."""
        return (NONE, *self.slits, *self.pairs)


def fringes(
    place_mm: FloatArray,
    counts: Mapping[str, FloatArray],
    expected_mm: Mapping[str, float],
    lobe_mm: float,
) -> Fringes:
    """Return the fringes of pairs whose slits were counted alone at the same places.

    Parameters
    ----------
    counts
        Of none, of each slit alone and of each pair, at every place.
    expected_mm
        Pair -> period that is looked for.
    lobe_mm
        How wide the pattern of one slit is: its amplitude changes sign no more often than that.

    Notes
    -----
    n = none + a^2 for a slit, n = none + l (a^2 + b^2 + 2 V a b cos(2 pi (y - y0)/L)) for a pair; amplitudes
    are polynomials, so that the counts of a slit alone at all places tell what it does at one. All at once,
    by least squares with the variance of the fit, that is by maximum likelihood of Poisson counts. With V and
    the amplitudes known, N counts of a pair tell y0 to L/(2 pi sqrt(N (1 - sqrt(1 - V^2)))).

    Raises
    ------
    DaqError
        When the fit does not converge, or ends at no fringe.
    """
    shape = _shape(place_mm, counts, tuple(expected_mm), lobe_mm)
    seen = np.concatenate([counts[name] for name in shape.names])
    values, scale = _start(shape, counts, expected_mm, lobe_mm)
    width = np.sqrt(np.maximum(seen, 1.0))
    for _ in range(ROUNDS):
        found = least_squares(
            lambda at, w=width: (_model(shape, at) - seen) / w,
            values,
            jac=lambda at, w=width: _slopes(shape, at) / w[:, np.newaxis],
            x_scale=scale,
            method="lm",
            max_nfev=200,
        )
        values, width = found.x, np.sqrt(np.maximum(_model(shape, found.x), 0.5))
    slopes = _slopes(shape, values) / width[:, np.newaxis]
    fisher = slopes.T @ slopes
    _refuse(shape, values, fisher, bool(found.success), expected_mm)
    covariance = np.linalg.pinv(fisher, rcond=1e-14, hermitian=True)
    return _told(shape, values, covariance, seen, width)


def _shape(
    place_mm: FloatArray, counts: Mapping[str, FloatArray], pairs: tuple[str, ...], lobe_mm: float
) -> _Shape:
    slits = tuple(sorted({slit for pair in pairs for slit in pair}))
    terms = LEAST_TERMS + TERMS_A_LOBE * ceil(float(np.ptp(place_mm)) / lobe_mm)
    return _Shape(place_mm, np.asarray(chebvander(_even(place_mm), terms - 1), float), slits, pairs)


def _even(place_mm: FloatArray) -> FloatArray:
    """Return places on -1 .. 1."""
    return np.asarray(2 * (place_mm - place_mm.min()) / np.ptp(place_mm) - 1)


def _start(
    shape: _Shape, counts: Mapping[str, FloatArray], expected_mm: Mapping[str, float], lobe_mm: float
) -> tuple[FloatArray, FloatArray]:
    """Return where the fit begins, and the scale of every parameter."""
    values = np.zeros(shape.first_pair + 4 * len(shape.pairs))
    scale = np.ones(len(values))
    values[0] = counts[NONE].mean()
    middle_mm = float(shape.place_mm.mean())
    lobes = np.sign(np.sinc((shape.place_mm - middle_mm) / lobe_mm))
    light = {slit: np.clip(counts[slit] - counts[NONE], 0, None) for slit in shape.slits}
    for slit in shape.slits:
        amplitude = lobes * np.sqrt(light[slit])
        values[shape.of_slit(slit)] = np.linalg.lstsq(shape.smooth, amplitude, rcond=None)[0]
        scale[shape.of_slit(slit)] = max(float(np.abs(amplitude).max()), 1.0)
    scale[:NONE_TERMS] = max(values[0], 1.0)
    for pair in shape.pairs:
        both = light[pair[0]] + light[pair[1]] + counts[NONE]
        turn = np.exp(2j * np.pi * shape.place_mm / expected_mm[pair])
        phase = float(np.angle(np.sum((counts[pair] - both) * turn)))
        period = expected_mm[pair]
        values[shape.of_pair(pair)] = (period, phase / (2 * np.pi) * period, VISIBLE, EVEN)
        scale[shape.of_pair(pair)] = (1e-2 * period, 1e-2 * period, 1e-2, 1e-3)
    return values, scale


def _model(shape: _Shape, at: FloatArray) -> FloatArray:
    """Return the counts that are expected, one name after another."""
    none = shape.smooth[:, :NONE_TERMS] @ at[:NONE_TERMS]
    amplitude = {slit: shape.smooth @ at[shape.of_slit(slit)] for slit in shape.slits}
    rows = [none, *(none + amplitude[slit] ** 2 for slit in shape.slits)]
    for pair in shape.pairs:
        a, b = (amplitude[slit] for slit in pair)
        period, middle, visibility, light = at[shape.of_pair(pair)]
        wave = np.cos(2 * np.pi * (shape.place_mm - middle) / period)
        rows.append(none + light * (a**2 + b**2 + 2 * visibility * a * b * wave))
    return np.concatenate(rows)


def _slopes(shape: _Shape, at: FloatArray) -> FloatArray:
    """Return how the expected counts change with every parameter."""
    places, number = len(shape.place_mm), len(shape.names)
    found = np.zeros((number, places, len(at)))
    found[:, :, :NONE_TERMS] = shape.smooth[:, :NONE_TERMS]
    amplitude = {slit: shape.smooth @ at[shape.of_slit(slit)] for slit in shape.slits}
    for row, slit in enumerate(shape.slits, 1):
        found[row, :, shape.of_slit(slit)] = 2 * amplitude[slit][:, np.newaxis] * shape.smooth
    for row, pair in enumerate(shape.pairs, 1 + len(shape.slits)):
        _pair_slopes(found[row], shape, pair, amplitude, at)
    return found.reshape(number * places, len(at))


def _pair_slopes(
    found: FloatArray, shape: _Shape, pair: str, amplitude: Mapping[str, FloatArray], at: FloatArray
) -> None:
    a, b = (amplitude[slit] for slit in pair)
    period, middle, visibility, light = at[shape.of_pair(pair)]
    turns = 2 * np.pi * (shape.place_mm - middle) / period
    wave, other = np.cos(turns), 2 * light * visibility * a * b * np.sin(turns)
    for slit, mine, its in ((pair[0], a, b), (pair[1], b, a)):
        slope = 2 * light * (mine + visibility * its * wave)
        found[:, shape.of_slit(slit)] = slope[:, np.newaxis] * shape.smooth
    found[:, shape.of_pair(pair)] = np.stack(
        [
            other * turns / period,
            other * 2 * np.pi / period,
            2 * light * a * b * wave,
            a**2 + b**2 + 2 * visibility * a * b * wave,
        ],
        axis=1,
    )


def _refuse(
    shape: _Shape, values: FloatArray, fisher: FloatArray, success: bool, expected_mm: Mapping[str, float]
) -> None:
    """Raise DaqError where a pair has no fringe of about the period that is looked for."""
    for pair in shape.pairs:
        period, _, visibility, light = values[shape.of_pair(pair)]
        wanted, at = expected_mm[pair], shape.of_pair(pair).start
        near = 0.5 * wanted < period < 2 * wanted and 0.02 < abs(visibility) < 2 and light > 0
        seen = fisher[at, at] * (COARSEST_REL * wanted) ** 2 > 1
        if not (success and near and seen and np.isfinite(values).all()):
            raise hopeless(
                NAME,
                f"no fringe of about {wanted:.2f} mm is seen behind {pair}: the fit does not converge",
                "Look at the picture, at the geometry in the rig file, and at the light of both slits",
            )


def _told(
    shape: _Shape, values: FloatArray, covariance: FloatArray, seen: FloatArray, width: FloatArray
) -> Fringes:
    periods = [shape.of_pair(pair).start for pair in shape.pairs]
    expected = _model(shape, values)
    bent, bent_se = _bent_mm(shape, values, seen - expected, width)
    return Fringes(
        by_pair={
            pair: _fringe(values, covariance, at) for pair, at in zip(shape.pairs, periods, strict=True)
        },
        period_covariance=covariance[np.ix_(periods, periods)],
        fitted=dict(zip(shape.names, expected.reshape(len(shape.names), -1), strict=True)),
        bent_mm=bent,
        bent_se_mm=bent_se,
        chi2=float(np.sum(((seen - expected) / width) ** 2)),
        dof=len(seen) - len(values),
    )


def _bent_mm(
    shape: _Shape, values: FloatArray, left: FloatArray, width: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return how far what is left over shifts all fringes, section by section, and the errors [mm]."""
    slopes = _slopes(shape, values)
    shift = sum(slopes[:, shape.of_pair(pair).start + 1] for pair in shape.pairs) / width
    pull = (left / width * shift).reshape(len(shape.names), -1).sum(axis=0)
    weight = (shift**2).reshape(len(shape.names), -1).sum(axis=0)
    parts = [(part.sum(), many.sum()) for part, many in zip(*map(_sections, (pull, weight)), strict=True)]
    sums = np.array(parts)
    return sums[:, 0] / sums[:, 1], 1 / np.sqrt(sums[:, 1])


def _sections(values: FloatArray) -> list[FloatArray]:
    return np.array_split(values, SECTIONS)


def _fringe(values: FloatArray, covariance: FloatArray, at: int) -> Fringe:
    period, middle, visibility = values[at : at + 3].tolist()
    return Fringe(
        period,
        middle - period * round(middle / period),
        visibility,
        float(np.sqrt(covariance[at, at])),
        float(np.sqrt(covariance[at + 1, at + 1])),
    )
