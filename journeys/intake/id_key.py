"""The secret that turns customer ids into keys nobody can recompute without it."""

from __future__ import annotations

import os
from collections.abc import Iterable
from hashlib import blake2b
from typing import Self

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from journeys.errors import RulesError
from journeys.intake.arrays import indices_of

VARIABLE = "JOURNEYS_ID_KEY"
_FEWEST_BYTES = 32
_HOW = "make one with: python -c 'import secrets; print(secrets.token_hex(32))'"


class IdKey:
    """Keyed hash of customer ids; the secret itself appears in no text, file or message.

    Parameters
    ----------
    secret : str
        At least 32 bytes of chance, the same wherever tallies are to be added or compared.

    Raises
    ------
    RulesError
        If it is shorter, and so could be guessed.

    References
    ----------
    BLAKE2b with a key, RFC 7693.

    Examples
    --------
    >>> one, other = IdKey("0123456789abcdef" * 2), IdKey("fedcba9876543210" * 2)
    >>> one, one.fingerprint == other.fingerprint
    (<IdKey>, False)
    """

    __slots__ = ("_key",)

    def __init__(self, secret: str) -> None:
        given = secret.strip().encode()
        if len(given) < _FEWEST_BYTES:
            raise RulesError(
                f"{VARIABLE} holds {len(given)} bytes; wanted at least {_FEWEST_BYTES} of chance ({_HOW}), "
                "or not to be set at all"
            )
        self._key = given if len(given) <= blake2b.MAX_KEY_SIZE else blake2b(given).digest()

    @classmethod
    def from_environment(cls) -> Self | None:
        """Return the key of the environment variable JOURNEYS_ID_KEY, or None where it is not set.

        Raises
        ------
        RulesError
            If it is set to something too short.
        """
        secret = os.environ.get(VARIABLE)
        return None if secret is None else cls(secret)

    @property
    def fingerprint(self) -> str:
        """Sixteen digits that tell two keys apart, from which the key cannot be had."""
        return blake2b(b"", digest_size=8, key=self._key, person=b"fingerprint").hexdigest()

    def of_numbers(self, ids: NDArray[np.int64]) -> NDArray[np.uint64]:
        """Keys of whole numbers.

        Parameters
        ----------
        ids : ndarray of int64, shape (n_rows,)

        Returns
        -------
        ndarray of uint64, shape (n_rows,)
        """
        distinct, place = np.unique(ids, return_inverse=True)
        data = distinct.astype("<i8").tobytes()
        return self._hashed((data[at : at + 8] for at in range(0, len(data), 8)), b"number")[place]

    def of_texts(self, ids: pa.Array) -> NDArray[np.uint64]:
        """Keys of text or bytes.

        Parameters
        ----------
        ids : pyarrow.Array
            Plain; not a dictionary.

        Returns
        -------
        ndarray of uint64, shape (n_rows,)
            Meaningless where the id is missing.
        """
        encoded = ids.dictionary_encode()
        words = encoded.dictionary.cast(pa.large_binary()).to_pylist()
        if not words:
            return np.zeros(len(ids), dtype=np.uint64)
        return self._hashed((word or b"" for word in words), b"text")[indices_of(encoded)]

    def _hashed(self, words: Iterable[bytes], kind: bytes) -> NDArray[np.uint64]:
        """Keys of distinct ids; numbers and text never meet."""
        blank = blake2b(digest_size=8, key=self._key, person=kind).copy
        digests = []
        for word in words:
            state = blank()
            state.update(word)
            digests.append(state.digest())
        return np.frombuffer(b"".join(digests), dtype="<u8").astype(np.uint64)

    def __repr__(self) -> str:
        """Write that there is one, and nothing of it."""
        return "<IdKey>"
