"""The worked example of RFC 3797 (Publicly Verifiable Nominations Committee Random Selection, 2004).

It shows that the order of the steps that this program takes as well - publish the numbered list and the method, name
public sources, join what they give into a key, hash the key with a counter - is understood as the standard means it. The
program itself uses SHA-256 and ChaCha20; MD5 stands here because the example does.
"""

from __future__ import annotations

import hashlib

# RFC 3797: the sources 9319 (a lottery), 2 5 8 10 12 and 9 18 26 34 41 45, each list sorted and ended by "/", and what
# is picked from a pool of 25.
KEY = "9319./2.5.8.10.12./9.18.26.34.41.45./"
POOL = 25
PICKED = [17, 7, 2, 16, 25, 23, 8, 24, 19, 13, 22]


def rfc3797_key(sources: list[list[int]]) -> str:
    """Return the key: the numbers of each source in ascending order, each with a full stop, each source with a slash."""
    return "".join("".join(f"{number}." for number in sorted(source)) + "/" for source in sources)


def rfc3797_picks(key: str, pool: int, count: int) -> list[int]:
    """Return who is picked: the MD5 of counter, key, counter (16 bits each), modulo the number of those left."""
    left = list(range(1, pool + 1))
    picks = []
    for turn in range(count):
        counter = turn.to_bytes(2, "big")
        number = int.from_bytes(hashlib.md5(counter + key.encode() + counter).digest(), "big")
        picks.append(left.pop(number % len(left)))
    return picks


def test_the_key_is_joined_as_in_the_example() -> None:
    assert rfc3797_key([[9319], [2, 5, 12, 8, 10], [9, 18, 26, 34, 41, 45]]) == KEY


def test_the_picks_are_those_of_the_example() -> None:
    assert rfc3797_picks(KEY, POOL, len(PICKED)) == PICKED


def test_a_changed_sign_of_the_key_changes_the_picks() -> None:
    assert rfc3797_picks(KEY.replace("9319", "9318"), POOL, len(PICKED)) != PICKED
