"""Random bits: the keystream of RFC 8439, exact bounded integers, permutations and subsets, and their biased twins.

Wherever a method can be put through all words that it may be given, its law is counted exactly; the few statistical tests
are there for the whole, with the stream's real bits.
"""

from __future__ import annotations

import io
import itertools
import random
import tokenize
import unicodedata
from collections import Counter
from collections.abc import Callable
from math import comb, factorial
from pathlib import Path

import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st
from numpy.typing import NDArray

import core.stream
from core.stream import Bits, make_key
from tests.conftest import _states
from tests.tools import Verdict, chi_square

ROOT = Path(core.stream.__file__).parent.parent
ASCENDING = bytes(range(32))

# --- the keystream ---------------------------------------------------------------------------------------------

# RFC 8439 (June 2018): key, nonce, block counter, keystream block. A.1 is appendix A.1, numbered as there.
VECTORS = {
    "A.1 #1": (
        bytes(32),
        "00" * 12,
        0,
        "76b8e0ada0f13d90405d6ae55386bd28bdd219b8a08ded1aa836efcc8b770dc7"
        "da41597c5157488d7724e03fb8d84a376a43b8f41518a11cc387b669b2ee6586",
    ),
    "A.1 #2": (
        bytes(32),
        "00" * 12,
        1,
        "9f07e7be5551387a98ba977c732d080dcb0f29a048e3656912c6533e32ee7aed"
        "29b721769ce64e43d57133b074d839d531ed1f28510afb45ace10a1f4b794d6f",
    ),
    "A.1 #3": (
        bytes(31) + b"\1",
        "00" * 12,
        1,
        "3aeb5224ecf849929b9d828db1ced4dd832025e8018b8160b82284f3c949aa5a"
        "8eca00bbb4a73bdad192b5c42f73f2fd4e273644c8b36125a64addeb006c13a0",
    ),
    "A.1 #4": (
        b"\0\xff" + bytes(30),
        "00" * 12,
        2,
        "72d54dfbf12ec44b362692df94137f328fea8da73990265ec1bbbea1ae9af0ca"
        "13b25aa26cb4a648cb9b9d1be65b2c0924a66c54d545ec1b7374f4872e99f096",
    ),
    "A.1 #5": (
        bytes(32),
        "00" * 11 + "02",
        0,
        "c2c64d378cd536374ae204b9ef933fcd1a8b2288b3dfa49672ab765b54ee27c7"
        "8a970e0e955c14f3a88e741b97c286f75f8fc299e8148362fa198a39531bed6d",
    ),
    "2.3.2": (
        ASCENDING,
        "000000090000004a00000000",
        1,
        "10f1e7e4d13b5915500fdd1fa32071c4c7d1f4c733c068030422aa9ac3d46c4e"
        "d2826446079faa0914c2d705d98b02a2b5129cd1de164eb9cbd083e8a2503c4e",
    ),
    "2.4.2 first block": (
        ASCENDING,
        "000000000000004a00000000",
        1,
        "224f51f3401bd9e12fde276fb8631ded8c131f823d2c06e27e4fcaec9ef3cf78"
        "8a3b0aa372600a92b57974cded2b9334794cba40c63e34cdea212c4cf07d41b7",
    ),
    "2.4.2 second block": (
        ASCENDING,
        "000000000000004a00000000",
        2,
        "69a6749f3f630f4122cafe28ec4dc47e26d4346d70b98c73f3e9c53ac40c5945398b6eda1a832c89c167eacd901d7e2bf363",
    ),
}


@pytest.mark.parametrize(("key", "nonce", "counter", "keystream"), VECTORS.values(), ids=VECTORS)
def test_bits_are_the_keystream_of_rfc_8439(key: bytes, nonce: str, counter: int, keystream: str) -> None:
    """The number of the draw's block is the nonce, read as a little-endian integer; the counter begins at 0."""
    bits = Bits(key, int.from_bytes(bytes.fromhex(nonce), "little"))
    words = bits.words(8 * (counter + 1))[8 * counter :]
    assert words.astype("<u8").tobytes()[: len(keystream) // 2].hex() == keystream


def test_words_follow_each_other_however_they_are_asked_for() -> None:
    whole = Bits(ASCENDING, 5).words(1000)
    bits = Bits(ASCENDING, 5)
    pieces = [bits.words(count) for count in (0, 1, 7, 400, 592)]
    assert (np.concatenate(pieces) == whole).all()
    assert whole.dtype == np.uint64


def test_half_words_are_used_once_each() -> None:
    """32-bit words come in pieces of the same keystream and none comes twice."""
    bits = Bits(ASCENDING, 5)
    first = bits._half_words(3)
    rest = bits._half_words(2 * core.stream._WORDS_AT_ONCE - 3)
    stream = Bits(ASCENDING, 5).words(core.stream._WORDS_AT_ONCE)
    assert np.concatenate([first, rest]).astype("<u4").tobytes() == stream.astype("<u8").tobytes()
    assert len(bits._half_words(10)) == 10


def test_same_block_same_bits_and_other_blocks_others() -> None:
    numbers = [0, 1, 2, 255, 256, 2**31, 2**32, 2**64 + 1, 2**96 - 1]
    heads = [tuple(Bits(ASCENDING, number).words(4).tolist()) for number in numbers]
    assert heads == [tuple(Bits(ASCENDING, number).words(4).tolist()) for number in numbers]
    assert len(set(itertools.chain(*heads))) == 4 * len(numbers)
    assert heads[0] != tuple(Bits(bytes(32), 0).words(4).tolist())


@pytest.mark.parametrize("number", [-1, 2**96])
def test_a_block_beyond_the_nonce_is_refused(number: int) -> None:
    with pytest.raises(OverflowError):
        Bits(ASCENDING, number)


def _collisions(firsts: list[int]) -> int:
    return len(firsts) - len(set(firsts))


@pytest.mark.statistical
def test_blocks_do_not_share_their_bits(verdict: Verdict) -> None:
    """Two of 4,096 blocks begin alike with probability below 4096^2 / 2 / 2^64 < 1e-12.

    Twin: each block seeded from 16 bits. Blocks begin alike as often as seeds meet: about 128 times.
    """
    firsts = [int(Bits(ASCENDING, number).words(1)[0]) for number in range(4096)]
    verdict.fair(1.0 if _collisions(firsts) == 0 else 0.0)
    seeds = Bits(bytes(32), 0).below(np.full(4096, 1 << 16))
    twins = [int(Bits(ASCENDING, int(seed)).words(1)[0]) for seed in seeds]
    assert _collisions(twins) > 50, "the reseeding twin is not caught"


# --- the key ---------------------------------------------------------------------------------------------------


def test_key_is_fixed_for_ever() -> None:
    """Worked out by hand from the docstring: SHA-256 over length-prefixed texts."""
    import hashlib

    texts = ["lotwright stream 1", "draw", "ab12", "Ann", "seven", "Bob", "\u00e9t\u00e9"]
    joined = b"".join(len(text.encode()).to_bytes(8, "big") + text.encode() for text in texts)
    assert make_key("draw", "ab12", [("Bob", "e\u0301te\u0301"), ("Ann", "seven")]) == hashlib.sha256(joined).digest()


def test_no_two_joins_of_texts_meet() -> None:
    """The same letters cut at other places, moved between label, digest, names and texts, or left out."""
    stated = [
        ("a", "bc", []),
        ("ab", "c", []),
        ("abc", "", []),
        ("", "abc", []),
        ("a", "b", [("c", "")]),
        ("a", "b", [("", "c")]),
        ("a", "", [("b", "c")]),
        ("a", "bc", [("", "")]),
        ("a", "bc", [("", ""), ("", "")]),
        ("a", "b", [("c", "d"), ("e", "f")]),
        ("a", "b", [("cd", ""), ("e", "f")]),
        ("a", "b", [("c", "de"), ("", "f")]),
        ("a", "b", [("c", "d\x00e"), ("f", "")]),
        ("a", "b", [("c", "d"), ("e", "")]),
        ("a\x00", "b", []),
        ("a", "\x00b", []),
        ("a", "b", [("c", "7 ")]),
        ("a", "b", [("c", "7")]),
        ("a", "b", [("c", "7\n")]),
    ]
    assert len({make_key(*each) for each in stated}) == len(stated)


@given(st.lists(st.tuples(st.text(max_size=3), st.text(max_size=3)), max_size=4, unique_by=lambda party: party[0]))
@example([("e\u0301", "1"), ("f", "2")])
@example([("\u212b", "1"), ("B", "2")])
def test_key_does_not_depend_on_the_order_or_form_of_the_parties(parties: list[tuple[str, str]]) -> None:
    """Composed or decomposed, in whatever order: the same parties give the same key."""

    def form(name: str) -> list[tuple[str, str]]:
        return [(unicodedata.normalize(name, who), unicodedata.normalize(name, text)) for who, text in parties]

    keys = {make_key("draw", "ab", each) for each in (parties, parties[::-1], form("NFC"), form("NFD"))}
    assert len(keys) == 1


def test_labels_keep_streams_apart() -> None:
    keys = {make_key(label, digest) for label in ("draw", "pilot") for digest in ("a", "b")}
    assert len(keys) == 4
    assert all(len(key) == 32 for key in keys)


# --- below: exact bounded integers -----------------------------------------------------------------------------


class _Given(Bits):
    """Bits whose 32-bit words are given first; then come `spare` ones."""

    def __init__(self, words: NDArray[np.uint32], spare: int) -> None:
        self.given: NDArray[np.uint32] | None = words
        self.spare, self.redrawn = spare, 0

    def _half_words(self, count: int) -> NDArray[np.uint32]:
        if self.given is not None:
            words, self.given = self.given, None
            assert len(words) == count
            return words
        self.redrawn += count
        return np.full(count, self.spare, np.uint32)


def _accepted(method: Callable[[_Given, NDArray[np.int64]], NDArray[np.int64]], bound: int) -> list[int]:
    """Return for each t < bound how many of the 2^32 words `below` accepts and turns into t.

    The words with (word x bound) >> 32 = t are a range; its low products ascend by `bound`, so that all but the first
    have a low product of at least `bound` and are accepted whatever the threshold: to try the first two, and the last, of
    each range is to try all of them.
    """
    starts = np.array([-(-(t << 32) // bound) for t in range(bound + 1)], np.int64)
    numbers = np.diff(starts)
    assert numbers.min() >= 3, "the bound is too large to be counted so"
    values, spare = np.arange(bound), int(starts[1] - 1)
    refused = np.zeros(bound, np.int64)
    for words in (starts[:-1], starts[:-1] + 1, starts[1:] - 1):
        # refused words are drawn again as a word for t = 0; t = 0 itself is told by the number drawn again
        bits = _Given(words.astype(np.uint32), spare)
        found = method(bits, np.full(bound, bound, np.int64))
        again = found != values
        assert (found[again] == 0).all()
        again[0] = bits.redrawn > again.sum()
        assert again.sum() == bits.redrawn
        refused += again
    return (numbers - refused).tolist()


BOUNDS = [2, 3, 5, 6, 7, 10, 48, 100, 255, 641, 1000, 4096, 65535, 65536, 65537, 99991]


@pytest.mark.parametrize("bound", [1, *BOUNDS])
def test_below_accepts_as_many_words_for_each_value(bound: int) -> None:
    """All 2^32 words counted: floor(2^32 / bound) for each value (Lemire 2019, ACM TOMACS 29:1)."""
    assert set(_accepted(Bits.below, bound)) == {2**32 // bound}


def test_multiplying_without_rejecting_is_caught() -> None:
    def twin(bits: _Given, bounds: NDArray[np.int64]) -> NDArray[np.int64]:
        return (bits._half_words(bounds.size).astype(np.int64) * bounds) >> 32

    assert {bound for bound in BOUNDS if len(set(_accepted(twin, bound))) == 1} == {2, 4096, 65536}


@pytest.mark.parametrize("bound", [2**31 + 1, 3 * 2**30, 2**32 - 1])
def test_below_with_large_bounds(bound: int) -> None:
    """Each value has one or two words; exactly one of them is accepted. Tried on values from the whole range."""
    values = sorted({*range(200), *(bound * k // 300 for k in range(300)), *range(bound - 200, bound)})
    threshold = 2**32 % bound
    for t in values:
        words = range(-(-(t << 32) // bound), -(-((t + 1) << 32) // bound))
        kept = [word for word in words if (word * bound) % 2**32 >= threshold]
        assert len(kept) == 1
        for word in words:
            bits = _Given(np.array([word], np.uint32), 2**32 - 1)
            found = int(Bits.below(bits, np.array([bound]))[0])
            assert bits.redrawn == (word not in kept)
            assert word not in kept or found == t


def test_below_takes_any_shape_and_bounds_of_many_sizes() -> None:
    bounds = np.array([[1, 2, 3], [2**32 - 1, 7, 2**20]])
    rows = np.stack([Bits(ASCENDING, number).below(bounds) for number in range(500)])
    assert rows.shape == (500, 2, 3)
    assert rows.dtype == np.int64
    assert (rows >= 0).all()
    assert (rows < bounds).all()
    assert Bits(ASCENDING, 0).below(np.empty(0, np.int64)).shape == (0,)


@pytest.mark.statistical
def test_below_is_even(bits: Callable[[int], Bits], verdict: Verdict) -> None:
    """Bound 3 x 2^30: the remainder of a 32-bit word is below 2^30 half of the time (fair: a third).

    Twins: the remainder; and the product's high word without rejecting, which is 0 modulo 3 half of the time.
    """
    bound, draws = 3 << 30, 300_000
    found = bits(0).below(np.full(draws, bound, np.int64))
    # both cuts at once: which third, and which remainder
    verdict.fair(chi_square(np.bincount(found // (1 << 30) * 3 + found % 3, minlength=9).tolist()))
    words = bits(1)._half_words(draws).astype(np.int64)
    Verdict.biased(chi_square(np.bincount(words % bound // (1 << 30), minlength=3).tolist()))
    Verdict.biased(chi_square(np.bincount(((words * bound) >> 32) % 3, minlength=3).tolist()))


# --- shuffles --------------------------------------------------------------------------------------------------


class _Keys(Bits):
    """Bits whose 64-bit words are given, then all different."""

    def __init__(self, words: list[int]) -> None:
        self.given, self.asked = words, []

    def words(self, count: int) -> NDArray[np.uint64]:
        self.asked.append(count)
        if self.given:
            words, self.given = self.given, []
            assert len(words) == count
            return np.array(words, np.uint64)
        return np.arange(count, dtype=np.uint64)


def test_rows_with_equal_keys_are_drawn_again() -> None:
    keys = [[5, 3, 4], [7, 7, 1], [2, 9, 9], [0, 2**64 - 1, 1], [6, 6, 6]]
    bits = _Keys(list(itertools.chain(*keys)))
    found = bits.shuffles(5, 3)
    assert bits.asked == [15, 9], "the tied rows, each as a whole, and no others"
    assert found[[0, 3]].tolist() == [[1, 2, 0], [0, 2, 1]]
    assert found[[1, 2, 4]].tolist() == [[0, 1, 2]] * 3


@pytest.mark.parametrize("size", [1, 2, 3, 4])
def test_shuffles_over_all_keys(size: int) -> None:
    """All rows of keys from 0 to 4: each permutation comes from binomial(5, size) rows without ties, no more.

    Twin: without drawing again, ties go to a fixed order, which is likelier then.
    """
    rows = list(itertools.product(range(5), repeat=size))
    untied = np.array([len(set(row)) == size for row in rows])
    bits = _Keys(list(itertools.chain(*rows)))
    found = bits.shuffles(len(rows), size)
    counts = Counter(map(tuple, found[untied].tolist()))
    assert set(counts.values()) == {comb(5, size)}
    assert len(counts) == factorial(size)
    assert sum(bits.asked[1:]) == size * int((~untied).sum())
    twin = Counter(map(tuple, np.argsort(np.array(rows), axis=1, kind="stable").tolist()))
    assert size == 1 or len(set(twin.values())) > 1


@pytest.mark.statistical
def test_shuffles_are_even(bits: Callable[[int], Bits], verdict: Verdict) -> None:
    """All 120 orders of 5. Twin: each position swapped with any other (n^n ways for n! orders)."""
    draws = 60_000

    def counts(rows: NDArray[np.int64]) -> list[int]:
        seen = Counter(map(tuple, rows.tolist()))
        return [seen[order] for order in itertools.permutations(range(5))]

    verdict.fair(chi_square(counts(bits(0).shuffles(draws, 5))))
    twin = np.tile(np.arange(5), (draws, 1))
    others = bits(1).below(np.full((draws, 5), 5))
    every = np.arange(draws)
    for place in range(5):
        other = others[:, place]
        twin[every, place], twin[every, other] = twin[every, other].copy(), twin[every, place].copy()
    Verdict.biased(chi_square(counts(twin)))


def test_shuffles_of_nothing() -> None:
    assert Bits(ASCENDING, 0).shuffles(0, 5).shape == (0, 5)
    assert Bits(ASCENDING, 0).shuffles(4, 0).shape == (4, 0)
    assert Bits(ASCENDING, 0).shuffles(3, 1).tolist() == [[0]] * 3


# --- subsets ---------------------------------------------------------------------------------------------------


class _Below(Bits):
    """Bits whose bounded integers go through all combinations, one in each row."""

    def __init__(self) -> None:
        self.bounds: NDArray[np.int64] | None = None

    def below(self, bounds: NDArray[np.int64]) -> NDArray[np.int64]:
        self.bounds = bounds
        choices = list(itertools.product(*map(range, bounds[0].tolist())))
        assert len(choices) == len(bounds)
        return np.array(choices, np.int64).reshape(bounds.shape)


@pytest.mark.parametrize(("size", "count"), [(5, 1), (5, 2), (5, 3), (6, 4), (5, 5), (7, 3)])
def test_floyds_method_over_all_choices(size: int, count: int) -> None:
    """Bentley and Floyd 1987 (CACM 30:9): every subset from equally many of the size! / (size - count)! choices."""
    ways = factorial(size) // factorial(size - count)
    found = _Below().subsets(size, np.full(ways, count))
    subsets = Counter(frozenset(row) for row in found.tolist())
    assert {len(subset) for subset in subsets} == {count}
    assert set().union(*subsets) == set(range(size))
    assert len(subsets) == comb(size, count)
    assert set(subsets.values()) == {ways // comb(size, count)}


@pytest.mark.parametrize("size", [5, 17, 40])
def test_subsets_have_the_sizes_asked_for(size: int) -> None:
    """Floyd's method for 5, the head of a permutation for 17 and 40; rows of all sizes in one batch."""
    counts = np.arange(size + 1).repeat(20)
    found = Bits(ASCENDING, 1).subsets(size, counts)
    assert found.shape == (len(counts), size)
    for row, count in zip(found.tolist(), counts.tolist(), strict=True):
        assert row[count:] == [-1] * (size - count)
        assert len(set(row[:count])) == count
        assert all(0 <= unit < size for unit in row[:count])
    assert Bits(ASCENDING, 1).subsets(size, np.zeros(3, np.int64)).shape == (3, 0)


@pytest.mark.statistical
@pytest.mark.parametrize(
    ("size", "count", "longest"),
    [(5, 2, 2), (5, 2, 5), (17, 2, 17), (17, 15, 17)],
    ids=["alone", "mixed", "head", "most"],
)
def test_subsets_are_even(bits: Callable[[int], Bits], verdict: Verdict, size: int, count: int, longest: int) -> None:
    """All subsets of `count`, in a batch whose largest row decides the method: Floyd for 5, a permutation for 17.

    Twin: repairing. Independent picks (of those left out, if fewer); one already taken moves on to the next free unit.
    """
    draws = max(200 * comb(size, count), 20_000)
    subsets = list(itertools.combinations(range(size), count))

    def counts(rows: list[list[int]]) -> list[int]:
        seen = Counter(tuple(sorted(row[:count])) for row in rows)
        assert set(seen) <= set(subsets)
        return [seen[subset] for subset in subsets]

    found = bits(0).subsets(size, np.array([*[count] * draws, longest]))
    verdict.fair(chi_square(counts(found[:draws].tolist())))
    few = min(count, size - count)
    twins = []
    for row in bits(1).below(np.full((draws, few), size)).tolist():
        taken: list[int] = []
        for unit in row:
            while unit in taken:
                unit = (unit + 1) % size
            taken.append(unit)
        twins.append(taken if few == count else [unit for unit in range(size) if unit not in taken])
    Verdict.biased(chi_square(counts(twins)))


# --- no other generator ------------------------------------------------------------------------------------------

GENERATORS = {
    "random",
    "secrets",
    "default_rng",
    "urandom",
    "SystemRandom",
    "uuid4",
    "uuid1",
    "getrandbits",
}


def _names(text: str) -> set[str]:
    """Return the names in a program's text, its comments and strings left aside."""
    tokens = tokenize.generate_tokens(io.StringIO(text).readline)
    return {token.string for token in tokens if token.type == tokenize.NAME}


def test_no_other_file_names_a_generator() -> None:
    files = [path for room in ("core", "gui") for path in sorted((ROOT / room).rglob("*.py"))]
    assert len(files) > 30
    found = {str(path.relative_to(ROOT)): _names(path.read_text("utf-8")) & GENERATORS for path in files}
    assert {name: names for name, names in found.items() if names} == {}


@pytest.mark.parametrize(
    "text", ["import random", "np.random.default_rng(1)", "from os import urandom", "x = secrets.token_hex()"]
)
def test_a_planted_generator_is_found(text: str) -> None:
    assert _names(text) & GENERATORS


def test_only_the_stream_has_the_cipher() -> None:
    files = [path for room in ("core", "gui") for path in sorted((ROOT / room).rglob("*.py"))]
    named = [path.name for path in files if "ChaCha20" in _names(path.read_text("utf-8"))]
    assert named == ["stream.py"]


def test_the_guard_of_all_tests_sees_a_global_generator_move() -> None:
    """The autouse fixture of tests/conftest.py compares these states before and after every test."""
    for module, move in ((random, random.random), (np.random, np.random.random)):
        kept, before = (random.getstate(), np.random.get_state()), _states()  # noqa: NPY002
        assert _states() == before
        move()
        assert _states() != before, module.__name__
        random.setstate(kept[0])
        np.random.set_state(kept[1])  # noqa: NPY002
        assert _states() == before
