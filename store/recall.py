"""Rows to records: stand, rotor, jobs, mounts, weights. Used in the writer's transaction and by readers.

Every function takes a connection with a transaction open and raises Refusal for what is named and not there.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable
from typing import Any
from uuid import UUID

from sqlalchemy import Connection, Row, Select, func, select

from config.errors import Refusal
from store.records import (
    ChannelSetUp,
    Job,
    Machine,
    MarkPosition,
    Model,
    Mount,
    PulseSetUp,
    Sense,
    SetUp,
    WeightEvent,
    WeightPlane,
)
from store.tables import (
    job,
    job_speed,
    machine,
    model,
    run_revise,
    set_up,
    set_up_channel,
    weight,
    weight_plane,
    weight_void,
)
from store.tables import run as run_table
from store.views import mount_mark_now, mount_now

# --- models and machines -----------------------------------------------------------------------------


def newest_model(c: Connection, code: str) -> Model | None:
    """The model as it is known now."""
    row = c.execute(select(model).where(model.c.code == code).order_by(model.c.revision.desc())).first()
    return None if row is None else _model(c, row)


def model_named(c: Connection, code: str) -> Model:
    """Raises Refusal when there is no such model."""
    found = newest_model(c, code)
    if found is None:
        raise Refusal(
            f"There is no model {code!r} in the store.", "`revmark machine list` shows those there are."
        )
    return found


def model_by_id(c: Connection, model_id: UUID) -> Model:
    """The model as it stood at one revision."""
    return _model(c, c.execute(select(model).where(model.c.id == model_id)).one())


def _model(c: Connection, row: Row[Any]) -> Model:
    planes = c.execute(
        select(weight_plane).where(weight_plane.c.model_id == row.id).order_by(weight_plane.c.number)
    )
    return Model(
        id=row.id,
        code=row.code,
        revision=row.revision,
        planes=tuple(_plane(p) for p in planes),
        first_critical_hz=row.first_critical_hz,
    )


def _plane(row: Row[Any]) -> WeightPlane:
    return WeightPlane(
        number=row.number,
        radius_mm=row.radius_mm,
        holes=row.holes,
        numbering=Sense(row.numbering_turn, row.numbering_seen_from),
        position_mm=row.position_mm,
    )


def newest_machine(c: Connection, serial: str) -> Machine:
    """The machine and its model as they are known now. Raises Refusal when there is none."""
    row = c.execute(
        select(machine).where(machine.c.serial == serial).order_by(machine.c.revision.desc())
    ).first()
    if row is None:
        raise Refusal(
            f"There is no machine {serial!r} in the store.",
            "`revmark machine list` shows those there are; `revmark machine add` makes one.",
        )
    return _machine(row, _newest_of(c, row.model_id))


def machines(c: Connection) -> tuple[Machine, ...]:
    """All machines as they are known now, by serial number."""
    newest = select(func.max(machine.c.seq)).group_by(machine.c.serial)
    rows = c.execute(select(machine).where(machine.c.seq.in_(newest)).order_by(machine.c.serial)).all()
    models = {i: _newest_of(c, i) for i in {r.model_id for r in rows}}
    return tuple(_machine(r, models[r.model_id]) for r in rows)


def _newest_of(c: Connection, model_id: UUID) -> Model:
    code = select(model.c.code).where(model.c.id == model_id).scalar_subquery()
    row = c.execute(select(model).where(model.c.code == code).order_by(model.c.revision.desc())).first()
    assert row is not None  # the row named by a foreign key
    return _model(c, row)


def _machine(row: Row[Any], of: Model) -> Machine:
    return Machine(
        id=row.id,
        serial=row.serial,
        revision=row.revision,
        model=of,
        rotor_mass_kg=row.rotor_mass_kg,
        service_hz=row.service_hz,
        grade_mm_s=row.grade_mm_s,
        permissible_gmm=row.permissible_gmm,
        bearing_loads_kg=tuple(row.bearing_loads_kg),
        vibration_limit_um_pk=row.vibration_limit_um_pk,
    )


# --- set-ups -----------------------------------------------------------------------------------------


def set_up_by_id(c: Connection, set_up_id: UUID) -> SetUp:
    """Raises Refusal when there is no such set-up."""
    row = c.execute(select(set_up).where(set_up.c.id == set_up_id)).first()
    if row is None:
        raise Refusal(
            f"There is no set-up {set_up_id} in the store.", "`revmark run show` names a run's set-up."
        )
    return _set_up(c, row)


def newest_set_up(c: Connection) -> SetUp | None:
    """The stand's set-up entered last; None in a store that never measured.

    One that only corrects runs of the past (and measured none) is not the stand's."""
    corrects = select(run_revise.c.seq).where(run_revise.c.set_up_id == set_up.c.id).exists()
    measured = select(run_table.c.seq).where(run_table.c.set_up_id == set_up.c.id).exists()
    newest = select(set_up).where(~corrects | measured).order_by(set_up.c.seq.desc()).limit(1)
    row = c.execute(newest).first()
    return None if row is None else _set_up(c, row)


def _set_up(c: Connection, row: Row[Any]) -> SetUp:
    channels = c.execute(
        select(set_up_channel).where(set_up_channel.c.set_up_id == row.id).order_by(set_up_channel.c.place)
    )
    return SetUp(
        id=row.id,
        revision=row.revision,
        stand=row.stand,
        ends=(row.end_a, row.end_b),
        angles_seen_from=row.angles_seen_from,
        zero=row.zero,
        channels=tuple(_channel(r) for r in channels),
        pulse=PulseSetUp(
            name=row.pulse_name,
            input=row.pulse_input,
            edge=row.pulse_edge,
            level_v=row.pulse_level_v,
            angle_deg=row.pulse_angle_deg,
            pulses=row.pulse_count,
            pattern=row.pulse_pattern,
        ),
        rate_hz=row.rate_hz,
        driver=row.driver,
    )


def _channel(row: Row[Any]) -> ChannelSetUp:
    return ChannelSetUp(
        name=row.name,
        kind=row.kind,
        unit=row.unit,
        input=row.input,
        volts_per_unit=row.volts_per_unit,
        positive=row.positive,
        angle_deg=row.angle_deg,
        coupling=row.coupling,
        filter=row.filter,
        skew_s=row.skew_s,
        pair=row.pair,
        gap_low_v=row.gap_low_v,
        gap_high_v=row.gap_high_v,
    )


# --- jobs and mounts ---------------------------------------------------------------------------------


def job_named(c: Connection, number: str) -> Job:
    """Raises Refusal when the shop's number is not known."""
    found = find_job(c, number)
    if found is None:
        raise Refusal(
            f"There is no job {number!r} in the store.",
            "`revmark run list` shows the jobs there are; `revmark mount` opens one.",
        )
    return found


def find_job(c: Connection, number: str) -> Job | None:
    found = _jobs(c, select(job).where(job.c.number == number))
    return found[0] if found else None


def job_by_id(c: Connection, job_id: UUID) -> Job:
    return _jobs(c, select(job).where(job.c.id == job_id))[0]


def jobs(c: Connection, serial: str | None = None) -> tuple[Job, ...]:
    """All jobs (of one machine), in the order in which they were opened."""
    wanted = select(job).order_by(job.c.seq)
    return _jobs(c, wanted if serial is None else wanted.where(job.c.machine_serial == serial))


def _jobs(c: Connection, wanted: Select[Any]) -> tuple[Job, ...]:
    rows = c.execute(wanted).all()
    speeds: dict[UUID, list[float]] = defaultdict(list)
    ids = wanted.with_only_columns(job.c.id).order_by(None)
    for s in c.execute(select(job_speed).where(job_speed.c.job_id.in_(ids)).order_by(job_speed.c.place)):
        speeds[s.job_id].append(s.speed_hz)
    return tuple(Job(r.id, r.number, r.machine_serial, tuple(speeds[r.id]), r.opened_us) for r in rows)


def current_mount(c: Connection) -> Mount | None:
    """What stands on the stand now; None when nothing does."""
    row = c.execute(select(mount_now).order_by(mount_now.c.seq.desc()).limit(1)).first()
    return None if row is None or row.job_id is None else _mount(c, row)


def mount_by_id(c: Connection, mount_id: UUID) -> Mount:
    """Raises Refusal when there is no such mount."""
    row = c.execute(select(mount_now).where(mount_now.c.id == mount_id)).first()
    if row is None or row.job_id is None:
        raise Refusal(
            f"There is no mount {mount_id} in the store.", "`revmark job show` lists a job's mounts."
        )
    return _mount(c, row)


def mounts_of_job(c: Connection, job_id: UUID) -> tuple[Mount, ...]:
    """In order."""
    rows = c.execute(select(mount_now).where(mount_now.c.job_id == job_id).order_by(mount_now.c.seq))
    return tuple(_mount(c, r) for r in rows.all())


def last_mount_of(c: Connection, serial: str) -> Mount | None:
    """The machine's newest mount in any job, ended or not."""
    row = c.execute(
        select(mount_now)
        .join(machine, machine.c.id == mount_now.c.machine_id)
        .where(machine.c.serial == serial)
        .order_by(mount_now.c.seq.desc())
        .limit(1)
    ).first()
    return None if row is None else _mount(c, row)


def _mount(c: Connection, row: Row[Any]) -> Mount:
    marks = c.execute(
        select(mount_mark_now).where(mount_mark_now.c.mount_id == row.id).order_by(mount_mark_now.c.plane)
    ).all()
    who = c.execute(select(machine).where(machine.c.id == row.machine_id)).one()
    return Mount(
        id=row.id,
        job_id=row.job_id,
        machine=_machine(who, model_by_id(c, row.model_id)),
        rotation=Sense(row.rotation_turn, row.rotation_seen_from),
        marks=tuple(MarkPosition(m.plane, m.from_hole1_deg) for m in marks),
        mark_how=row.mark_how,
        mark_width_deg=row.mark_width_deg,
        support=row.support,
        coupling=row.coupling,
        at_us=row.at_us,
        ended_us=row.ended_us,
        who=row.who,
    )


# --- weights -----------------------------------------------------------------------------------------


def weight_events(
    c: Connection, mount_ids: Iterable[UUID], *, with_void: bool = False
) -> tuple[WeightEvent, ...]:
    """The acts of some mounts that count, in the order in which they were done: by mount, run, entry."""
    events = anchored_events(c, mount_ids, with_void=with_void)
    return tuple(event for event, _ in events)


def anchored_events(
    c: Connection, mount_ids: Iterable[UUID], *, with_void: bool = False
) -> tuple[tuple[WeightEvent, int], ...]:
    """The same with the place of the run after which each was done (0 = before the mount's first run)."""
    anchor = func.coalesce(run_table.c.seq, 0)
    rows = c.execute(
        select(weight, anchor.label("anchor"), weight_void.c.why.label("void"))
        .join(mount_now, mount_now.c.id == weight.c.mount_id)
        .join(run_table, run_table.c.id == weight.c.after_run_id, isouter=True)
        .join(weight_void, weight_void.c.weight_id == weight.c.id, isouter=True)
        .where(weight.c.mount_id.in_(list(mount_ids)))
        .order_by(mount_now.c.seq, anchor, weight.c.at_mount.desc(), weight.c.seq)
    )
    return tuple((_weight(r), r.anchor) for r in rows if with_void or r.void is None)


def _weight(row: Row[Any]) -> WeightEvent:
    return WeightEvent(
        id=row.id,
        mount_id=row.mount_id,
        seq=row.seq,
        after_run_id=row.after_run_id,
        at_mount=bool(row.at_mount),
        act=row.act,
        plane=row.plane,
        mass_g=row.mass_g,
        radius_mm=row.radius_mm,
        hole=row.hole,
        angle_deg=row.angle_deg,
        removes_id=row.removes_id,
        at_us=row.at_us,
        who=row.who,
        void=row.void,
    )


def still_there(events: Iterable[WeightEvent]) -> tuple[WeightEvent, ...]:
    """Of some acts, what remains: fitted and not removed, and drilled."""
    kept = tuple(events)
    gone = {e.removes_id for e in kept if e.act == "removed"}
    return tuple(e for e in kept if e.act != "removed" and e.id not in gone)
