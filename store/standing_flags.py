"""Health flags that hang on more than a reading's own samples: made wherever the reading is shown or used.

The samples cannot tell what the job's slow roll was, nor which way the mounted rotor turns, and both may be
entered or put right later. So these flags are derived from the records each time, never stored. Codes and
their sentences: ``daq/signal/health.py``.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from uuid import UUID

from store.balance.fit import Observation, standing_of
from store.balance.orbit import CIRCLE_95, Orbit, orbits
from store.balance.standing import Standing
from store.casework_slow_roll import slow_rolls_in
from store.records import JobStory, Label, Reading, Run, SetUp, Vector

RUNOUT = "mostly_runout"
PRECESSION = "backward_precession"
BELOW_FLOOR = "below_floor"
"""Stored too since readings are flagged with it; derived for those made before."""
RUNOUT_SHARE = 1 / 3
"""A vector that differs from the slow-roll vector by less than this share of itself is mostly runout: the
motion is then less than half of the runout beside it (judgement)."""
RUNOUT_FROM_SPEED = 1.5
"""Times the slow roll's speed: nearer to it the vector ought to be runout."""


def below_floor(vector: Vector) -> bool:
    """Whether its phase means nothing: the amplitude is within its own 95 % uncertainty."""
    return not abs(vector.value) > vector.noise_floor


def derived_flags(story: JobStory, run: Run, reading: Reading) -> tuple[str, ...]:
    """What the job's records add to the flags of a reading of a run of it, as ``code:channel``."""
    found = list(floor_flags(reading))
    standing = standing_of(story, run)
    if standing is not None:
        found += _backward(reading, standing)
        if reading.label is not Label.SLOW_ROLL:
            found += _runout(story, run, reading, standing)
    return tuple(f for f in found if f not in reading.flags)


def all_flags(story: JobStory, run: Run, reading: Reading) -> tuple[str, ...]:
    """The reading's own flags and those derived."""
    return (*reading.flags, *derived_flags(story, run, reading))


def flags_by_reading(story: JobStory) -> dict[UUID, tuple[str, ...]]:
    """``derived_flags`` of every reading of a job."""
    return {r.id: derived_flags(story, run, r) for run in story.runs for r in run.readings}


def floor_flags(reading: Reading) -> Iterator[str]:
    """1X below its own noise floor: needs no more than the reading."""
    for vector in reading.vectors:
        flag = f"{BELOW_FLOOR}:{vector.channel}"
        if vector.order == 1 and below_floor(vector) and flag not in reading.flags:
            yield flag


def orbits_of(story: JobStory | None, run: Run, reading: Reading, set_up: SetUp) -> tuple[Orbit, ...]:
    """The orbits of a reading's XY pairs; without a story (a run of no job) the rotation is not known."""
    standing = standing_of(story, run) if story is not None else None
    return orbits(reading.vectors, set_up, standing.mount.rotation if standing is not None else None)


def _backward(reading: Reading, standing: Standing) -> Iterator[str]:
    for found in orbits(reading.vectors, standing.set_up, standing.mount.rotation):
        if found.order == 1 and found.precession == "backward":
            yield from (
                f"{PRECESSION}:{c.name}" for c in standing.set_up.channels if c.name in found.channels
            )


def _runout(story: JobStory, run: Run, reading: Reading, standing: Standing) -> Iterator[str]:
    for channel, slow in slow_rolls_in(story, standing, frozenset({run.origin})).items():
        if reading.speed_hz < RUNOUT_FROM_SPEED * slow.speed_hz:
            continue
        vector = reading.vector(channel)
        if vector is not None and not below_floor(vector) and _alike(vector, slow):
            yield f"{RUNOUT}:{channel}"


def _alike(vector: Vector, slow: Observation) -> bool:
    """Whether the difference is a small part of the vector, or may be no more than both errors make."""
    if not abs(slow.value) > CIRCLE_95 * slow.own_sd:
        return False
    apart = abs(vector.value - slow.value)
    spread = CIRCLE_95 * math.sqrt((vector.var_re + vector.var_im) / 2 + slow.own_sd**2)
    return apart < max(RUNOUT_SHARE * abs(vector.value), spread)
