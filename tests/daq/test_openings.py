import pytest

from daq import openings


def test_names_come_in_binary_order():
    assert openings.names(3) == ("none", "A", "B", "AB", "C", "AC", "BC", "ABC")


@pytest.mark.parametrize("slits", [2, 3, 4, 5])
def test_name_and_mask_undo_each_other(slits):
    named = openings.names(slits)

    masks = [openings.mask(name) for name in named]

    assert masks == list(range(1 << slits))


@pytest.mark.parametrize("slits", [2, 3, 4, 5])
def test_the_signs_of_all_openings_add_up_to_nothing(slits):
    assert sum(openings.sign(name, slits) for name in openings.names(slits)) == 0


def test_the_fullest_opening_is_added():
    assert [openings.sign(name, len(name)) for name in ("AB", "ABC", "ABCD", "ABCDE")] == [1, 1, 1, 1]


@pytest.mark.parametrize("wrong", ["BA", "F", "", "AA", "ab"])
def test_a_name_out_of_order_or_unknown_is_refused(wrong):
    with pytest.raises(ValueError, match=r"in order|substring"):
        openings.mask(wrong)


@pytest.mark.parametrize("slits", [1, 6])
def test_a_mask_has_two_to_five_slits(slits):
    with pytest.raises(ValueError, match="two to five"):
        openings.names(slits)
