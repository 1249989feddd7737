"""Canonical forms and their digests: the same numbers have the same digest however they were sent."""

import hashlib
import json
import sys
from collections.abc import Callable, Iterable, Sequence
from typing import Any, Protocol

import numpy as np
import orjson
from numpy.typing import NDArray

PREFIX = "sha-256:"
PIECE_BYTES = 1 << 20  # the table is hashed in pieces of this size, and the digests of the pieces once more


class Mapper(Protocol):
    """Anything that maps a function over pieces in order."""

    def map(self, function: Callable[[Any], Any], pieces: Iterable[Any]) -> list[Any]:
        """Return the results in order."""


def losses_digest(
    ids: Sequence[str], losses: NDArray[np.float64], probabilities: NDArray[np.float64] | None, mapper: Mapper
) -> str:
    """Return the digest of a loss table.

    SHA-256 over a JSON line with ids and size, then over the SHA-256 of each MiB of the losses (scenario
    after scenario, little-endian binary64, no negative zero), then of the probabilities likewise; equal
    probabilities count as none.

    Parameters
    ----------
    ids : sequence of str
        Of the d sub-portfolios.
    losses : ndarray of shape (n, d)
        C order.
    probabilities : ndarray of shape (n,) or None
    mapper : Mapper
        Hashes the pieces; `hashlib` lets go of the interpreter lock.
    """
    header = {"ids": list(ids), "scenarios": losses.shape[0], "weighted": probabilities is not None}
    digest = hashlib.sha256(canonical(header) + b"\n")
    for array in (losses, probabilities):
        if array is not None:
            for piece in mapper.map(_piece_digest, _pieces(array)):
                digest.update(piece)
    return PREFIX + digest.hexdigest()


def text_digest(text: bytes | memoryview) -> str:
    """Return the digest of bytes as they are."""
    return PREFIX + hashlib.sha256(text).hexdigest()


def document_digest(document: dict[str, Any]) -> str:
    """Return the digest of a JSON document in canonical form."""
    return text_digest(canonical(document))


def canonical(document: dict[str, Any]) -> bytes:
    """Return a JSON document in one form: sorted names, no white space, shortest numbers, UTF-8."""
    try:
        return orjson.dumps(document, option=orjson.OPT_SORT_KEYS)
    except TypeError:  # a whole number beyond 64 bits, in a candidate that was refused for it
        return json.dumps(document, sort_keys=True, separators=(",", ":")).encode()


def _piece_digest(piece: memoryview) -> bytes:
    return hashlib.sha256(piece).digest()


def _pieces(array: NDArray[np.float64]) -> list[memoryview]:
    if sys.byteorder == "big":
        array = array.astype("<f8")
    whole = np.ascontiguousarray(array).data.cast("B")
    return [whole[start : start + PIECE_BYTES] for start in range(0, whole.nbytes, PIECE_BYTES)]
