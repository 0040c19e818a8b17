"""The generator against published vectors, a library and plain Python."""

from __future__ import annotations

import numpy as np
import pytest
from plain_philox import block_of, philox

from mcx.machine.philox import fill_words

# Salmon, Moraes, Dror & Shaw (2011), SC'11; known answers of the generator's reference distribution, tests/kat_vectors.
KNOWN = [
    ("00000000 00000000 00000000 00000000", "00000000 00000000", "6627e8d5 e169c58d bc57ac4c 9b00dbd8"),
    ("ffffffff ffffffff ffffffff ffffffff", "ffffffff ffffffff", "408f276d 41c83b0e a20bc7c6 6d5451fd"),
    ("243f6a88 85a308d3 13198a2e 03707344", "a4093822 299f31d0", "d16cfe09 94fdcceb 5001e420 24126ea1"),
]


def numbers_of(text: str) -> list[int]:
    return [int(word, 16) for word in text.split()]


def blocks(numbers: list[int], seed: int, block: int, stream: int) -> np.ndarray:
    """The kernel's words, (4, lanes), as unsigned numbers."""
    words = np.empty((4, len(numbers)), dtype=np.int32)
    fill_words(words, np.array(numbers, dtype=np.uint64), np.uint64(seed), np.uint64(block), np.uint64(stream))
    return words.astype(np.int64) + 2**31


@pytest.mark.parametrize(("counter", "key", "answer"), KNOWN)
def test_known_answers(counter: str, key: str, answer: str):
    """Every lane of the kernel gives the published block."""
    c, k = numbers_of(counter), numbers_of(key)
    found = blocks([c[0] | c[1] << 32] * 64, k[0] | k[1] << 32, c[2], c[3])
    assert found.T.tolist() == [numbers_of(answer)] * 64


@pytest.mark.parametrize("counter", [0, 2**256 - 1, 0x243F6A8885A308D313198A2E03707344A4093822299F31D0082EFA98EC4E6C89])
def test_plain_twin_is_the_library_s(counter: int):
    """In 64 bits the tests' own Philox is numpy's, which adds 1 to the counter before it makes a block."""
    words = [counter >> 64 * k & (2**64 - 1) for k in range(4)]
    key = [0x452821E638D01377, 0xBE5466CF34E90C6C]
    library = np.random.Philox(counter=(counter - 1) % 2**256, key=key[0] | key[1] << 64)
    assert list(philox(64, words, key)) == library.random_raw(4).tolist()


def test_kernel_is_the_plain_twin():
    """In 32 bits, on counters that use every word, the kernel and plain Python give the same blocks."""
    rng = np.random.default_rng(4470981236655)
    for _ in range(4):
        seed, *numbers = (int(number) for number in rng.integers(0, 2**64, 65, dtype=np.uint64))
        block, stream = (int(number) for number in rng.integers(0, 2**32, 2))
        expected = [block_of(seed, number, block, stream) for number in numbers]
        assert blocks(numbers, seed, block, stream).T.tolist() == [list(words) for words in expected]
