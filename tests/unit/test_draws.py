"""Uniforms per seed, name and trial (rule R19)."""

from __future__ import annotations

from hashlib import blake2b

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from schemesim.engine.draws import MAX_TRIAL, uniform, uniforms
from schemesim.errors import InputError

MASK = 2**64 - 1


def philox_4x64_10(counter: int, key: int) -> list[int]:
    """Philox by its published definition (Salmon et al. 2011), written here a second time."""
    c = [(counter >> 64 * i) & MASK for i in range(4)]
    k = [key & MASK, key >> 64]
    for _ in range(10):
        left, right = 0xD2E7470EE14C6C93 * c[0], 0xCA5A826395121157 * c[2]
        c = [(right >> 64) ^ c[1] ^ k[0], right & MASK, (left >> 64) ^ c[3] ^ k[1], left & MASK]
        k = [(k[0] + 0x9E3779B97F4A7C15) & MASK, (k[1] + 0xBB67AE8584CAA73B) & MASK]
    return c


def joined(*words: int) -> int:
    return sum(word << 64 * i for i, word in enumerate(words))


PI_COUNTER = joined(0x243F6A8885A308D3, 0x13198A2E03707344, 0xA4093822299F31D0, 0x082EFA98EC4E6C89)
PI_KEY = joined(0x452821E638D01377, 0xBE5466CF34E90C6C)


@pytest.mark.parametrize(
    ("counter", "key", "words"),
    [
        # Known-answer vectors published with the Random123 library (from memory).
        (0, 0, "16554d9eca36314c db20fe9d672d0fdc d7e772cee186176b 7e68b68aec7ba23b"),
        (2**256 - 1, 2**128 - 1, "87b092c3013fe90b 438c3c67be8d0224 9cc7d7c69cd777b6 a09caebf594f0ba0"),
        (PI_COUNTER, PI_KEY, "a528f45403e61d95 38c72dbd566e9788 a5a1610e72fd18b5 57bd43b5e52b7fe6"),
    ],
)
def test_philox_is_the_published_one(counter: int, key: int, words: str) -> None:
    expected = [int(word, 16) for word in words.split()]
    assert philox_4x64_10(counter, key) == expected
    numpy_counts_first = np.random.Philox(counter=(counter - 1) % 2**256, key=key)
    assert [int(word) for word in numpy_counts_first.random_raw(4)] == expected


def test_advance_steps_by_four_words() -> None:
    whole = np.random.Philox(key=5).random_raw(40)
    for steps in range(9):
        source = np.random.Philox(key=5)
        source.advance(steps)
        assert (source.random_raw(4) == whole[4 * steps : 4 * steps + 4]).all()


def test_a_generator_takes_one_word_per_uniform() -> None:
    words = np.random.Philox(key=5).random_raw(10)
    floats = np.random.Generator(np.random.Philox(key=5)).random(10)
    assert floats.tolist() == [(int(word) >> 11) / 2**53 for word in words]


@given(st.integers(0, 2**70), st.text(max_size=12), st.integers(0, MAX_TRIAL))
def test_r19_the_promise_word_for_word(seed: int, name: str, trial: int) -> None:
    text = format(seed, "x").encode() + b"\0" + name.encode()
    digest = blake2b(text, digest_size=16, person=b"schemesim/draws1").digest()
    word = philox_4x64_10(trial // 4 + 1, int.from_bytes(digest, "little"))[trial % 4]
    assert uniform(seed, name, trial) == (word >> 11) / 2**53


@given(st.integers(0, 99), st.text(max_size=5), st.integers(0, 10**12), st.integers(0, 12))
def test_r19_many_at_once_are_those_one_by_one(seed: int, name: str, start: int, count: int) -> None:
    many = uniforms(seed, name, start, count)
    assert many.dtype == np.float64
    assert many.tolist() == [uniform(seed, name, start + i) for i in range(count)]


@settings(max_examples=30)
@given(st.lists(st.integers(0, 9), min_size=1, max_size=8))
def test_r19_any_split_of_the_trials_gives_the_same(chunks: list[int]) -> None:
    parts, start = [], 0
    for count in chunks:
        parts.append(uniforms(3, "CB1", start, count))
        start += count
    assert np.concatenate(parts).tolist() == uniforms(3, "CB1", 0, start).tolist()


def test_r19_order_of_asking_changes_nothing_and_no_shared_state_moves() -> None:
    names = ["a", "b", "c"]
    there = {name: uniform(1, name, 4) for name in names}
    np.random.seed(1)
    before = np.random.random()
    np.random.seed(1)
    back = {name: uniform(1, name, 4) for name in reversed(names)}
    assert back == there
    assert np.random.random() == before


def test_seeds_names_and_trials_are_kept_apart() -> None:
    pairs = [(1, "1a"), (0x11, "a"), (1, "a"), (1, "a "), (1, "A"), (2, "a"), (1, ""), (1, "\0a"), (1, "a\0")]
    values = [uniform(seed, name, trial) for seed, name in pairs for trial in range(8)]
    assert len(set(values)) == len(values)


def test_flat_and_unrelated_between_names_within_five_standard_errors() -> None:
    count = 20_000
    first, second = uniforms(11, "CB1", 0, count), uniforms(11, "CB2", 0, count)
    assert first.min() >= 0.0
    assert first.max() < 1.0
    bins = np.bincount((first * 20).astype(int), minlength=20)
    assert abs(bins - count / 20).max() < 5 * (count / 20 * 0.95) ** 0.5
    # Of independent uniforms the centred product has mean 0 and standard deviation 1/12.
    assert abs(((first - 0.5) * (second - 0.5)).mean()) < 5 / 12 / count**0.5
    assert abs(((first[1:] - 0.5) * (first[:-1] - 0.5)).mean()) < 5 / 12 / count**0.5


def test_whole_numbers_of_numpy_are_taken_and_huge_seeds_too() -> None:
    numpy_seed: int = np.int64(3)  # type: ignore[assignment]  # what a user's array hands over
    assert uniform(numpy_seed, "a", 1) == uniform(3, "a", 1)
    assert 0.0 <= uniform(10**6000, "a", 1) < 1.0


@pytest.mark.parametrize("seed", [-1, 1.0, float("nan"), True, None, "3"])
def test_a_bad_seed_is_refused(seed: int) -> None:
    with pytest.raises(InputError, match=r"^seed: got .* expected a whole number of zero or more$"):
        uniform(seed, "a", 0)


def test_all_mistakes_come_at_once() -> None:
    nameless: str = None  # type: ignore[assignment]  # the mistake under test
    with pytest.raises(InputError) as caught:
        uniforms(-1, nameless, MAX_TRIAL + 1, -2)
    subjects = [problem.subject for problem in caught.value.problems]
    assert subjects == ["seed", "trial", "count of trials", "name of a draw"]
