"""Who a row belongs to: the key of its customer id, that of the person where the id is an old one."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Self

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from journeys.errors import LogError
from journeys.intake.id_key import IdKey
from journeys.intake.identity import KINDS, customer_keys
from journeys.intake.links import Links, read_links


@dataclass(frozen=True, slots=True)
class People:
    """How the customer ids of a log become keys of people.

    Attributes
    ----------
    id_key : IdKey or None
        Secret of the hash; None for the fast hash, which protects nothing.
    links : Links or None
        Old ids and whose they are.

    Examples
    --------
    >>> keys, kind, relinked = People().keys(pa.array([7, 8, 7]), None)
    >>> bool(keys[0] == keys[2]), kind, relinked
    (True, 'integer', None)
    """

    id_key: IdKey | None = None
    links: Links | None = None

    @classmethod
    def here(cls, identity: Any = None) -> Self:
        """Return what the environment's key and an identity table say.

        Parameters
        ----------
        identity : log, optional
            Table of old ids, see `links.read_links`.

        Returns
        -------
        People

        Raises
        ------
        RulesError, LogError
            If the key is too short, or the table is wrong.
        """
        id_key = IdKey.from_environment()
        return cls(id_key, None if identity is None else read_links(identity, id_key))

    @property
    def fingerprint(self) -> str | None:
        """Fingerprint of the secret, or None where there is none."""
        return None if self.id_key is None else self.id_key.fingerprint

    def keys(
        self, array: pa.Array, kind: str | None
    ) -> tuple[NDArray[np.uint64], str | None, NDArray[np.bool_] | None]:
        """Keys of the people behind customer ids.

        Parameters
        ----------
        array : pyarrow.Array
        kind : {"integer", "text"} or None
            Kind of the ids seen before.

        Returns
        -------
        keys : ndarray of uint64, shape (n_rows,)
        kind : {"integer", "text"} or None
        relinked : ndarray of bool, shape (n_rows,), or None
            Rows of an old id; None if there are none.

        Raises
        ------
        LogError
            As `identity.customer_keys`, or if the ids are of another kind than those of the identity table.
        """
        keys, kind = customer_keys(array, kind, self.id_key)
        if self.links is None or not len(self.links):
            return keys, kind, None
        if kind is None:
            return keys, None, None
        if kind != self.links.kind:
            raise LogError(
                f"the identity table holds {KINDS[self.links.kind]}, the log has {KINDS[kind]} for customer ids; "
                "write both alike"
            )
        return self.links.people(keys), kind, self.links.are_old(keys)
