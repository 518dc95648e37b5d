"""A mapping that cannot change and can be hashed, for settings; and the TOML text of settings."""

from __future__ import annotations

import json
import re
from collections.abc import Iterable, Iterator, Mapping
from typing import TypeVar

V = TypeVar("V")


class FrozenMap(Mapping[str, V]):
    """Immutable mapping from text, sorted by key, equal and hashing alike whatever order it was given in.

    Parameters
    ----------
    items : mapping or iterable of (str, value) pairs

    Examples
    --------
    >>> FrozenMap({"b": 1, "a": 2}) == FrozenMap({"a": 2, "b": 1}) == {"a": 2, "b": 1}
    True
    """

    __slots__ = ("_items",)

    def __init__(self, items: Mapping[str, V] | Iterable[tuple[str, V]] = ()) -> None:
        self._items: dict[str, V] = dict(sorted(dict(items).items()))

    def __getitem__(self, key: str) -> V:
        """Return the value of a key."""
        return self._items[key]

    def __iter__(self) -> Iterator[str]:
        """Go through the keys in order."""
        return iter(self._items)

    def __len__(self) -> int:
        """Return the number of keys."""
        return len(self._items)

    def __hash__(self) -> int:
        """Hash of the pairs."""
        return hash(tuple(self._items.items()))

    def __repr__(self) -> str:
        """Write it as a dict, so that the repr of rules can be pasted back."""
        return repr(self._items)


def toml_text(settings: Mapping[str, object]) -> str:
    """Write settings as TOML: plain keys first, then one table for each mapping.

    Parameters
    ----------
    settings : mapping
        Text, booleans, integers, floats, lists of these, and mappings of all of them.

    Returns
    -------
    str

    Raises
    ------
    TypeError
        If a value is of another kind.

    Examples
    --------
    >>> print(toml_text({"silence": "30d", "states": {"page view": "looking"}}), end="")
    silence = "30d"
    <BLANKLINE>
    [states]
    "page view" = "looking"
    """
    plain = [f"{_key(k)} = {_value(v)}\n" for k, v in settings.items() if not isinstance(v, Mapping)]
    tables = [
        f"\n[{_key(name)}]\n" + "".join(f"{_key(k)} = {_value(v)}\n" for k, v in table.items())
        for name, table in settings.items()
        if isinstance(table, Mapping)
    ]
    return "".join(plain + tables)


def _key(name: str) -> str:
    """Bare where TOML allows it, else quoted."""
    return name if re.fullmatch(r"[A-Za-z0-9_-]+", name) else _value(name)


def _value(value: object) -> str:
    """One value; JSON strings are TOML strings, once what cannot be seen is escaped.

    JSON leaves one control character bare that TOML forbids, and marks that turn the direction of writing,
    which would show a reader other rules than those in force.
    """
    if isinstance(value, str):
        written = json.dumps(value, ensure_ascii=False)
        return "".join(char if char.isprintable() else f"\\U{ord(char):08x}" for char in written)
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int | float):
        return repr(value)
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_value(item) for item in value) + "]"
    raise TypeError(f"cannot write {type(value).__name__} as TOML")
