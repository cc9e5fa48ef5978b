import pytest

from daq.description import joint_problems, parse
from daq.errors import DescriptionError
from tests.examples import changed, lantern, lantern_rig, measurement_table, rig_table


def problems_of(table, kind):
    with pytest.raises(DescriptionError) as caught:
        parse(table, f"{kind}.toml", kind)
    return caught.value.problems


def test_the_example_bench_has_no_problem():
    assert joint_problems(lantern(), lantern_rig(), "lantern.toml") == ()


def test_an_unknown_key_is_refused_with_the_nearest_known_one():
    (problem,) = problems_of(changed(measurement_table(), itinerary__dwel_s=2.0), "measurement")

    assert problem == "measurement.toml, itinerary.dwel_s: unknown key. Did you mean 'dwell_s'?"


def test_the_known_keys_are_named_as_they_are_written():
    (problem,) = problems_of(changed(measurement_table(), xyzzy=1), "measurement")

    assert ", schema, " in problem
    assert "schema_" not in problem


def test_three_mistakes_in_a_rig_file_give_three_sentences():
    table = changed(rig_table(), detector__axs="detector", axes__mask__limits_mm=[0.0, 15.0])
    table["mask"]["openings"]["A"]["at_mm"] = 4.0

    problems = problems_of(table, "rig")

    assert problems == (
        "rig.toml, detector.axs: unknown key. Did you mean 'axis'?",
        "rig.toml, mask.openings.AB.at_mm: A stands at 4 mm too.",
        "rig.toml, mask.openings.none.at_mm: 16 lies outside the limits 0 .. 15 mm of axis 'mask'.",
    )


@pytest.mark.parametrize(
    ("changes", "key"),
    [
        ({"axes__mask__limits_mm": [5.0, 5.0]}, "axes.mask.limits_mm"),
        ({"axes__mask__speed_mm_s": 0.0}, "axes.mask.speed_mm_s"),
        ({"axes__mask__speed_mm_s": float("nan")}, "axes.mask.speed_mm_s"),
        ({"axes__mask__settle_s": float("inf")}, "axes.mask.settle_s"),
        ({"axes__mask__device": "nobody"}, "axes.mask.device"),
        ({"mask__axis": "nowhere"}, "mask.axis"),
        ({"devices__counter__address": "counter"}, "devices.counter.address"),
        ({"geometry__wavelength_m": -1.0}, "geometry.wavelength_m"),
        ({"schema": 2}, "schema"),
    ],
)
def test_a_rig_that_cannot_be_meant_is_refused_with_its_key(changes, key):
    problems = problems_of(changed(rig_table(), **changes), "rig")

    assert any(f"rig.toml, {key}" in problem for problem in problems), problems


def test_a_mask_that_lacks_openings_names_them():
    table = rig_table()
    del table["mask"]["openings"]["AB"], table["mask"]["openings"]["C"]

    (problem,) = problems_of(table, "rig")

    assert "the mask lacks AB, C" in problem


def test_an_opening_may_have_slits_of_its_own():
    table = rig_table()
    table["mask"]["openings"]["AB"]["cuts"] = {"A": {"centre_m": -119.8e-6, "width_m": 40.1e-6}}

    rig = parse(table, "rig.toml", "rig")

    assert rig.slits_of(3)["A"].width_m == 40.1e-6
    assert rig.slits_of(3)["B"] == rig.slits["B"]
    assert rig.slits_of(1)["A"].width_m == 40e-6


def test_a_cut_of_a_slit_that_is_shut_is_refused():
    table = rig_table()
    table["mask"]["openings"]["AB"]["cuts"] = {"C": {"centre_m": 0.0, "width_m": 1e-6}}

    (problem,) = problems_of(table, "rig")

    assert "slit C is not open there" in problem


@pytest.mark.parametrize(
    "positions",
    [
        {"start_mm": 0.0, "stop_mm": 1.0},
        {"list_mm": [0.0], "start_mm": 0.0},
        {"list_mm": [1.0, 1.0]},
        {"list_mm": []},
        {"start_mm": 0.0, "stop_mm": 0.0, "number": 3},
    ],
)
def test_positions_are_given_in_one_form_and_once_each(positions):
    problems = problems_of(changed(measurement_table(), positions=positions), "measurement")

    assert "measurement.toml, positions" in problems[0]


def test_positions_outside_the_limits_of_the_axis_are_refused():
    (problem,) = joint_problems(lantern(positions__stop_mm=15.2), lantern_rig(), "lantern.toml")

    assert "15.2 mm lies outside the limits -15 .. 15 mm" in problem


def test_an_opening_order_names_every_opening_once():
    (problem,) = joint_problems(lantern(itinerary__opening_order=["A", "AB"]), lantern_rig(), "lantern.toml")

    assert "itinerary.opening_order" in problem


def test_the_matrix_of_move_times_counts_slots_and_settling():
    times_s = lantern_rig().mask_move_s()

    assert times_s[(1, 3)] == pytest.approx(0.5 + 0.2)
    assert times_s[(1, 0)] == pytest.approx(0.5 + 7 * 0.2)
    assert times_s[(7, 7)] == 0.0
    assert all(times_s[(here, there)] == times_s[(there, here)] for here, there in times_s)


@pytest.mark.parametrize(
    ("cut", "what"),
    [
        ({"width_m": 0.0}, "width_m: input should be greater than 0"),
        ({"width_m": 40.0}, "a slit 40 m wide fits on no mask. Lengths here are in metres"),
        (
            {"centre_m": -120.0},
            "a centre at -120 m is too far off for a width of 4e-05 m. Lengths here are in",
        ),
        ({"width_u_m": 0.3}, "width_u_m 0.3 m is more than the width 4e-05 m. Lengths here are in metres"),
        ({"width_nm": 40e3}, "width_nm: unknown key. Did you mean 'width_m'?"),
        ({"centre_u_m": -1e-9}, "centre_u_m: input should be greater than or equal to 0"),
    ],
)
def test_a_row_of_metrology_that_cannot_be_meant_is_told_with_its_opening_and_slit(cut, what):
    table = rig_table()
    table["mask"]["openings"]["AB"]["cuts"] = {"A": {"centre_m": -120e-6, "width_m": 40e-6} | cut}

    (problem,) = problems_of(table, "rig")

    assert problem.startswith("rig.toml, mask.openings.AB.cuts.A") and what in problem


def test_a_row_of_metrology_for_a_slit_that_does_not_exist_is_told():
    table = rig_table()
    table["mask"]["openings"]["AB"]["cuts"] = {"D": {"centre_m": 240e-6, "width_m": 40e-6}}

    assert problems_of(table, "rig") == ("rig.toml, mask.openings.AB.cuts: slit D is not open there.",)
