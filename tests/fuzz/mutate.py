"""Damage done to bytes, by a seeded generator: what a broken disk, a cut transfer or an ill-meaning hand would do."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

Chance = np.random.Generator
# Numbers on which sizes, offsets and counts break.
ODD = [value.to_bytes(4, "little") for value in (0, 1, 127, 128, 0x7FFFFFFF, 0x80000000, 0xFFFFFFFF)]
ODD_TEXT = [b"\x00", b"\xff", b'"', b"\r\n", b",", b"\t", b"-1", b"1e999", b"nan", b"\xe2\x80\xae", b"[[", b"{", b"'''"]


def random_bytes(data: bytes, chance: Chance) -> bytes:
    """Nothing of it is left."""
    return chance.bytes(int(chance.integers(0, 400)))


def flipped(data: bytes, chance: Chance) -> bytes:
    """Flip one to eight bits."""
    out = bytearray(data)
    for place in chance.integers(0, max(len(out), 1), int(chance.integers(1, 9))).tolist():
        if place < len(out):
            out[place] ^= 1 << int(chance.integers(8))
    return bytes(out)


def cut(data: bytes, chance: Chance) -> bytes:
    """Leave the beginning."""
    return data[: int(chance.integers(0, len(data) + 1))]


def without(data: bytes, chance: Chance) -> bytes:
    """Take out a piece."""
    begin, end = sorted(chance.integers(0, len(data) + 1, 2).tolist())
    return data[:begin] + data[min(end, begin + 64) :]


def repeated(data: bytes, chance: Chance) -> bytes:
    """Write a piece twice."""
    begin, end = sorted(chance.integers(0, len(data) + 1, 2).tolist())
    return data[:end] + data[begin:]


def overwritten(data: bytes, chance: Chance) -> bytes:
    """Write something else over a piece."""
    odd = [*ODD, *ODD_TEXT, chance.bytes(3)]
    piece = odd[int(chance.integers(len(odd)))]
    place = int(chance.integers(0, len(data) + 1))
    return data[:place] + piece + data[place + len(piece) :]


def inserted(data: bytes, chance: Chance) -> bytes:
    """Write something in between."""
    odd = [*ODD, *ODD_TEXT, chance.bytes(3)]
    place = int(chance.integers(0, len(data) + 1))
    return data[:place] + odd[int(chance.integers(len(odd)))] + data[place:]


def retyped(data: bytes, chance: Chance) -> bytes:
    """Put another letter or digit in the place of one to three: text that can still be read."""
    out = bytearray(data)
    places = [place for place, byte in enumerate(out) if chr(byte).isascii() and chr(byte).isalnum()]
    for _ in range(int(chance.integers(1, 4)) if places else 0):
        place = places[int(chance.integers(len(places)))]
        kind = b"0123456789" if chr(out[place]).isdigit() else b"abcdefghijklmnopqrstuvwxyz"
        out[place] = kind[int(chance.integers(len(kind)))]
    return bytes(out)


def at_the_end(data: bytes, chance: Chance) -> bytes:
    """Flip a bit among the last bytes, where Parquet and Arrow keep what they say of themselves."""
    out = bytearray(data)
    if out:
        out[-int(chance.integers(1, min(len(out), 3_000) + 1))] ^= 1 << int(chance.integers(8))
    return bytes(out)


WAYS: Sequence[Callable[[bytes, Chance], bytes]] = (
    random_bytes, flipped, flipped, at_the_end, at_the_end, cut, without, repeated, overwritten, overwritten, inserted,
    retyped,
)  # fmt: skip


def mutated(seeds: Sequence[bytes], chance: Chance) -> bytes:
    """Take one of the seeds and damage it once to three times."""
    data = seeds[int(chance.integers(len(seeds)))]
    for _ in range(1 if chance.integers(2) else int(chance.integers(2, 4))):
        data = WAYS[int(chance.integers(len(WAYS)))](data, chance)
    return data
