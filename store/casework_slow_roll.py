"""Which slow-roll vectors a job keeps, and a run's vectors without them. Pure: records in, answers out.

The newest reading labelled slow-roll that the run's mount and set-up allow is it, by channel of displacement
(METHODS 9); nothing is ever taken off a casing sensor, and what was measured stays as it is.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from config.errors import Refusal
from store.balance.angles import difference_deg
from store.balance.fit import Observation, gather, standing_of
from store.balance.slowroll import SlowRoll, cautions, less_slow_roll, turned, why_raw
from store.balance.standing import Standing
from store.records import ChannelSetUp, JobStory, Label, Origin, Reading, Run, Vector

MARK_ONE = "Mark one (revmark mark slow-roll), or do without --minus-slow-roll."


def slow_rolls_in(story: JobStory, standing: Standing, origins: frozenset[Origin]) -> dict[str, Observation]:
    """The newest slow-roll reading by channel, of displacement channels only, in the standing's frame."""

    def wanted(run: Run, reading: Reading) -> bool:
        return run.origin in origins and reading.label is Label.SLOW_ROLL

    found: dict[str, Observation] = {}
    for channel in standing.set_up.channels:
        taken = gather(story, channel.name, standing, wanted).taken
        if channel.kind == "displacement" and taken:
            found[channel.name] = taken[-1]
    newest = max((o.order for o in found.values()), default=None)
    return {c: o for c, o in found.items() if o.order == newest}


@dataclass(frozen=True, slots=True)
class Runout:
    """What is taken off the vectors of one run."""

    slow: Mapping[str, SlowRoll]
    """By channel; not empty, all of one reading."""
    left_raw: tuple[str, ...]
    """Why channels stay as measured, a sentence each."""

    @property
    def reading(self) -> SlowRoll:
        """Any of them: run, reading and speed are the same."""
        return next(iter(self.slow.values()))

    def without(self, run: Run, reading: Reading, vector: Vector) -> Vector | None:
        """A 1X vector less its slow roll; None where nothing is taken off (also of the slow roll itself)."""
        slow = self.slow.get(vector.channel)
        own = slow is not None and (slow.run, slow.reading) == (run.name, reading.number)
        return None if slow is None or own or vector.order != 1 else less_slow_roll(vector, slow)

    def to_dict(self, speed_hz: float | None) -> dict[str, Any]:
        """``speed_hz``: the speed that it is taken off at, for the cautions."""
        slow = self.reading
        return {
            "run": slow.run,
            "reading": slow.reading,
            "speed_rpm": slow.speed_hz * 60,
            "left_raw": list(self.left_raw),
            "cautions": [] if speed_hz is None else cautions(slow.speed_hz, speed_hz),
        }


def runout_of(story: JobStory | None, run: Run) -> Runout:
    """The slow roll of a run's job in the run's own frame. Raises Refusal when there is none to take off."""
    if story is None:
        raise Refusal(
            f"Run {run.name} belongs to no job, and slow rolls are kept with the job.",
            "Give it to one first (revmark run assign).",
        )
    standing = standing_of(story, run)
    if standing is None:
        raise Refusal(f"The mount or the set-up of run {run.name} is not in the store.", "Check the store.")
    found = slow_rolls_in(story, standing, frozenset({run.origin}))
    if not found:
        raise no_slow_roll(story, standing.set_up.channels)
    slow = {c: _slow_roll(story, c, o) for c, o in found.items()}
    left = tuple(why_left(c) for c in standing.set_up.channels if c.name not in slow)
    return Runout(slow, left)


def no_slow_roll(story: JobStory, channels: Sequence[ChannelSetUp]) -> Refusal:
    """Why no slow roll can be taken off any of these channels."""
    if all(c.kind != "displacement" for c in channels):
        return Refusal(
            f"Nothing can be taken off: {' '.join(why_left(c) for c in channels)}",
            "Do without --minus-slow-roll.",
        )
    return Refusal(f"Job {story.job.number} has no slow-roll reading of a displacement probe.", MARK_ONE)


def why_left(channel: ChannelSetUp) -> str:
    """Why a channel stays as measured where slow roll is taken off others, a sentence."""
    if channel.kind == "displacement":
        return f"{channel.name} has no slow-roll vector in that reading: left as measured."
    return why_raw(channel.name, channel.kind)


def _slow_roll(story: JobStory, channel: str, seen: Observation) -> SlowRoll:
    """The observation with its whole covariance, turned as the observation was."""
    run = story.runs[seen.run_index]
    vector = next(r for r in run.readings if r.id == seen.reading_id).vector(channel)
    assert vector is not None, "it was observed"
    by = difference_deg(_degrees(seen.value), _degrees(vector.value)) if seen.value != vector.value else 0.0
    return SlowRoll(run.name, seen.reading_number, seen.speed_hz, turned(vector, by))


def _degrees(value: complex) -> float:
    return math.degrees(math.atan2(value.imag, value.real))
