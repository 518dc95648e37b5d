"""Stages of journeys: which of an ordered list of states each journey has passed, one after another."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from journeys.kernels.arrays import BoolArray, IntArray
from journeys.kernels.records import LAPSED, Carried, Passed, Reading
from journeys.kernels.stories import Block, Buckets, Codes, Marks, Stories, last_legs, legs_of


def stages_passed(
    block: Block, marks: Marks, story: Stories, reading: Reading
) -> tuple[tuple[Passed, ...], Codes, IntArray]:
    """Return the stages that rows in order leave behind, and where each customer stands after them.

    Parameters
    ----------
    block, marks, story
        The rows, what each of them is, and the journeys they stand in.
    reading : Reading
        The rules, with the codes of the stages.

    Returns
    -------
    passed : tuple of Passed
        One element per stage left: for the next one, or by the end of the journey.
    stage : ndarray of int32, shape (n_customers,)
        How many stages the latest journey has reached.
    stage_start : ndarray of int64, shape (n_customers,)
        When it reached the last of them, or began.

    Notes
    -----
    A stage is reached when its state is visited after the stage before it was reached; the first visit counts.
    """
    legs = _Legs.of(block, marks, story)
    codes = np.concatenate([np.zeros(1, np.int32), np.asarray(reading.stages, np.int32)])
    parts = []
    for k in range(1, len(codes)):
        places = np.flatnonzero(block.code == codes[k])
        waiting = np.flatnonzero(legs.stage == k - 1)
        at = np.searchsorted(places, legs.reached[waiting])
        found = at < len(places)
        waiting, row = waiting[found], places[at[found]]
        within = row < legs.end[waiting]
        waiting, row = waiting[within], row[within]
        now = story.at(row, marks.owner[row])
        left = np.full(len(row), codes[k - 1], np.int32)
        parts.append(_passed(block, story, row, now.start, now.sure, left, codes[k], block.time[row], legs, waiting))
        legs.stage[waiting], legs.stage_start[waiting], legs.reached[waiting] = k, block.time[row], row + 1
    parts += _ends(block, marks, story, reading, codes, legs)
    last, mine = last_legs(block, legs.begin)
    prior_stage, prior_start = _prior(block)
    stage = np.where(mine, legs.stage[last] if len(legs.stage) else 0, prior_stage)
    start = np.where(mine, legs.stage_start[last] if len(legs.stage) else 0, prior_start)
    return tuple(parts), stage.astype(np.int32), start


def stages_at_close(held: Carried, bucket: Buckets, until: IntArray, next_code: Codes, reading: Reading) -> Passed:
    """Return the stages in which the journeys stand that the end of the log decides or leaves open."""
    codes = np.concatenate([np.zeros(1, np.int32), np.asarray(reading.stages, np.int32)])
    stage, start = held.stage, held.stage_start
    if stage is None or start is None:
        msg = "the records carry no stages"
        raise ValueError(msg)
    grouped = () if held.group is None else (held.journey_start, held.group)
    return Passed(
        bucket, codes[stage], next_code, held.sure, until - held.journey_start, until - start, *grouped,
    )  # fmt: skip


@dataclass
class _Legs:
    """Parts of journeys that lie in a block: begun there, or gone on with. Changed in place as stages are found."""

    begin: IntArray
    end: IntArray
    stage: IntArray
    stage_start: IntArray
    reached: IntArray

    @classmethod
    def of(cls, block: Block, marks: Marks, story: Stories) -> _Legs:
        """Return the legs of a block in the order of its rows."""
        begin = legs_of(block, marks, story)
        owner = marks.owner[begin]
        end = np.minimum(np.append(begin[1:], len(block.time)), block.end[owner])
        carried = ~marks.begins[begin]
        prior_stage, prior_start = _prior(block)
        return cls(
            begin=begin,
            end=end,
            stage=np.where(carried, prior_stage[owner], 0),
            stage_start=np.where(carried, prior_start[owner], block.time[begin]),
            reached=begin.copy(),
        )

    def at(self, row: IntArray) -> IntArray:
        """Return which leg each row stands in."""
        return np.searchsorted(self.begin, row, side="right") - 1


def _ends(
    block: Block, marks: Marks, story: Stories, reading: Reading, codes: Codes, legs: _Legs
) -> list[Passed]:
    """Return the last stages of journeys that end in an outcome or by a silence."""
    ended = np.flatnonzero(block.code < reading.first_state)
    ended = ended[~np.isin(ended, marks.repeated)]
    leg = legs.at(ended)
    now, code = story.at(ended, marks.owner[ended]), block.code[ended]
    left = codes[legs.stage[leg]]
    by_outcome = _passed(block, story, ended, now.start, now.sure, left, code, block.time[ended], legs, leg)
    silent = np.flatnonzero(marks.silent)
    owner = marks.owner[silent]
    before = story.before(silent)
    prior_stage, prior_start = _prior(block)
    leg = legs.at(silent - 1)
    here = _stands_here(block, silent, owner)
    stage = np.where(here, legs.stage[leg] if len(legs.stage) else 0, prior_stage[owner])
    start = np.where(here, legs.stage_start[leg] if len(legs.stage) else 0, prior_start[owner])
    until = marks.prev_time[silent] + (reading.silence_us or 0)
    grouped = () if before.group is None else (before.start, before.group)
    lapsed = Passed(
        block.bucket[owner], codes[stage], np.full(len(silent), LAPSED, np.int32), before.sure,
        until - before.start, until - start, *grouped,
    )  # fmt: skip
    return [by_outcome, lapsed]


def _passed(
    block: Block, story: Stories, row: IntArray, start: IntArray, sure: BoolArray, left: Codes, to: Codes | np.int32,
    until: IntArray, legs: _Legs, leg: IntArray,
) -> Passed:  # fmt: skip
    """Return the stages left at rows."""
    owner = story.owner[row]
    grouped = story.grouped(start, lambda: story.at(row, owner))
    following = np.broadcast_to(np.asarray(to, np.int32), (len(row),))
    return Passed(
        block.bucket[owner], left, following, sure, until - start, until - legs.stage_start[leg], *grouped
    )


def _stands_here(block: Block, silent: IntArray, owner: Codes) -> BoolArray:
    """Tell whether the row before a silence is in the block."""
    return silent > block.start[owner]


def _prior(block: Block) -> tuple[IntArray, IntArray]:
    """Return the stage that the carried journeys have reached, and when."""
    stage, start = block.prior.stage, block.prior.stage_start
    if stage is None or start is None:
        msg = "the records carry no stages"
        raise ValueError(msg)
    return stage.astype(np.int64), start
