from __future__ import annotations

from hashlib import blake2b

import numpy as np
import pytest

from simulators.draws import generator


@pytest.mark.parametrize("number", [0, 1, 123_456_789, 2**64 - 1])
def test_a_draw_is_that_of_the_librarys_own_generator_of_the_same_key_and_counter(number: int) -> None:
    key = int.from_bytes(blake2b(b"7/counter", digest_size=16).digest(), "little")
    library = np.random.Generator(np.random.Philox(key=key, counter=number << 192))

    assert generator(7, "counter", number).random(20).tolist() == library.random(20).tolist()


def test_seeds_uses_and_numbers_draw_apart() -> None:
    drawn = {
        generator(*of).random()
        for of in ((7, "counter", 1), (8, "counter", 1), (7, "mask", 1), (7, "counter", 2))
    }

    assert len(drawn) == 4
