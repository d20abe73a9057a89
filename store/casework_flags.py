"""Health flags of the readings that an answer rests on, so that they are told with it. Pure."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from store.balance.fit import BALANCING, Observation, near
from store.records import JobStory, Reading, Run, flags_of
from store.standing_flags import all_flags, below_floor


@dataclass(frozen=True, slots=True)
class FlaggedReading:
    """One flag of one reading, of a channel that the answer used."""

    run: str
    reading: int
    label: str
    flag: str

    def to_dict(self) -> dict[str, Any]:
        return {"run": self.run, "reading": self.reading, "label": self.label, "flag": self.flag}


def flagged(story: JobStory, taken: Mapping[str, Iterable[Observation]]) -> tuple[FlaggedReading, ...]:
    """The flags of observations by channel, in the order of the runs, each once."""
    found: dict[FlaggedReading, tuple[int, int]] = {}
    for channel, observations in taken.items():
        for o in observations:
            run = story.runs[o.run_index]
            reading = next(r for r in run.readings if r.id == o.reading_id)
            found.update((f, o.order) for f in _of(story, run, reading, channel))
    return tuple(sorted(found, key=lambda f: found[f]))


def lag_is_known_of(story: JobStory, observation: Observation, channel: str) -> bool:
    """False where the reading's 1X of the channel is below its own noise floor."""
    run = story.runs[observation.run_index]
    vector = next(r for r in run.readings if r.id == observation.reading_id).vector(channel)
    return vector is not None and not below_floor(vector)


def flagged_in_job(story: JobStory, channels: Iterable[str], speed_hz: float) -> tuple[FlaggedReading, ...]:
    """The flags of another job's balancing readings at a speed, from which a reused coefficient came."""
    names = tuple(channels)
    found = [
        f
        for run in story.runs
        for reading in run.readings
        if run.void is None and reading.label in BALANCING and near(reading.speed_hz, speed_hz)
        for channel in names
        for f in _of(story, run, reading, channel)
    ]
    return tuple(dict.fromkeys(found))


def _of(story: JobStory, run: Run, reading: Reading, channel: str) -> Iterator[FlaggedReading]:
    for flag in flags_of(all_flags(story, run, reading), channel):
        yield FlaggedReading(run.name, reading.number, str(reading.label), flag)
