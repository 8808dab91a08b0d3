"""Random bits: the only file of the program that makes them.

A draw's bits are the ChaCha20 keystream (RFC 8439) under a key that is the SHA-256 of everything public: the format,
the sheet's (or frozen) digest and the seed texts. Block number b of a draw reads the keystream with nonce b, so its
bits depend on its number alone: any worker may compute any block, in any order, years later.
"""

from __future__ import annotations

import hashlib
import unicodedata
from collections.abc import Iterable

import numpy as np
from cryptography.hazmat.primitives.ciphers import Cipher
from cryptography.hazmat.primitives.ciphers.algorithms import ChaCha20
from numpy.typing import NDArray

FORMAT = "lotwright stream 1"
_WORDS_AT_ONCE = 1 << 12


def make_key(label: str, digest: str, parties: Iterable[tuple[str, str]] = ()) -> bytes:
    """Return the 32-byte key of a stream.

    Each text is NFC, UTF-8 and length-prefixed, so that no two different inputs join to the same bytes; parties are
    taken in the order of their names. `label` keeps streams apart ("draw", "pilot", ...).
    """
    texts = [FORMAT, label, digest]
    for party in sorted((_normal(name), _normal(text)) for name, text in parties):
        texts += party
    joined = hashlib.sha256()
    for text in texts:
        data = _normal(text).encode()
        joined.update(len(data).to_bytes(8, "big"))
        joined.update(data)
    return joined.digest()


def _normal(text: str) -> str:
    return unicodedata.normalize("NFC", text)


class Bits:
    """The bits of one block: consumed in order, never twice.

    Parameters
    ----------
    key
        32 bytes, from `make_key`.
    block
        Number of the block, 0 <= block < 2^96; the nonce.
    """

    def __init__(self, key: bytes, block: int) -> None:
        nonce = bytes(4) + block.to_bytes(12, "little")
        self._keystream = Cipher(ChaCha20(key, nonce), mode=None).encryptor()
        self._halves: NDArray[np.uint32] = np.empty(0, np.uint32)

    def words(self, count: int) -> NDArray[np.uint64]:
        """Return `count` independent uniform 64-bit words."""
        return np.frombuffer(self._keystream.update(bytes(8 * count)), dtype="<u8").astype(np.uint64, copy=False)

    def _half_words(self, count: int) -> NDArray[np.uint32]:
        if count > len(self._halves):
            fresh = max(_WORDS_AT_ONCE, (count + 1) // 2)
            more = np.frombuffer(self._keystream.update(bytes(8 * fresh)), dtype="<u4").astype(np.uint32, copy=False)
            self._halves = np.concatenate([self._halves, more])
        taken, self._halves = self._halves[:count], self._halves[count:]
        return taken

    def below(self, bounds: NDArray[np.int64]) -> NDArray[np.int64]:
        """Return for each bound m an exactly uniform integer 0 <= t < m.

        Multiply-and-reject (Lemire 2019): exact, no modulo bias. Bounds are from 1 to 2^32 - 1, any shape.
        """
        flat = bounds.reshape(-1).astype(np.uint64)
        result = np.empty(flat.shape, np.int64)
        todo: NDArray[np.int64] | None = None
        limit = np.uint64(1 << 32)
        while todo is None or todo.size:
            wanted = flat if todo is None else flat[todo]
            product = self._half_words(wanted.size).astype(np.uint64) * wanted
            low = product & np.uint64(0xFFFFFFFF)
            accepted = low >= wanted
            if not accepted.all():
                # only low words below the bound need the exact threshold (2^32 mod m)
                doubtful = np.flatnonzero(~accepted)
                threshold = (limit - wanted[doubtful]) % wanted[doubtful]
                accepted[doubtful] = low[doubtful] >= threshold
            values = (product >> np.uint64(32)).astype(np.int64)
            if todo is None:
                result[:] = values
                todo = np.flatnonzero(~accepted)
            else:
                result[todo[accepted]] = values[accepted]
                todo = todo[~accepted]
        return result.reshape(bounds.shape)

    def shuffles(self, rows: int, size: int) -> NDArray[np.int64]:
        """Return `rows` independent uniform permutations of 0..size-1, shape (rows, size).

        Each row sorts `size` 64-bit keys; a row in which two keys are equal is drawn again as a whole, so that the
        order of the keys is exactly uniform.
        """
        result = np.empty((rows, size), np.int64)
        todo = np.arange(rows)
        while todo.size:
            keys = self.words(todo.size * size).reshape(todo.size, size)
            order = np.argsort(keys, axis=1)
            in_order = np.take_along_axis(keys, order, axis=1)
            tied = (in_order[:, 1:] == in_order[:, :-1]).any(axis=1)
            result[todo[~tied]] = order[~tied]
            todo = todo[tied]
        return result

    def subsets(self, size: int, counts: NDArray[np.int64]) -> NDArray[np.int64]:
        """Return for each row r a uniform subset of counts[r] of 0..size-1.

        Shape (rows, largest count); places beyond a row's count hold -1. Exact: Floyd's method (Bentley and Floyd
        1987) where counts are small against `size`, else the head of a uniform permutation.
        """
        most = int(counts.max(initial=0))
        place = np.arange(most)
        if most * most > 16 * size:
            picked = self.shuffles(len(counts), size)[:, :most]
            return np.where(place < counts[:, None], picked, -1)
        last = size - counts[:, None] + place
        candidates = self.below(np.clip(last, 0, size - 1) + 1)
        picked = np.full((len(counts), most), -1, np.int64)
        for step in range(most):
            candidate = candidates[:, step]
            taken = (picked[:, :step] == candidate[:, None]).any(axis=1)
            picked[:, step] = np.where(taken, last[:, step], candidate)
        return np.where(place < counts[:, None], picked, -1)
