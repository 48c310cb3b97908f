"""Addressed random signs and normals: a pure function of (seed, stream, key, row), stable for ever.

Any cut of the data, any order and any number of workers see the same random matrices, because an entry is looked up
by its address and never drawn from a sequence. No NumPy generator is used: their streams may change between releases.
The rule below is version ``GENERATOR_VERSION``; golden values in the tests hold it, and a change is a new version.

The rule, all in unsigned 64-bit arithmetic that wraps around::

    (a, b)  = BLAKE2b-128 of "version/seed/stream", two little-endian words
    state   = mix(mix(key xor a) + b)
    word_j  = mix(state + (j + 1) * 0x9E3779B97F4A7C15)                     SplitMix64 started at ``state``
    sign    of row r: bit r mod 64 of word r // 64; a set bit is +1
    normal  of row r: inverse normal distribution function of max(word_r >> 11, 1) / 2^53

``mix`` is the finalizer of SplitMix64 (Steele, Lea, Flood, OOPSLA 2014; constants of Stafford's variant 13).
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

from .checks import require_between

GENERATOR_VERSION = 1

STREAM_PROBE = 1
STREAM_CHECK = 2
STREAM_SAMPLE = 3
STREAM_QUANTILE = 4
STREAM_PRIMED = 1000  # the random rows of pass number t use STREAM_PRIMED + t

_GOLDEN = np.uint64(0x9E3779B97F4A7C15)
_WORD_BITS = 64
_UNIFORM_BITS = 53

Words = NDArray[np.uint64]


def name_keys(names: Sequence[str]) -> Words:
    """Return the 64-bit key of each channel name.

    Parameters
    ----------
    names : sequence of str, length m

    Returns
    -------
    keys : uint64 (m,)
        BLAKE2b digest of 8 bytes of the UTF-8 name, read as a little-endian number.
    """
    digests = b"".join(hashlib.blake2b(name.encode(), digest_size=8).digest() for name in names)
    return np.frombuffer(digests, dtype="<u8").astype(np.uint64)


def shard_row_keys(shard: str, rows: NDArray[np.integer]) -> Words:
    """Return sample keys for data without times: the shard's name key plus the row number, mixed.

    Parameters
    ----------
    shard : str
        Key of the shard, without its version.
    rows : integers (n,)
        Row numbers within the shard.

    Returns
    -------
    keys : uint64 (n,)
        Different for different rows of one shard; of two shards, equal only by a hash collision.
    """
    with np.errstate(over="ignore"):
        return _mix(name_keys([shard])[0] + np.asarray(rows).astype(np.uint64))


def signs(seed: int, stream: int, keys: NDArray[np.integer], rows: int) -> NDArray[np.int8]:
    """Return random signs, one row of bits per probe row.

    Parameters
    ----------
    seed, stream : int
        The dossier's seed and the purpose.
    keys : 64-bit integers (m,)
        Channel or sample keys; signed keys are taken modulo 2^64.
    rows : int
        Number of rows. More rows never change the earlier ones.

    Returns
    -------
    signs : int8 (rows, m)
        -1 or +1.
    """
    require_between("rows", rows, 0)
    out = np.empty((rows, len(keys)), dtype=np.int8)
    state = _state(seed, stream, keys)
    for first in range(0, rows, _WORD_BITS):
        word = _word(state, first // _WORD_BITS)
        for row in range(first, min(first + _WORD_BITS, rows)):
            bit = (word >> np.uint64(row - first)) & np.uint64(1)
            out[row] = bit.astype(np.int8) * 2 - 1
    return out


def normals(seed: int, stream: int, keys: NDArray[np.integer], rows: int) -> NDArray[np.float64]:
    """Return standard normal numbers.

    Parameters
    ----------
    seed, stream : int
        The dossier's seed and the purpose.
    keys : 64-bit integers (n,)
        Channel or sample keys; signed keys are taken modulo 2^64.
    rows : int
        Number of rows. More rows never change the earlier ones.

    Returns
    -------
    normals : float64 (rows, n)
        Never infinite: the uniform number is at least 2^-53 and below 1.
    """
    require_between("rows", rows, 0)
    out = np.empty((rows, len(keys)), dtype=np.float64)
    state = _state(seed, stream, keys)
    for row in range(rows):
        whole = np.maximum(_word(state, row) >> np.uint64(_WORD_BITS - _UNIFORM_BITS), np.uint64(1))
        ndtri(whole * 2.0**-_UNIFORM_BITS, out=out[row])
    return out


def _state(seed: int, stream: int, keys: NDArray[np.integer]) -> Words:
    address = f"{GENERATOR_VERSION}/{int(seed)}/{int(stream)}".encode()
    a, b = np.frombuffer(hashlib.blake2b(address, digest_size=16).digest(), dtype="<u8").astype(np.uint64)
    with np.errstate(over="ignore"):
        return _mix(_mix(np.asarray(keys).astype(np.uint64) ^ a) + b)


def _word(state: Words, number: int) -> Words:
    with np.errstate(over="ignore"):
        return _mix(state + np.uint64(number + 1) * _GOLDEN)


def _mix(x: Words) -> Words:
    x = (x ^ (x >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    x = (x ^ (x >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return x ^ (x >> np.uint64(31))
