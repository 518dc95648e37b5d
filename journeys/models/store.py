"""A fit on disk: its moves and influence if the chain is known, else the tally and the choices of the fit."""

from __future__ import annotations

import json
import os
from hashlib import blake2b
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from journeys.errors import StoreError
from journeys.files import written_whole
from journeys.intake.faults import UNREADABLE
from journeys.models.memory import Nodes
from journeys.models.model import JourneyModel
from journeys.tally import store as tally_store

if TYPE_CHECKING:
    from journeys.models.fit import JourneyFit
    from journeys.tally.tally import Tally

FORMAT_VERSION = 2
HEAD = b"journeys fit"
_COLUMNS = ("move_state", "move_target", "n_moves", "probability", "mean", "second")


def save(fit: JourneyFit, path: str | os.PathLike[str]) -> None:
    """Write a fit to one Parquet file: small, since it holds counts and never rows.

    Parameters
    ----------
    fit : JourneyFit
        What to keep.
    path : str or path-like
        Where.

    Raises
    ------
    StoreError
        If the dwell of a known chain has a distribution that is not one of `scipy.stats` with numbers as
        parameters.
    """
    if fit.tally is not None:
        model = {"order": fit.nodes.order, "open_moves": fit.open_moves}
        model["checksum"] = _checksum({**model, "tally": fit.tally.checksum}, {})
        tally_store.save(fit.tally, path, {HEAD: json.dumps(model).encode()})
        return
    head = {
        "format_version": FORMAT_VERSION,
        "states": fit.states,
        "outcomes": fit.outcomes,
        "converted": fit.converted,
        "row_flags": fit.row_flags,
    }
    if fit.dwell is not None and any(one is not None for one in fit.dwell):
        head["dwell"] = [_told(one) for one in fit.dwell]
    columns = {name: getattr(fit, name) for name in _COLUMNS}
    table = pa.table(columns)
    head["checksum"] = _checksum(head, columns)
    with written_whole(path) as part:
        pq.write_table(table.replace_schema_metadata({HEAD: json.dumps(head).encode()}), part)


def load(path: str | os.PathLike[str]) -> JourneyFit:
    """Read a saved fit.

    Parameters
    ----------
    path : str or path-like
        A file written by `save`.

    Returns
    -------
    JourneyFit
        With the same numbers as the one saved.

    Raises
    ------
    StoreError
        If the file is missing, damaged or no fit.
    """
    from journeys.models.fit import JourneyFit

    try:
        head = tally_store.read_head(pq.read_schema(path), HEAD)
        if "open_moves" in head:
            return _fitted_again(head, tally_store.load(path), path)
        table = pq.read_table(path)
        columns = {name: table[name].to_numpy() for name in _COLUMNS}
    except FileNotFoundError:
        msg = f"no fit at {os.fspath(path)!r}; wanted a file written by fit.save"
        raise StoreError(msg) from None
    except StoreError:
        raise
    except (*UNREADABLE, KeyError):
        msg = f"{os.fspath(path)!r} is not a whole fit; wanted a file written by fit.save: fit it again"
        raise StoreError(msg) from None
    if head.get("format_version") != FORMAT_VERSION:
        msg = (
            f"{os.fspath(path)!r} has format version {head.get('format_version')}; this program reads {FORMAT_VERSION}"
        )
        raise StoreError(msg)
    if _checksum(head, columns) != head.get("checksum"):
        raise _damaged(path, "make the chain again")
    return JourneyFit(
        nodes=Nodes(tuple(head["states"]), tuple(head["outcomes"])),
        converted=tuple(head["converted"]),
        row_flags=head["row_flags"],
        open_moves="known",
        dwell=_dwells(head.get("dwell"), len(columns["probability"])),
        **columns,
    )


def _fitted_again(head: dict[str, Any], tally: Tally, path: str | os.PathLike[str]) -> JourneyFit:
    """Return the fit of a tally by the choices that stand beside it."""
    model = {key: value for key, value in head.items() if key != "checksum"}
    if _checksum({**model, "tally": tally.checksum}, {}) != head.get("checksum"):
        raise _damaged(path, "fit the tally again")
    return JourneyModel(order=model["order"], open_moves=model["open_moves"]).fit(tally)


def _damaged(path: str | os.PathLike[str], fix: str) -> StoreError:
    return StoreError(f"{os.fspath(path)!r} is damaged (its checksum does not fit); {fix}")


def _checksum(head: dict[str, Any], columns: dict[str, np.ndarray]) -> str:
    """Return the digest of all that a file holds beside a tally."""
    told = {key: value for key, value in head.items() if key != "checksum"}
    digest = blake2b(json.dumps(told, sort_keys=True).encode(), digest_size=16)
    for name, values in columns.items():
        # The same bytes of another type are other numbers.
        digest.update(f"{name} {values.dtype.str}".encode())
        digest.update(np.ascontiguousarray(values).tobytes())
    return digest.hexdigest()


def _told(given: Any) -> dict[str, Any] | None:
    """Return the name and the parameters of a frozen distribution."""
    from scipy import stats

    if given is None:
        return None
    kind = getattr(given, "dist", None)
    name = str(getattr(kind, "name", ""))
    of_scipy = type(getattr(stats, name, None)) is type(kind)
    if not of_scipy or not isinstance(kind, stats.rv_continuous | stats.rv_discrete):
        msg = f"{given!r} is no frozen distribution of scipy.stats, so the chain cannot be kept in a file; make it anew"
        raise StoreError(msg)
    try:
        args = [float(one) for one in given.args]
        return {"name": name, "args": args, "kwds": {key: float(one) for key, one in given.kwds.items()}}
    except (TypeError, ValueError):
        msg = f"the parameters of a {name} distribution are no single numbers, so the chain cannot be kept in a file"
        raise StoreError(msg) from None


def _dwells(told: list[dict[str, Any] | None] | None, n: int) -> tuple[Any, ...]:
    """Return the distributions that `_told` wrote down."""
    if told is None:
        return (None,) * n
    from scipy import stats

    kinds = (stats.rv_continuous, stats.rv_discrete)
    found: list[Any] = []
    for one in told:
        if one is None:
            found.append(None)
            continue
        kind = getattr(stats, one["name"], None)
        if not isinstance(kind, kinds):
            msg = f"the fit keeps a distribution {one['name']!r} that this scipy does not have; make the chain anew"
            raise StoreError(msg)
        found.append(kind(*one["args"], **one["kwds"]))
    return tuple(found)
