"""Set-ups, machines and mounts: the parts of the ledger that say what stands on the stand, and how."""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Mapping
from dataclasses import asdict, replace
from typing import Any
from uuid import UUID

from sqlalchemy import func, select

from config.errors import NeedsAnswer, Refusal
from store import ledger_coefficients, ledger_weights, recall, recall_runs
from store.balance.angles import MARK_AGREEMENT_DEG, difference_deg, mark_shifts_deg, sign_of
from store.names import NAME_LENGTH, check_finite, check_name, check_positive, check_text
from store.records import (
    Job,
    Machine,
    MachineDraft,
    MarkPosition,
    Model,
    Mount,
    MountDraft,
    SetUp,
    SetUpDraft,
    WeightPlane,
)
from store.tables import (
    job,
    job_speed,
    machine,
    model,
    mount,
    mount_mark,
    mount_mark_revision,
    set_up,
    set_up_channel,
    weight_plane,
)
from store.writer import Writer

_SAME_SPEED = 1e-6
"""Relative: a speed typed again is the speed already there."""
MOST_PLANES = 2
"""The holes' split, the verdict's shares and the plots are proven for one and two planes."""


# --- the stand ---------------------------------------------------------------------------------------


def keep_set_up(w: Writer, draft: SetUpDraft) -> SetUp:
    """The stored revision with exactly this content, or a new one."""
    digest = hashlib.sha256(json.dumps(_content(draft), sort_keys=True).encode()).hexdigest()
    same = select(set_up.c.id).where(set_up.c.stand == draft.stand, set_up.c.digest == digest)
    found = w.c.execute(same).scalar()
    return recall.set_up_by_id(w.c, found or _new_set_up(w, draft, digest))


def _content(draft: SetUpDraft) -> dict[str, Any]:
    """What makes two set-ups the same; keys of later schemas count only where they say something."""
    told = asdict(draft)
    for part in (told["pulse"], *told["channels"]):
        for key in ("pattern", "pair"):
            if part.get(key, "") is None:
                del part[key]
    return told


def _new_set_up(w: Writer, draft: SetUpDraft, digest: str) -> UUID:
    set_up_id = w.ids.new()
    newest = select(func.max(set_up.c.revision)).where(set_up.c.stand == draft.stand)
    w.add(
        set_up,
        id=set_up_id,
        stand=check_name("The stand's name", draft.stand),
        revision=(w.c.execute(newest).scalar() or 0) + 1,
        end_a=check_name("An end's name", draft.ends[0]),
        end_b=check_name("An end's name", draft.ends[1]),
        angles_seen_from=draft.angles_seen_from,
        zero=draft.zero,
        pulse_name=draft.pulse.name,
        pulse_input=draft.pulse.input,
        pulse_edge=draft.pulse.edge,
        pulse_level_v=draft.pulse.level_v,
        pulse_angle_deg=draft.pulse.angle_deg,
        pulse_count=draft.pulse.pulses,
        pulse_pattern=None if draft.pulse.pattern is None else dict(draft.pulse.pattern),
        rate_hz=draft.rate_hz,
        driver=draft.driver,
        digest=digest,
        at_us=w.now_us(),
        software=w.software,
    )
    w.add_all(
        set_up_channel,
        [{"set_up_id": set_up_id, "place": i, **asdict(c)} for i, c in enumerate(draft.channels)],
    )
    return set_up_id


# --- machines ----------------------------------------------------------------------------------------


def keep_machine(w: Writer, draft: MachineDraft, who: str) -> Machine:
    """A new machine, a new revision of a known one, or (nothing differs) the one that is there.

    What is not typed stays as it is known; a grade typed without a figure replaces the figure, which
    would override it.
    """
    check_name("The machine's name", draft.serial)
    known = w.c.execute(
        select(machine).where(machine.c.serial == draft.serial).order_by(machine.c.revision.desc())
    ).first()
    before = None if known is None else recall.newest_machine(w.c, draft.serial)
    draft = _filled(draft, before)
    _check_machine(draft)
    of = _keep_model(w, draft, who)
    values = _machine_values(draft)
    same = before is not None and before.model.code == of.code
    if known is None or not same or any(getattr(known, k) != v for k, v in values.items()):
        w.add(
            machine,
            id=w.ids.new(),
            revision=1 if known is None else known.revision + 1,
            model_id=of.id,
            at_us=w.now_us(),
            who=who,
            **values,
        )
    return recall.newest_machine(w.c, draft.serial)


def _filled(draft: MachineDraft, known: Machine | None) -> MachineDraft:
    """The draft with what was not typed taken from the machine as it is known."""
    if known is None:
        return draft
    permissible = known.permissible_gmm if draft.grade_mm_s is None else None
    return replace(
        draft,
        model_code=known.model.code if draft.model_code is None else draft.model_code,
        rotor_mass_kg=known.rotor_mass_kg if draft.rotor_mass_kg is None else draft.rotor_mass_kg,
        service_hz=known.service_hz if draft.service_hz is None else draft.service_hz,
        grade_mm_s=known.grade_mm_s if draft.grade_mm_s is None else draft.grade_mm_s,
        permissible_gmm=permissible if draft.permissible_gmm is None else draft.permissible_gmm,
        bearing_loads_kg=draft.bearing_loads_kg or known.bearing_loads_kg,
        vibration_limit_um_pk=known.vibration_limit_um_pk
        if draft.vibration_limit_um_pk is None
        else draft.vibration_limit_um_pk,
    )


def _machine_values(draft: MachineDraft) -> dict[str, Any]:
    return {
        "serial": draft.serial,
        "rotor_mass_kg": draft.rotor_mass_kg,
        "service_hz": draft.service_hz,
        "grade_mm_s": draft.grade_mm_s,
        "permissible_gmm": draft.permissible_gmm,
        "bearing_loads_kg": list(draft.bearing_loads_kg),
        "vibration_limit_um_pk": draft.vibration_limit_um_pk,
    }


def _check_machine(draft: MachineDraft) -> None:
    if draft.model_code is None or draft.rotor_mass_kg is None or draft.service_hz is None:
        raise Refusal(
            f"Machine {draft.serial!r} is not known yet, and its model, rotor mass or service speed is not "
            "given.",
            "Give all three (--model, --mass, --speed); a known machine keeps what is not typed.",
        )
    check_name("The model's name", draft.model_code)
    check_positive("The rotor mass (kg)", draft.rotor_mass_kg)
    check_positive("The service speed (Hz)", draft.service_hz)
    optional = {
        "The balance grade (mm/s)": draft.grade_mm_s,
        "The permissible unbalance (g.mm)": draft.permissible_gmm,
        "The vibration limit (um)": draft.vibration_limit_um_pk,
        "The first critical speed (Hz)": draft.first_critical_hz,
    }
    for what, value in optional.items():
        if value is not None:
            check_positive(what, value)
    for load in draft.bearing_loads_kg:
        check_positive("A bearing load (kg)", load)
    for plane in draft.planes:
        _check_plane(plane)
    numbers = [p.number for p in draft.planes]
    if len(set(numbers)) < len(numbers):
        raise Refusal("Two planes have the same number.", "Number the planes 1, 2, ...")


def _check_plane(plane: WeightPlane) -> None:
    if plane.number < 1:
        raise Refusal(f"A plane is numbered {plane.number}.", "Number the planes 1, 2, ...")
    if not 0 <= plane.holes <= 10_000:
        raise Refusal(f"Plane {plane.number} has {plane.holes} holes.", "Give their number, 0 for any angle.")
    check_positive(f"The radius of plane {plane.number} (mm)", plane.radius_mm)
    check_name("An end's name", plane.numbering.seen_from)
    if plane.numbering.turn not in ("clockwise", "counterclockwise"):
        raise Refusal(
            f"Plane {plane.number} is numbered {plane.numbering.turn!r}.",
            "Say clockwise or counterclockwise, and seen from which end.",
        )
    if plane.position_mm is not None:
        check_finite(f"The position of plane {plane.number} (mm)", plane.position_mm)


def _keep_model(w: Writer, draft: MachineDraft, who: str) -> Model:
    code = str(draft.model_code)
    known = recall.newest_model(w.c, code)
    if known is None and not draft.planes:
        raise Refusal(
            f"Model {code!r} is not known yet, and no plane is given.",
            "Give its planes: radius, number of holes and how they are numbered.",
        )
    planes = _merged(known.planes if known else (), draft.planes)
    if len(planes) > MOST_PLANES:
        raise Refusal(
            f"Model {code!r} would have {len(planes)} weight planes; for now revmark balances in one or two.",
            "Give the one or two planes that are used.",
        )
    critical = draft.first_critical_hz
    if critical is None and known is not None:
        critical = known.first_critical_hz
    if known is not None and (known.planes, known.first_critical_hz) == (planes, critical):
        return known
    return _new_model(w, code, known.revision + 1 if known else 1, planes, critical, who)


def _merged(known: tuple[WeightPlane, ...], typed: tuple[WeightPlane, ...]) -> tuple[WeightPlane, ...]:
    """The planes typed in the place of those of their number; the others, and a position not typed, stay."""
    planes = {p.number: p for p in known}
    for plane in typed:
        old = planes.get(plane.number)
        kept = old.position_mm if old is not None and plane.position_mm is None else plane.position_mm
        planes[plane.number] = replace(plane, position_mm=kept)
    return tuple(planes[n] for n in sorted(planes))


def _new_model(
    w: Writer, code: str, revision: int, planes: tuple[WeightPlane, ...], critical: float | None, who: str
) -> Model:
    model_id = w.ids.new()
    w.add(
        model,
        id=model_id,
        code=code,
        revision=revision,
        first_critical_hz=critical,
        at_us=w.now_us(),
        who=who,
    )
    w.add_all(
        weight_plane,
        [
            {
                "model_id": model_id,
                "number": p.number,
                "radius_mm": p.radius_mm,
                "holes": p.holes,
                "numbering_turn": p.numbering.turn,
                "numbering_seen_from": p.numbering.seen_from,
                "position_mm": p.position_mm,
            }
            for p in planes
        ],
    )
    return recall.model_by_id(w.c, model_id)


# --- mounts ------------------------------------------------------------------------------------------


def begin_mount(w: Writer, draft: MountDraft, who: str) -> Mount:
    """A new mount; it ends the one before. Opens the job when its number is new.

    Raises Refusal: unknown machine, job of another machine, mark position not known, unknown end,
    a mark pending, a piece that cannot be where it is said to be; NeedsAnswer: another mark position than
    at the job's mount before, and not said why.
    """
    refuse_while_pending(w, "mounted")
    of = recall.newest_machine(w.c, draft.serial)
    before = recall.last_mount_of(w.c, draft.serial)
    marks, how = _marks(draft, of, before)
    _check_mount(w, draft, of, marks)
    into = _job_of(w, draft, of, who)
    mount_id = w.ids.new()
    w.add(
        mount,
        id=mount_id,
        job_id=into.id,
        machine_id=of.id,
        model_id=of.model.id,
        rotation_turn=draft.rotation.turn,
        rotation_seen_from=draft.rotation.seen_from,
        mark_how=how,
        mark_width_deg=draft.mark_width_deg,
        support=check_text("The support", draft.support, NAME_LENGTH),
        coupling=check_text("The coupling", draft.coupling, NAME_LENGTH),
        at_us=w.now_us(),
        who=who,
    )
    w.add_all(
        mount_mark,
        [{"mount_id": mount_id, "plane": m.plane, "from_hole1_deg": m.from_hole1_deg} for m in marks],
    )
    begun = recall.mount_by_id(w.c, mount_id)
    _heed_mark_change(w, draft, begun, who)
    earlier = None
    if before is not None and before.job_id == into.id:
        earlier = recall.mount_by_id(w.c, before.id)  # with the mark's place as it is known now
    ledger_weights.list_at_mount(w, begun, draft.fitted, earlier, carry_over=draft.carry_over, who=who)
    return begun


def _heed_mark_change(w: Writer, draft: MountDraft, begun: Mount, who: str) -> None:
    """Another mark position than at the job's mount before: moved, or mistyped before (then put right).

    The mounts before it with that same position get the new one by rows of ``mount_mark_revision``.
    """
    stands, mounts = recall.newest_set_up(w.c), recall.mounts_of_job(w.c, begun.job_id)[:-1]
    if stands is None or not mounts:
        return
    last = mounts[-1]
    shifts = mark_shifts_deg(last, begun, stands.ends)
    if not any(abs(s) > MARK_AGREEMENT_DEG for s in shifts.values()):
        return
    first = next(iter(shifts.values()))
    as_one = all(abs(difference_deg(s, first)) <= MARK_AGREEMENT_DEG for s in shifts.values())
    if draft.mark_change is None or (draft.mark_change == "moved" and not as_one):
        raise _which_change(last, begun, shifts, as_one=as_one)
    if draft.mark_change == "mistyped":
        _put_marks_right(w, mounts, begun, tuple(shifts), who)


def _which_change(last: Mount, begun: Mount, shifts: Mapping[int, float], *, as_one: bool) -> NeedsAnswer:
    told = [
        f"{f'Plane {plane}' if not i else f'plane {plane}'}'s rotor mark was {was.from_hole1_deg:g} deg from "
        f"hole 1, now {now.from_hole1_deg:g}"
        for i, plane in enumerate(sorted(shifts))
        if (was := last.mark_of(plane)) is not None and (now := begun.mark_of(plane)) is not None
    ]
    if as_one:
        return NeedsAnswer(
            f"{', '.join(told)}: was the mark moved, or mistyped before?",
            "Say --mark-moved (earlier runs are turned by it), or --mark-mistyped (the job's earlier mount "
            "is put right).",
            options=("--mark-moved", "--mark-mistyped"),
        )
    return NeedsAnswer(
        f"{', '.join(told)}: one mark moves all planes alike, so it can only have been mistyped.",
        "Say --mark-mistyped if the earlier mount was wrong; if the mark was moved, measure it in every "
        "plane and mount again.",
        options=("--mark-mistyped",),
    )


def _put_marks_right(
    w: Writer, mounts: tuple[Mount, ...], begun: Mount, planes: tuple[int, ...], who: str
) -> None:
    wrong = mounts[-1]
    for earlier in reversed(mounts):
        if any(earlier.mark_of(p) != wrong.mark_of(p) for p in planes):
            break  # the mark was moved in between: that position is another one's
        rows = [
            {
                "mount_id": earlier.id,
                "plane": m.plane,
                "from_hole1_deg": m.from_hole1_deg,
                "told_by_id": begun.id,
                "at_us": w.now_us(),
                "who": who,
            }
            for m in begun.marks
            if m.plane in planes
        ]
        w.add_all(mount_mark_revision, rows)
    ledger_coefficients.rebuild(w, begun.job_id)


def end_mount(w: Writer, who: str) -> Mount | None:
    """Nothing is mounted from here on."""
    refuse_while_pending(w, "taken off")
    current = recall.current_mount(w.c)
    if current is None:
        return None
    w.add(mount, id=w.ids.new(), at_us=w.now_us(), who=who)
    return recall.mount_by_id(w.c, current.id)


def refuse_while_pending(w: Writer, what: str) -> None:
    """Weights and mounts stay as they are while a mark waits for its reading."""
    pending = recall_runs.pending_mark(w.c)
    if pending is not None:
        raise Refusal(
            f"Nothing is {what} while the mark {pending.label} of job {pending.job_number} is pending.",
            "Wait for it, or cancel it with `revmark mark --cancel`.",
        )


def _marks(
    draft: MountDraft, of: Machine, before: Mount | None
) -> tuple[tuple[MarkPosition, ...], str | None]:
    """The rotor mark's positions and how they were measured; those not typed come from the mount before."""
    typed = {m.plane for m in draft.marks}
    needed = [p.number for p in of.model.planes if p.holes and p.number not in typed]
    kept = tuple(m for m in before.marks if m.plane in needed) if before is not None else ()
    lacking = set(needed) - {m.plane for m in kept}
    if lacking:
        raise Refusal(
            f"Where the rotor mark of {of.serial} is, counted from hole 1 of plane {min(lacking)}, "
            "is not known.",
            "Measure it and give it with the mount.",
        )
    marks = tuple(sorted((*draft.marks, *kept), key=lambda m: m.plane))
    return marks, draft.mark_how if not kept and draft.mark_how else None


def _check_mount(w: Writer, draft: MountDraft, of: Machine, marks: tuple[MarkPosition, ...]) -> None:
    _check_job_number(draft.job_number)
    stands = recall.newest_set_up(w.c)
    if stands is None:
        raise Refusal("The stand's set-up is not stored yet.", "Start `revmark serve` with the stand file.")
    sign_of(draft.rotation, stands.ends)
    for plane in of.model.planes:
        sign_of(plane.numbering, stands.ends)
    for position in marks:
        if of.model.plane(position.plane) is None:
            raise Refusal(
                f"Model {of.model.code} has no plane {position.plane}.",
                "Give the rotor mark's position for the planes it has.",
            )
        check_finite("The rotor mark's position (deg)", position.from_hole1_deg)
    if len({m.plane for m in marks}) < len(marks):
        raise Refusal(
            "The rotor mark's position is given twice for one plane.", "Give it once for each plane."
        )
    if draft.mark_width_deg is not None and not 0 < draft.mark_width_deg < 360:
        raise Refusal(
            f"The rotor mark is {draft.mark_width_deg:g} deg wide.", "Give a width between 0 and 360 deg."
        )
    if draft.mark_how is not None:
        check_text("How the rotor mark was measured:", draft.mark_how)
    for speed in draft.speeds_hz:
        check_positive("The balancing speed (Hz)", speed)


def _check_job_number(number: str) -> None:
    check_name("The job's number", number)
    if number == "U":
        raise Refusal("U is kept for unassigned runs.", "Use the shop's number of the job.")
    if "/" in number:
        raise Refusal(
            f"The job's number {number!r} holds a '/', which stands before a run's number.",
            "Write it with another sign, such as '-'.",
        )


def _job_of(w: Writer, draft: MountDraft, of: Machine, who: str) -> Job:
    """The job of that number, new or known, with its balancing speeds; a later mount may add speeds."""
    known = recall.find_job(w.c, draft.job_number)
    if known is None:
        known = Job(w.ids.new(), draft.job_number, of.serial, (), w.now_us())
        w.add(
            job,
            id=known.id,
            number=known.number,
            machine_serial=of.serial,
            opened_us=known.opened_us,
            who=who,
        )
        wanted = draft.speeds_hz or (of.service_hz,)
    elif known.machine_serial != of.serial:
        raise Refusal(
            f"Job {known.number} is of machine {known.machine_serial}, not {of.serial}.",
            "Give another job number: a job is one visit of one machine.",
        )
    else:
        wanted = draft.speeds_hz
    for speed in wanted:
        if not any(math.isclose(speed, s, rel_tol=_SAME_SPEED) for s in known.speeds_hz):
            w.add(job_speed, job_id=known.id, place=len(known.speeds_hz), speed_hz=speed)
            known = replace(known, speeds_hz=(*known.speeds_hz, speed))
    return known
