from daq.report import lines

WHOLE = {
    "run": "lab/runs/20261201T170000Z-lantern",
    "name": "20261201T170000Z-lantern",
    "title": "Lantern bench",
    "kind": "rehearsal",
    "damaged": [],
    "recorded_kappa": None,
    "kappa": -1.5e-5,
    "kappa_se": 9.5e-5,
    "kappa_counting_se": 1.0e-4,
    "interval_95": [-2.1e-4, 1.8e-4],
    "whole_night_95": [-3.4e-4, 3.1e-4],
    "excess": 0.95,
    "excess_se": 0.16,
    "printable": True,
    "pairs": 19,
    "normalisation": "pairwise",
    "truth_kappa": 0.0,
    "visits_planned": 12464,
    "visits_done": 12464,
    "visits_missing": 0,
    "visits_repeated": 8,
    "visits_not_used": 8,
    "stands_left_out": 1,
    "run_s": 35563.1,
    "live_fraction": 0.771,
    "ended": "complete",
    "digest": "abc",
    "epsilon": -1.2,
    "epsilon_se": 7.9,
    "blinding": "open",
    "stop": {
        "kind": "planned",
        "reason": "complete",
        "who": "the plan",
        "pairs": 19,
        "kappa_visible": True,
        "band": "once",
        "remark": "",
    },
}


def test_the_report_gives_kappa_with_both_bars_and_what_it_rests_on():
    text = "\n".join(lines(WHOLE))

    assert "kappa = −1.50e-05 ± 9.50e-05 (jackknife over 19 pairs; pairwise normalisation)" in text
    assert "if read once at the planned end: −2.100e-04 to +1.800e-04" in text
    assert "over the whole night, whatever you do:     −3.400e-04 to +3.100e-04" in text
    assert "zero lies inside the 95 % interval" in text
    assert "12464 of 12464 visits done, 0 missing, 8 repeated" in text
    assert "A rehearsal on simulated hardware." in text


def test_zero_outside_the_interval_is_said_as_such_and_nothing_more():
    text = "\n".join(lines(WHOLE | {"interval_95": [1e-4, 3e-4]}))

    assert "zero lies outside the 95 % interval" in text
    assert not any(word in text.lower() for word in ("violat", "confirm", "born", "law"))


def test_below_two_pairs_no_residual_is_given():
    text = "\n".join(lines(WHOLE | {"kappa": 1e-3, "kappa_se": None, "pairs": 1}))

    assert "No residual yet" in text
    assert "kappa =" not in text


def test_where_delta_is_small_epsilon_stands_instead_of_kappa():
    text = "\n".join(lines(WHOLE | {"printable": False}))

    assert "epsilon = −1.200e+00 ± 7.9 per second" in text
    assert "kappa =" not in text


def test_a_band_that_is_not_defined_is_said_to_be_missing():
    text = "\n".join(lines(WHOLE | {"whole_night_95": None}))

    assert "whatever you do:     not yet" in text


def test_a_run_on_real_hardware_has_no_truth():
    text = "\n".join(lines(WHOLE | {"kind": "run", "truth_kappa": None}))

    assert "truth" not in text
    assert "rehearsal" not in text


def test_warnings_that_stood_at_the_end_are_in_the_report_with_their_doubt():
    found = [{"text": "The rate fell.", "in_doubt": False}, {"text": "An opening is odd.", "in_doubt": True}]

    told = "\n".join(lines(WHOLE | {"warnings": found}))

    assert "Warnings at the end\nThe rate fell.\nAn opening is odd. (kappa is in doubt" in told
