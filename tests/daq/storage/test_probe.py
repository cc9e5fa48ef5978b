import pytest

from daq.errors import StorageError
from daq.storage.probe import durable_write_s


def test_a_durable_write_takes_time_and_leaves_nothing(tmp_path):
    assert durable_write_s(tmp_path) > 0
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_is_not_there_is_a_storage_error(tmp_path):
    with pytest.raises(StorageError):
        durable_write_s(tmp_path / "nowhere")
