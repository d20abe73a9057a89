"""Trial-weight advice, the force of a piece, and the questions a label raises."""

from __future__ import annotations

import math
from collections.abc import Iterable

from config.errors import Refusal
from store.balance.angles import angle_deg, hole_angle_deg, nearest_hole, plane_of
from store.balance.cautions import force_caution
from store.balance.fit import Observation
from store.balance.holes import DEFAULT_STEP_G, rounded_down
from store.balance.orbit import CIRCLE_95
from store.balance.reuse import WEAK_RATIO, Candidate
from store.balance.slowroll import less
from store.balance.standing import probe_with_rotation_deg, sensor_with_rotation_deg
from store.balance.trial import (
    BELOW_CRITICAL,
    force_n,
    lag_is_known,
    place_by_coefficient_deg,
    place_by_lag_deg,
    static_load_kg,
    trial_unbalance_gmm,
)
from store.balance.weights import mount_of, pieces_at, pieces_listed, pieces_now, same_weights, unbalances
from store.casework_answers import ForceAdvice, TrialAdvice, UsedCoefficient
from store.casework_flags import flagged
from store.casework_scene import Scene, Sources, history, scene_now, slow_rolls, sources
from store.records import JobStory, Label, Mount, PieceDraft, Reading, Run, SetUp, WeightPlane


def trial_advice(
    story: JobStory,
    plane: int,
    *,
    reuse: Iterable[Candidate] | None = None,
    speed_hz: float | None = None,
    step_g: float = DEFAULT_STEP_G,
) -> TrialAdvice:
    """Mass by the 10 % force rule at the highest of O run, balancing and service speed, and a place.

    A place is named only from an O reading, and only when the speed is below 0.7 of the first critical on
    record or a coefficient (own or of ``reuse``) knows the lag; otherwise half the mass, no angle, and why.
    """
    mount = _mount(story)
    where = plane_of(mount, plane)
    scene = scene_now(story, speed_hz=speed_hz) if story.runs else None
    reading = None if scene is None else _newest(scene, plane)
    top = max(_speeds(story, mount, reading.speed_hz if reading else 0.0))
    load, load_how = static_load_kg(mount.machine, plane)
    limit = trial_unbalance_gmm(load, top)
    found = sources(scene, history(scene, reuse)) if scene else None
    place, channel, why = _place(scene, found, reading, where)
    mass = _mass(limit / where.radius_mm * (1.0 if place is not None else 0.5), step_g)
    hole = _hole(scene, where, place)
    return TrialAdvice(
        plane=plane,
        radius_mm=where.radius_mm,
        mass_g=mass,
        limit_gmm=limit,
        halved=place is None,
        speed_hz=top,
        force_n=force_n(mass * where.radius_mm, top),
        static_load_kg=load,
        load_how=load_how,
        place_deg=place,
        hole=hole[0] if hole else None,
        hole_deg=hole[1] if hole else None,
        channel=channel,
        why=(_why_mass(limit, load, load_how, top), why),
        notes=_notes(story, mount, where, hole[0] if hole else None),
        flags=flagged(story, {c: f.observations for c, f in scene.fits.items()}) if scene else (),
    )


def _mount(story: JobStory) -> Mount:
    if not story.mounts:
        raise Refusal(
            f"Nothing of job {story.job.number} is mounted.", "Mount the machine first (revmark mount)."
        )
    return story.mounts[-1]


def _speeds(story: JobStory, mount: Mount, o_run_hz: float) -> list[float]:
    return [o_run_hz, mount.machine.service_hz, *story.job.speeds_hz]


def _mass(mass_g: float, step_g: float) -> float:
    return rounded_down(mass_g, step_g) or mass_g


def _why_mass(limit: float, load: float, load_how: str, speed_hz: float) -> str:
    return (
        f"At {speed_hz * 60:.0f} r/min {limit:.4g} g.mm pull with 10 % of {load:.4g} kg ({load_how}); "
        "common practice."
    )


def _newest(scene: Scene, plane: int) -> Observation | None:
    """The newest reading taken with the weights fitted now, of the channel beside the plane."""
    now = scene.weights_now()
    channel = _beside(scene, plane)
    fit = scene.fits.get(channel) if channel else None
    same = [o for o in fit.observations if same_weights(dict(o.weights), now)] if fit else []
    return same[-1] if same else None


def _beside(scene: Scene, plane: int) -> str | None:
    """The channel taken to stand beside a plane: both in order, evenly shared out."""
    names = [c.name for c in scene.standing.set_up.channels]
    index = [p.number for p in scene.planes].index(plane)
    return names[index * len(names) // len(scene.planes)] if names else None


def _place(
    scene: Scene | None, found: Sources | None, reading: Observation | None, plane: WeightPlane
) -> tuple[float | None, str | None, str]:
    """(angle against rotation, channel it comes from, why)."""
    if scene is None or found is None or reading is None:
        return (
            None,
            None,
            "No place: there is no O reading with the weights fitted now. Half the mass, to be safe.",
        )
    known = _lag_known(scene, found, plane.number)
    if known is not None:
        channel = known.channel
        vector = _vector(scene, channel, reading)
        if vector is None:
            return None, None, _below_floor(channel)
        source = (
            f"runs {', '.join(known.behind)}" if known.source == "own" else f"jobs {', '.join(known.behind)}"
        )
        at = place_by_coefficient_deg(angle_deg(vector), angle_deg(known.value))
        return at, channel, f"Placed against the vibration of {channel} by the lag known from {source}."
    return _place_below_critical(scene, reading, plane.number)


def _lag_known(scene: Scene, found: Sources, plane: int) -> UsedCoefficient | None:
    """The strongest coefficient of the plane that is sure enough of its lag."""
    entries = [
        e
        for (p, c), e in found.entries.items()
        if p == plane and c in scene.fits and (e.effect_ratio is None or e.effect_ratio >= WEAK_RATIO)
    ]
    return max(entries, key=lambda e: abs(e.value), default=None)


def _vector(scene: Scene, channel: str, reading: Observation) -> complex | None:
    """The vector of a channel at a reading, its slow roll taken off where there is one; None where what is
    left is below its 95 % noise floor, so that its lag means nothing."""
    at = next((o for o in scene.fits[channel].observations if o.order == reading.order), reading)
    slow = slow_rolls(scene).get(channel)
    value = less(at.value, slow.value if slow else None)
    floor = CIRCLE_95 * math.hypot(at.own_sd, slow.own_sd if slow else 0.0)
    return value if abs(value) > floor else None


def _below_floor(channel: str) -> str:
    return f"No place: the 1X of {channel} is below its noise floor, so its lag means nothing. Half the mass."


def _place_below_critical(
    scene: Scene, reading: Observation, plane: int
) -> tuple[float | None, str | None, str]:
    critical = scene.standing.mount.machine.model.first_critical_hz
    name = _beside(scene, plane)
    channel = scene.standing.set_up.channel(name) if name else None
    probe = probe_with_rotation_deg(scene.standing, name) if name else None
    if channel is None or probe is None or not lag_is_known(reading.speed_hz, critical):
        return None, None, _why_no_place(reading.speed_hz, critical)
    vector = _vector(scene, channel.name, reading)
    if vector is None:
        return None, None, _below_floor(channel.name)
    lag = angle_deg(vector)
    at = place_by_lag_deg(lag, probe, sensor_with_rotation_deg(scene.standing), channel.kind)
    share = reading.speed_hz / (critical or 1.0)
    why = f"at {share:.2f} of the first critical speed (below {BELOW_CRITICAL}) the rotor hardly lags."
    return at, channel.name, f"Placed against the vibration of {channel.name}: {why}"


def _why_no_place(speed_hz: float, critical_hz: float | None) -> str:
    if critical_hz is None:
        reason = "the first critical speed is not on record and no history knows the lag"
    else:
        share = f"{speed_hz * 60:.0f} r/min is {speed_hz / critical_hz:.2f} of the first critical speed"
        reason = f"{share}, not below {BELOW_CRITICAL}, and no history knows the lag"
    return f"No place: {reason}. A weight could land on the heavy side, so half the mass."


def _hole(scene: Scene | None, plane: WeightPlane, place: float | None) -> tuple[int, float] | None:
    if scene is None or place is None or not plane.holes:
        return None
    mount, ends = scene.standing.mount, scene.standing.ends
    try:
        hole = nearest_hole(plane, mount, place, ends)
        return hole, hole_angle_deg(plane, mount, hole, ends)
    except Refusal:
        return None


def _notes(story: JobStory, mount: Mount, plane: WeightPlane, hole: int | None) -> tuple[str, ...]:
    notes = []
    if hole is None and plane.holes and mount.mark_of(plane.number) is None:
        notes.append("The rotor mark's position was not typed for this mount, so no hole can be named.")
    if any(e.plane == plane.number and e.hole == hole is not None for e in pieces_now(story, mount)):
        notes.append(f"Hole {hole} holds a weight already; add to it or take a neighbour.")
    return tuple(notes)


# --- force of a piece ----------------------------------------------------------------------------------


def fit_force(mount: Mount, piece: PieceDraft, speeds_hz: Iterable[float] = ()) -> ForceAdvice:
    """Force of a piece at the highest of ``speeds_hz`` (the job's) and the service speed."""
    plane = plane_of(mount, piece.plane)
    radius = piece.radius_mm if piece.radius_mm is not None else plane.radius_mm
    speed = max([mount.machine.service_hz, *speeds_hz])
    load, _ = static_load_kg(mount.machine, piece.plane)
    force = force_n(piece.mass_g * radius, speed)
    share = force / (load * 9.80665)
    return ForceAdvice(
        piece.plane, piece.mass_g, radius, speed, force, load, share, force_caution(force, share, speed * 60)
    )


# --- questions before a label --------------------------------------------------------------------------


def label_questions(
    story: JobStory, label: Label, *, set_up: SetUp | None = None, run: Run | None = None
) -> tuple[str, ...]:
    """What to ask before a label is given; empty = nothing is odd.

    O is questioned when the weights differ from those listed at the mount, O+T when they equal those of O.
    ``run`` None = the next run (weights fitted now), else the run whose reading takes the label. ``set_up``
    names the stand's ends when no run does yet.
    """
    mount = mount_of(story, run) if run else _mount(story)
    set_up = set_up or next(iter(reversed(list(story.set_ups.values()))), None)
    if mount is None or set_up is None:
        return ()
    now = unbalances(pieces_at(story, run) if run else pieces_now(story, mount), mount, set_up.ends)
    listed = unbalances(pieces_listed(story, mount), mount, set_up.ends)
    if label is Label.O and not same_weights(now, listed):
        return ("The weights differ from those listed at the mount. Is this really an O run?",)
    o = _newest_o(story, mount, run) if label is Label.O_T else None
    if o is not None and same_weights(now, unbalances(pieces_at(story, o), mount, set_up.ends)):
        return (f"The weights are those of the O run {o.name}. Was a trial weight fitted and not entered?",)
    return ()


def _newest_o(story: JobStory, mount: Mount, run: Run | None) -> Run | None:
    for r in reversed(story.runs):
        same = mount_of(story, r) is mount and r.void is None and (run is None or r.id != run.id)
        if same and any(_is_o(x) for x in r.readings):
            return r
    return None


def _is_o(reading: Reading) -> bool:
    return reading.label is Label.O
