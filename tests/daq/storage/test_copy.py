import pytest

from daq.errors import StorageError
from daq.storage.copy import copy_to


@pytest.fixture
def packed(tmp_path):
    bag = tmp_path / "night.bag"
    (bag / "data").mkdir(parents=True)
    (bag / "bagit.txt").write_text("BagIt-Version: 0.97\n")
    (bag / "data" / "visits.csv").write_bytes(bytes(range(256)) * 100)
    return bag


def test_every_file_of_a_bag_arrives_under_its_name(packed, tmp_path):
    copied = copy_to(packed, f"file://{tmp_path}/shelf")

    assert copied == 2
    arrived = tmp_path / "shelf" / "night.bag"
    assert (arrived / "data" / "visits.csv").read_bytes() == (packed / "data" / "visits.csv").read_bytes()
    assert (arrived / "bagit.txt").exists()


def test_an_object_store_without_folders_takes_a_bag_too(packed):
    assert copy_to(packed, "memory:///shelf") == 2  # each is read back from it and compared


def test_a_zip_is_one_file(tmp_path):
    (tmp_path / "night.zip").write_bytes(b"PK")

    assert copy_to(tmp_path / "night.zip", f"file://{tmp_path}/shelf") == 1


@pytest.mark.parametrize("address", ["nowhere://bucket", "no address at all"])
def test_an_address_that_cannot_be_opened_is_a_sentence(packed, address):
    with pytest.raises(StorageError, match="cannot be opened"):
        copy_to(packed, address)


def test_a_place_that_cannot_be_written_is_a_sentence(packed, tmp_path):
    (tmp_path / "shelf").mkdir()
    (tmp_path / "shelf" / "night.bag").write_text("a file where a folder is wanted")

    with pytest.raises(StorageError, match="could not be copied"):
        copy_to(packed, f"file://{tmp_path}/shelf")
