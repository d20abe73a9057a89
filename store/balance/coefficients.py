"""Influence coefficients of a job, from the weight differences of all its labelled runs."""

from __future__ import annotations

from collections.abc import Iterator

from store.balance.fit import (
    BALANCING,
    ChannelFit,
    Chooses,
    balancing_at,
    fit_channel,
    gather,
    near,
    standing_of,
)
from store.balance.standing import Standing
from store.records import Coefficient, JobStory, Origin, Run


def from_story(story: JobStory) -> tuple[Coefficient, ...]:
    """Coefficients of every plane that the job's runs tell apart, by plane, channel and speed.

    Per speed (within 0.5 %), per origin (live runs are fitted with live runs only, each other kind with its
    own) and per standing (mount and set-up; older ones are turned into the newest's frame where that is
    exact, and fitted by themselves where it is not). Never raises for odd records: a run whose weights
    cannot be placed is left out here and named by ``store.casework``.
    """
    found = [
        _coefficient(story, origin, standing, fit, plane)
        for origin in _origins(story)
        for speed_hz in speeds_of(story, origin)
        for channel in channels_of(story)
        for standing, fit in _fits(story, channel, speed_hz, origin)
        for plane in fit.effects
    ]
    return tuple(sorted(found, key=lambda c: (c.plane, c.channel, c.speed_hz, c.origin)))


def unidentified_planes(story: JobStory, speed_hz: float) -> tuple[int, ...]:
    """Planes of the newest mount's model that no run at this speed tells apart, in any channel."""
    standing = present_standing(story)
    if standing is None:
        return ()
    known: set[int] = set()
    for origin in _origins(story):
        for channel in channels_of(story):
            taken = gather(story, channel, standing, balancing_at(speed_hz, frozenset({origin}))).taken
            known |= set(fit_channel(channel, planes_of(standing), taken).effects) if taken else set()
    return tuple(n for n in planes_of(standing) if n not in known)


def present_standing(story: JobStory) -> Standing | None:
    """The newest mount with the newest run's set-up; None before anything was mounted or run."""
    set_up = next((s for r in reversed(story.runs) if (s := story.set_ups.get(r.set_up_id))), None)
    if not story.mounts or set_up is None:
        return None
    return Standing(story.mounts[-1], set_up)


def planes_of(standing: Standing) -> tuple[int, ...]:
    """Numbers of the mounted model's planes, in order."""
    return tuple(sorted(p.number for p in standing.mount.machine.model.planes))


def channels_of(story: JobStory) -> tuple[str, ...]:
    """Names of all channels the job was measured with, in set-up order."""
    names = [c.name for s in story.set_ups.values() for c in s.channels]
    return tuple(dict.fromkeys(names))


def speeds_of(story: JobStory, origin: Origin) -> tuple[float, ...]:
    """Speeds at which balancing readings lie: the job's own first, then any other, 0.5 % apart."""
    readings = [r for run in story.runs if run.origin is origin and run.void is None for r in run.readings]
    speeds = [r.speed_hz for r in readings if r.label in BALANCING]
    centres = [s for s in story.job.speeds_hz if any(near(v, s) for v in speeds)]
    for speed in speeds:
        if not any(near(speed, c) for c in centres):
            centres.append(speed)
    return tuple(centres)


def _origins(story: JobStory) -> tuple[Origin, ...]:
    return tuple(dict.fromkeys(run.origin for run in story.runs))


def _fits(
    story: JobStory, channel: str, speed_hz: float, origin: Origin
) -> Iterator[tuple[Standing, ChannelFit]]:
    """Fits of a channel, the newest standing first, each with all runs that may be taken with it."""
    wanted = balancing_at(speed_hz, frozenset({origin}))
    done: set[str] = set()
    for run in reversed(story.runs):
        standing = standing_of(story, run)
        if standing is None or run.name in done or not _measures(run, standing, channel, wanted):
            continue
        taken = tuple(o for o in gather(story, channel, standing, wanted).taken if o.run_name not in done)
        done |= {run.name, *(o.run_name for o in taken)}
        if taken:
            yield standing, fit_channel(channel, planes_of(standing), taken)


def _measures(run: Run, standing: Standing, channel: str, wanted: Chooses) -> bool:
    has = standing.set_up.channel(channel) is not None and run.void is None
    return has and any(wanted(run, r) for r in run.readings)


def _coefficient(
    story: JobStory, origin: Origin, standing: Standing, fit: ChannelFit, plane: int
) -> Coefficient:
    runs = dict.fromkeys(o.run_name for o in fit.observations)
    return Coefficient(
        job_number=story.job.number,
        machine_serial=standing.mount.machine.serial,
        model_code=standing.mount.machine.model.code,
        plane=plane,
        channel=fit.channel,
        speed_hz=sum(o.speed_hz for o in fit.observations) / len(fit.observations),
        value=fit.effects[plane],
        se=fit.se(plane),
        run_names=tuple(runs),
        origin=origin,
        mount_id=standing.mount.id,
        set_up_id=standing.set_up.id,
        at_us=max(o.run_started_us for o in fit.observations),
        largest_effect_ratio=fit.effect_ratio(plane),
    )
