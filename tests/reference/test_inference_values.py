"""The watched band, blinding, pooling and null limits: values computed independently beforehand."""

from __future__ import annotations

from math import inf

import numpy as np
import pytest

from daq.estimate import (
    Plan,
    Sums,
    anytime_multiplier,
    blind_offset,
    estimate_sums,
    jackknife,
    null_limit,
    pool,
    residual,
)
from daq.estimate.peeking import t_mixture_multiplier
from daq.openings import names


@pytest.mark.parametrize(
    ("planned", "expected"),
    [
        (12, {2: inf, 5: 8.043675902533227, 6: 5.373868982799165, 8: 4.234506560073478,
              10: 3.865026043665516, 12: 3.683712606133799, 24: 3.3863327187717505}),
        (20, {2: inf, 5: inf, 6: 8.46467213089284, 8: 4.73108941733701, 10: 4.05372011665134,
              12: 3.763205972349992, 20: 3.3895896240048105, 40: 3.2468679241365845}),
        (200, {12: inf, 200: 3.066665332144694, 400: 3.081043991398635}),
    ],
)  # fmt: skip
def test_the_whole_night_band(planned: int, expected: dict[int, float]) -> None:
    """Derived; the prior sits in a flat minimum, which leaves 2e-6 of the multiplier."""
    found = {pairs: anytime_multiplier(pairs, planned) for pairs in expected}

    assert found == pytest.approx(expected, rel=2e-6)


def test_the_band_for_a_given_prior() -> None:
    """Derived: A = (1/(alpha^2 k))^(1/n), k = c/(c+n), m = sqrt((n-1)(A-1)/(1-kA)) with c = 2."""
    found = [t_mixture_multiplier(pairs, 2.0, 0.05) for pairs in (6, 10, 20, 100)]

    expected = [9.134533174479282, 4.079244504357698, 3.3898275133275413, 3.249093703720687]
    assert found == pytest.approx(expected, rel=1e-10)


# Weighted epsilon and delta of eight pairs.
E = [3.1, -1.2, 0.4, 2.2, -2.9, 1.1, 0.3, -0.6]
D = [1000.0, 990.0, 985.0, 970.0, 965.0, 950.0, 940.0, 930.0]


def eight_pairs() -> tuple[Sums, Plan]:
    """Return sums that have these epsilon and delta: everything in AB and ABC of one position."""
    value = np.zeros((8, 1, 8))
    value[:, 0, 3], value[:, 0, 7] = D, np.add(D, E)
    nothing = np.zeros(0, np.int64)
    plan = Plan(
        slits=3, openings=np.arange(8), positions_mm=np.zeros(1), weights=np.ones(1),
        signs={pair: np.ones(1) for pair in ("AB", "AC", "BC")}, normalisation="pairwise",
        dead_time_s=0.0, dead_time_kind="non-paralysable", planned_pairs=20,
        stand=nothing, pair=nothing, position=nothing, opening=nothing,
    )  # fmt: skip
    return Sums(value, np.ones((8, 1, 8)), np.abs(value)), plan


def test_bar_and_band_of_eight_pairs() -> None:
    """Derived: kappa, jackknife, t bar and whole-night band of a plan of 20."""
    found = estimate_sums(*eight_pairs())

    kappa = 0.0003104786545924968
    assert found.kappa == pytest.approx(kappa, rel=1e-12)
    assert found.kappa_se == pytest.approx(0.0006973661275255386, rel=1e-9)
    assert found.interval_95 is not None and found.whole_night_95 is not None
    # The half widths were made with the linearised error, 0.0006962266399605042.
    linear = 0.0006962266399605042 / 0.0006973661275255386
    assert (found.interval_95[1] - kappa) * linear == pytest.approx(0.001646314397455566, rel=2e-6)
    assert (found.whole_night_95[1] - kappa) * linear == pytest.approx(0.003293910488385246, rel=2e-6)


def test_the_jackknife_of_a_ratio() -> None:
    without = [(sum(E) - e) / (sum(D) - d) for e, d in zip(E, D, strict=True)]

    assert jackknife(without)[0] == pytest.approx(0.0006973661275255386, rel=1e-9)


@pytest.mark.parametrize(
    ("scope", "offset_hex", "commitment"),
    [
        ("campaign-2026a", "-0x1.b72a561561b3bp-11",
         "ac6bc22d53e062cb8c40270c8764b4c984142e989c3a1ef2a5d58101dbcd33af"),
        ("campaign-2026b", "0x1.aabeb505d9d3cp-11",
         "7457501bc80738ffbc4c41cbd24ae834777c40aa6566dce69afaf891c2d4d6c8"),
    ],
)  # fmt: skip
def test_hidden_offsets(scope: str, offset_hex: str, commitment: str) -> None:
    """Derived: HMAC-SHA256 with the secret 00 01 .. 1f; every bit."""
    found = blind_offset(bytes(range(32)), scope, "ABC", "0.001")

    assert found == (float.fromhex(offset_hex), commitment)


def test_an_offset_times_delta_shifts_kappa_by_the_offset() -> None:
    """Derived: centre with background 0.02, delta 6."""
    rates = dict(zip(names(3), (0.02, 1.02, 1.02, 4.02, 1.02, 4.02, 4.02, 9.02), strict=True))
    offset, _ = blind_offset(bytes(range(32)), "campaign-2026a", "ABC", "0.001")

    blinded = rates | {"ABC": rates["ABC"] + offset * residual(rates, 1.0).delta}

    assert blinded["ABC"] == pytest.approx(9.014974151122699, rel=1e-12)
    assert residual(blinded, 1.0).kappa == pytest.approx(-0.0008376414795499895, abs=1e-12)


LABS = (
    [61.0, 61.4, 62.21, 62.3, 62.34, 62.6, 62.7, 62.84, 65.9],
    np.sqrt([0.2025, 1.21, 0.09, 0.2025, 0.3844, 0.5625, 0.0676, 0.0225, 1.8225]),
)


def test_nine_laboratories() -> None:
    """Data of Metrologia 41, 132 (2004), whose table prints 0.8399 for the scatter between laboratories.

    The other digits were computed and agree with an independent statistics library.
    """
    found = pool(*LABS, [inf] * 9)

    assert (found.value, found.se) == pytest.approx((62.58339709399823, 0.10784570549823093), rel=1e-10)
    assert (found.q, found.q_p) == pytest.approx((24.801897741748338, 0.0016793514637841044), rel=1e-7)
    assert (found.birge, found.i2) == pytest.approx((1.7607490501824905, 0.6774440374159827), rel=1e-7)
    assert found.tau == pytest.approx(0.8399, abs=5e-5)
    assert found.tau == pytest.approx(0.8398781514120002, rel=1e-7)
    effects = (62.40761991132827, 0.33803060268355556)
    assert (found.random_value, found.random_se) == pytest.approx(effects, rel=1e-7)
    assert found.random_interval_95 == pytest.approx((61.62811994371443, 63.187119878942106), rel=1e-7)


Y, S = [1.2, -0.4, 2.6, 0.3, -1.1], [0.9, 1.1, 1.0, 0.8, 1.4]


def test_five_nights() -> None:
    """Derived; the Welch test knows that each standard error has 18 degrees of freedom."""
    found = pool(Y, S, [18] * 5)

    assert (found.value, found.se) == pytest.approx((0.7126274351757804, 0.44135086739166335), rel=1e-8)
    assert (found.q, found.q_p) == pytest.approx((6.820884617542309, 0.14566186629878058), rel=1e-8)
    assert (found.welch_f, found.welch_p) == pytest.approx(
        (1.6321332512913285, 0.18284606877846254), rel=1e-9
    )
    assert found.tau == pytest.approx(0.9064613216828743, rel=1e-8)
    assert found.random_value == pytest.approx(0.6582060503975913, rel=1e-8)
    assert found.random_interval_95 == pytest.approx((-1.0322161201644968, 2.3486282209596796), rel=1e-8)


@pytest.mark.parametrize(
    ("loads", "value", "se", "q", "weights"),
    [
        (
            [0.6, 0.6, 0.6, 0.6, 0.6],
            0.7126274351757806,
            0.7448426599942929,
            6.820884617542309,
            [0.24048220758935, 0.16098395714658, 0.19479058814737, 0.30436029398027, 0.09938295313641],
        ),
        (
            [0.6, 0.6, 0.6, 0.0, 0.0],
            0.47946037890386106,
            0.5323241770231624,
            6.207113644210005,
            [0.16643392748172, 0.11141444732247, 0.13481148126020, 0.44276410850529, 0.14457603543029],
        ),
    ],
)
def test_a_cause_shared_by_nights(
    loads: list[float], value: float, se: float, q: float, weights: list[float]
) -> None:
    """Derived: one column of loads, the weights of least variance."""
    found = pool(Y, S, [18] * 5, common=[loads])

    assert (found.value, found.se, found.q) == pytest.approx((value, se, q), rel=1e-9)
    assert found.weights == pytest.approx(weights, rel=1e-9)


def test_a_limit_with_two_systematic_causes() -> None:
    """Derived; effective degrees of freedom as in JCGM 100:2008, eq. (G.2b)."""
    found = null_limit(4.1e-5, 8.3e-5, 18, [(3.0e-5, None), (1.2e-5, 30)])

    assert found == pytest.approx((0.0001934189629588995, 8.906739021662192e-05, 23.86278921923196), rel=1e-9)


@pytest.mark.parametrize("dof", [inf, 18])
def test_a_limit_grows_with_what_was_found(dof: float) -> None:
    """Derived: 1.64485, 2.14485, 2.64485, 3.64485; 1.73406 .. with 18 degrees of freedom."""
    base = 1.6448536269514722 if dof == inf else 1.7340636066175388

    found = [null_limit(x, 1.0, dof)[0] for x in (0, 0.5, 1, 2)]

    assert found == pytest.approx([base, base + 0.5, base + 1, base + 2], rel=1e-9)


def test_the_quantile_of_a_table() -> None:
    """JCGM 100:2008, H.1: 99 % for 16 degrees of freedom k = 2.92, so 32 nm become 93 nm; from memory."""
    limit, _, _ = null_limit(0.0, 32.0, 16, confidence=0.995)

    assert limit == pytest.approx(93, abs=0.5)
