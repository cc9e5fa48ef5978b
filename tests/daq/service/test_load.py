import shutil

import pytest

from daq.errors import DescriptionError
from daq.service.files import read_table
from daq.service.load import Wishes, config_dir, derived_seed, load
from tests.examples import CONFIGS


def test_the_examples_are_found_beside_the_sources_or_in_the_wheel():
    assert (config_dir() / "lantern.toml").is_file()


@pytest.mark.parametrize("file", sorted(CONFIGS.glob("*.toml")), ids=lambda file: file.name)
def test_every_example_measurement_loads_with_its_rig(file):
    itinerary = load(file).itinerary()

    assert itinerary.planned_pairs >= 2  # fewer have no error bar
    assert len(itinerary) == 12464 or not file.name.startswith("lantern")


def test_hours_are_rounded_down_to_whole_pairs():
    loaded = load(CONFIGS / "lantern.toml", Wishes(hours=2.0))

    itinerary = loaded.itinerary()

    assert itinerary.planned_pairs == 3
    assert itinerary.total_s <= 7200


def test_too_few_hours_for_one_pair_are_refused_with_a_figure():
    with pytest.raises(DescriptionError, match=r"0\.1 h is shorter than one pair of laps, 0\.52 h"):
        load(CONFIGS / "lantern.toml", Wishes(hours=0.1))


def test_one_seed_sets_order_and_bench_apart():
    loaded = load(CONFIGS / "lantern.toml", Wishes(seed=7))

    assert loaded.measurement.itinerary.seed == derived_seed("itinerary", 7)
    assert loaded.bench_seed == derived_seed("bench", 7)
    assert loaded.bench_seed != loaded.measurement.itinerary.seed


def test_a_missing_file_is_a_sentence(tmp_path):
    with pytest.raises(DescriptionError, match="no such file"):
        load(tmp_path / "nowhere.toml")


def test_a_missing_rig_is_a_sentence_with_its_path(tmp_path):
    shutil.copy(CONFIGS / "lantern.toml", tmp_path)

    with pytest.raises(DescriptionError, match=r"rigs/lantern\.toml: no such file"):
        load(tmp_path / "lantern.toml")


@pytest.mark.parametrize("text", [b"schema = ", b"\xff\xfe", b"[a]\n[a]\n"])
def test_what_is_no_toml_is_a_sentence(tmp_path, text):
    (tmp_path / "bad.toml").write_bytes(text)

    with pytest.raises(DescriptionError, match="not a TOML file"):
        load(tmp_path / "bad.toml")


def test_a_byte_that_is_no_utf_8_is_named_by_its_line(tmp_path):
    (tmp_path / "bad.toml").write_bytes('schema = 1\nname = "Spalt für A"\n'.encode("latin-1"))

    with pytest.raises(DescriptionError, match="line 2 holds a byte that is no UTF-8"):
        load(tmp_path / "bad.toml")


def test_a_mark_before_the_first_byte_does_no_harm():
    text = (CONFIGS / "lantern.toml").read_bytes()

    assert read_table(b"\xef\xbb\xbf" + text, CONFIGS) == read_table(text, CONFIGS)


def test_problems_of_both_files_come_at_once(tmp_path):
    (tmp_path / "rigs").mkdir()
    measurement = (CONFIGS / "lantern.toml").read_text().replace("laps = 38", "lap = 38")
    rig = (CONFIGS / "rigs" / "lantern.toml").read_text().replace("speed_mm_s = 10.0", "speed_mm_s = -1")
    (tmp_path / "lantern.toml").write_text(measurement)
    (tmp_path / "rigs" / "lantern.toml").write_text(rig)

    with pytest.raises(DescriptionError) as caught:
        load(tmp_path / "lantern.toml")

    assert len(caught.value.problems) == 3
    missing, unknown, speed = caught.value.problems
    assert "itinerary.laps: this key is missing" in missing
    assert "Did you mean 'laps'?" in unknown
    assert "rigs/lantern.toml, axes.mask.speed_mm_s" in speed


@pytest.mark.parametrize("hours", [-3.0, 0.0, float("nan"), float("inf"), 1e6])
def test_hours_that_cannot_be_meant_are_a_sentence(hours):
    with pytest.raises(DescriptionError, match="give a number above 0"):
        load(CONFIGS / "lantern.toml", Wishes(hours=hours))
