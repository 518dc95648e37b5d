"""Columns as PostgreSQL sends them: numeric comes as text, some ids as bytes; mended here."""

from __future__ import annotations

import pyarrow as pa

from journeys.errors import LogError
from journeys.intake.arrays import from_texts

_NOT_FINITE = ("nan", "inf", "-inf", "infinity", "-infinity")
# Types of PostgreSQL whose text is the id, where the bytes are not; and one whose numbers are a hundredfold.
_AS_TEXT, _MONEY = ("uuid", "bpchar"), "money"



def _type_of(field: pa.Field) -> str:
    """Return PostgreSQL's name of a column's type, where it says so."""
    metadata = field.metadata or {}
    told = metadata.get(b"POSTGRESQL:type") or metadata.get(b"ADBC:postgresql:typname") or b""
    return str(told.decode())


def expression(field: pa.Field) -> str:
    """Write what to select for a column.

    Parameters
    ----------
    field : pyarrow.Field
        As the query's schema has it.

    Returns
    -------
    str

    Raises
    ------
    LogError
        If the column's numbers cannot be told from it.

    Examples
    --------
    >>> expression(pa.field("who", pa.int64()))
    '"who"'
    """
    quoted = '"' + field.name.replace('"', '""') + '"'
    if _type_of(field) == _MONEY:
        raise LogError(
            f"column {field.name!r} is of type money, which comes without its unit; "
            f"write CAST({field.name} AS numeric) in the query"
        )
    return f"CAST({quoted} AS text) AS {quoted}" if _type_of(field) in _AS_TEXT else quoted


def decoded(array: pa.Array, field: pa.Field) -> pa.Array:
    """Return the numbers of a numeric column, which come as text; any other column as it is.

    Parameters
    ----------
    array : pyarrow.Array
    field : pyarrow.Field
        As the query's schema has it.

    Returns
    -------
    pyarrow.Array

    Raises
    ------
    LogError
        If a number has more digits than Arrow keeps.
    """
    if _type_of(field) != "numeric":
        return array
    import pyarrow.compute as pc

    text = array.storage if isinstance(array.type, pa.BaseExtensionType) else array
    finite = pc.invert(pc.is_in(pc.utf8_lower(text), value_set=from_texts(_NOT_FINITE)))
    text = pc.if_else(finite, text, pa.nulls(len(text), text.type))
    for scale in _scales(field):
        try:
            return text.cast(pa.decimal128(38, scale))
        except pa.ArrowInvalid:
            continue
    raise LogError(
        f"column {field.name!r} is numeric with more digits than can be kept; write CAST({field.name} AS "
        "numeric(18, 6)) in the query"
    )


def _scales(field: pa.Field) -> tuple[int, ...]:
    """Return the decimal places to try: as declared; where none are, none, as for ids, and then nine."""
    declared = int((field.metadata or {}).get(b"POSTGRESQL:typmod", b"-1"))
    return (0, 9) if declared < 4 else ((declared - 4) & 0xFFFF,)
