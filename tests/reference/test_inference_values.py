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
from daq.estimate.blinding import GENESIS, chained
from daq.estimate.peeking import hard_end_multiplier, t_mixture_multiplier
from daq.estimate.pooling import leave_one_out
from daq.estimate.positions import position_tests, sidak, sign_flips
from daq.estimate.statement import statement
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


def test_the_band_of_very_many_pairs_is_that_of_a_known_variance() -> None:
    """Derived: the normal mixture, sqrt((1 + 1/r)(ln(1 + r) + 2 ln 20)) with r = 8.211968 V / V_plan.

    Wald-Robbins boundary with known variance; a million pairs leave 3e-4 at a twentieth of them.
    """
    million = 1_000_000
    found = [anytime_multiplier(round(part * million), million) for part in (0.05, 0.1, 0.5, 1, 2, 10)]

    expected = [4.665334403811492, 3.823218333037801, 3.078662538135512,
                3.035122413028551, 3.064003115094519, 3.246310754613127]  # fmt: skip
    assert found == pytest.approx(expected, rel=3e-4)
    assert anytime_multiplier(million, million, 0.01) == pytest.approx(3.571606252443768, rel=1e-4)


def test_a_boundary_of_the_sum_of_known_variance() -> None:
    """Derived: sqrt((V + rho) ln((V + rho) / (rho alpha^2))) at V = 30, rho = 12 is 17.44298."""
    pairs = 10**9
    found = t_mixture_multiplier(pairs, pairs * 12 / 30, 0.05)

    assert found * 30**0.5 == pytest.approx(17.442980125406915, rel=1e-6)


def test_the_band_of_a_hard_end() -> None:
    """Derived: P(sup |W| > 2.2414027) = 5 %, carried over to Student's t; nothing after the end."""
    found = {pairs: hard_end_multiplier(pairs, 20) for pairs in (8, 10, 12, 20, 21)}

    expected = {8: 6.326104378571082, 10: 4.483224317257981, 12: 3.6519016829820052,
                20: 2.4334402110370066, 21: inf}  # fmt: skip
    assert found == pytest.approx(expected, rel=1e-8)


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


def test_the_chain_of_a_blinding() -> None:
    """Derived: SHA-256 over the hash before, a line feed and the event in canonical JSON."""
    scope = {"scope": "campaign-2026a", "halfwidth": "0.001"}
    commit = "ac6bc22d53e062cb8c40270c8764b4c984142e989c3a1ef2a5d58101dbcd33af"
    digest = "14c829fbc7a5a33624db9c389f296ffad51368a367ca8eb2ce1bf68a2a9d53c9"
    settings = "b79606fb3afea5bd1609ed40b622142f1c98125abcfe89a76a661b0e8e343910"
    events = [
        {"seq": 0, "event": "blind.open", "time": "2026-01-01T20:00:00Z", **scope, "commit": commit,
         "key_id": "b778bab0e875325f"},
        {"seq": 1, "event": "analysis.freeze", "time": "2026-01-09T08:00:00Z", "runs": ["r1", "r2"],
         "config_sha256": settings},
        {"seq": 2, "event": "blind.reveal", "time": "2026-01-09T09:00:00Z", **scope, "digest": digest},
    ]  # fmt: skip

    found, before = [], GENESIS
    for event in events:
        before = chained(before, event)
        found.append(before)

    assert found == [
        "0ea345725478f4ebabffdf66a7a91db031033b2a01583845728b4125696417cc",
        "c72134597b74fdddd685c3fea57d4b38a34a8c712996e8e69239e34e22ed0fec",
        "273211ed1f191a2f8a99ea368484db94cbd8e8153a15eaf81e5be677afa34dae",
    ]


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


def test_each_night_against_the_others() -> None:
    """Derived: mean of the others and distance, to the five digits given."""
    found = leave_one_out(Y, S, [18] * 5)

    expected = [(0.55831, 0.62137), (0.92611, -1.10426), (0.25605, 2.10331),
                (0.89316, -0.61841), (0.91265, -1.3643)]  # fmt: skip
    assert [(one.others, one.z) for one in found] == [pytest.approx(pair, abs=6e-6) for pair in expected]


X = [
    [0.86, -1.14, 5.91, -3.22, 1.32], [-0.29, -0.71, 2.73, -3.64, -1.97], [-0.23, 3.48, 0.78, 1.79, -3.73],
    [-2.48, 1.94, -0.66, -0.13, 1.46], [-4.41, -2.4, 0.41, -3.09, -1.42], [-0.08, -1.33, 0.06, 0.08, 2.66],
    [3.16, -0.79, -1.06, 1.78, 1.02], [0.5, -1.82, 1.89, 1.74, -3.57],
]  # fmt: skip


def test_eight_pairs_at_five_positions_turned_over_every_way() -> None:
    """Derived: all 128 ways, weights 1."""
    found = position_tests(np.array(X), np.ones(5), np.arange(5.0), sign_flips(8, np.random.default_rng(0)))

    assert (found.chi2_p, found.largest_p, found.fourier_p) == (0.6171875, 0.578125, 0.6796875)
    assert found.largest_t == pytest.approx(1.5762361331703605, rel=1e-9)
    assert found.largest_sidak_p == pytest.approx(0.5792321150064318, rel=1e-9)


def test_the_largest_of_many_positions() -> None:
    """Derived: 1 - (1 - p)^41 of the two-sided normal p of 3.2 and 2.5."""
    found = [sidak(p, 41) for p in (0.001374275874980872, 0.012419330651552318)]

    assert found == pytest.approx([0.054823941375501506, 0.400932439025494], rel=1e-6)


def test_a_limit_as_it_is_printed() -> None:
    """Derived: limit rounded up, 90 % interval, two-sided 95 % interval, median limit of a null."""
    found = statement(4.1e-5, 8.3e-5, 18, [(3.0e-5, None), (1.2e-5, 30)])

    assert found.limit == 1.94e-4
    assert found.interval_90 == pytest.approx((-1.11e-4, 1.93e-4), abs=5e-7)
    assert found.interval_95 == pytest.approx((-1.43e-4, 2.25e-4), abs=5e-7)
    assert found.sensitivity == pytest.approx((0.674 + 1.711) * 8.9067e-5, rel=1e-3)


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


def test_the_effective_freedom_of_an_end_gauge() -> None:
    """JCGM 100:2008, H.1.6: 25, 9.7, 2.9, 16.6 nm with 18, 25.6, 50, 2 are 32 nm with 16.7; from memory."""
    _, total, dof = null_limit(0.0, 25.0, 18, [(9.7, 25.6), (2.9, 50), (16.6, 2)])

    assert total == pytest.approx(32, abs=0.5)
    assert dof == pytest.approx(16.7, abs=0.1)
