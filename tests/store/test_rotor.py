"""Set-ups, machines, models and mounts: revisions, refusals, what carries over."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest
from store_kit import CLOCKWISE, MACHINE, MOUNT, SET_UP, Stand

from config.errors import Refusal
from store.records import MarkPosition, PieceDraft, Sense, SetUpDraft, WeightPlane

BAD_NAMES = ["", "a" * 65, "a\x1b[31m", "a\nb", "a\x00", "\u202eabc", " a", "a\t"]


# --- set-ups -----------------------------------------------------------------------------------------


def test_set_up_comes_back_whole(stand: Stand) -> None:
    found = stand.history.set_up(stand.set_up_id)
    draft = SetUpDraft(
        found.stand,
        found.ends,
        found.angles_seen_from,
        found.zero,
        found.channels,
        found.pulse,
        found.rate_hz,
        found.driver,
    )
    assert draft == SET_UP
    assert found.revision == 1


def test_same_set_up_is_the_same_revision(stand: Stand) -> None:
    moved = replace(SET_UP, channels=(replace(SET_UP.channels[0], angle_deg=46.0), SET_UP.channels[1]))
    assert stand.ledger.set_up(SET_UP).id == stand.set_up_id
    assert stand.ledger.set_up(moved).revision == 2
    assert stand.ledger.set_up(SET_UP).revision == 1
    assert stand.ledger.set_up(replace(SET_UP, stand="bay-2")).revision == 1
    assert stand.ledger.set_up(replace(moved, rate_hz=51_200.0)).revision == 3


# --- machines ----------------------------------------------------------------------------------------


def test_machine_comes_back_whole(stand: Stand) -> None:
    found = stand.history.machine("F-204")
    assert (found.serial, found.revision, found.model.code, found.model.revision) == ("F-204", 1, "KR-22", 1)
    assert (found.rotor_mass_kg, found.service_hz, found.grade_mm_s) == (40.0, 25.0, 2.5)
    assert (found.permissible_gmm, found.bearing_loads_kg) == (None, (20.0, 20.0))
    assert found.model.planes == MACHINE.planes
    assert found.model.first_critical_hz == 61.0
    assert stand.history.machines() == (found,)
    assert stand.history.model("KR-22") == found.model


def test_revisions_only_where_something_differs(stand: Stand) -> None:
    first = stand.history.machine("F-204")
    assert stand.ledger.add_machine(replace(MACHINE, planes=()), "ana") == first
    heavier = stand.ledger.add_machine(replace(MACHINE, rotor_mass_kg=41.0), "ana")
    assert (heavier.revision, heavier.model.revision) == (2, 1)
    wider = (replace(MACHINE.planes[0], radius_mm=141.0), MACHINE.planes[1])
    sister = stand.ledger.add_machine(replace(MACHINE, serial="F-211", planes=wider), "ana")
    assert (sister.revision, sister.model.revision) == (1, 2)
    # the model is one: the first machine has it too
    assert stand.history.machine("F-204").model == sister.model
    assert [m.serial for m in stand.history.machines()] == ["F-204", "F-211"]
    other = stand.ledger.add_machine(replace(MACHINE, model_code="KR-30"), "ana")
    assert (other.revision, other.model.code) == (3, "KR-30")


def test_mount_keeps_the_machine_as_it_stood(stand: Stand) -> None:
    mount = stand.mount()
    wider = (replace(MACHINE.planes[0], radius_mm=141.0), MACHINE.planes[1])
    stand.ledger.add_machine(replace(MACHINE, rotor_mass_kg=41.0, planes=wider), "ana")
    kept = stand.history.mount(mount.id).machine
    assert (kept.rotor_mass_kg, kept.model.planes[0].radius_mm) == (40.0, 140.0)
    assert stand.mount(job_number="0143").machine.model.planes[0].radius_mm == 141.0


@pytest.mark.parametrize("name", BAD_NAMES)
@pytest.mark.parametrize("field", ["serial", "model_code"])
def test_bad_machine_names(refusing: Stand, field: str, name: str) -> None:
    with pytest.raises(Refusal, match="cannot be used"):
        refusing.ledger.add_machine(replace(MACHINE, **{field: name}), "ana")


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"rotor_mass_kg": 0.0}, "rotor mass"),
        ({"rotor_mass_kg": float("nan")}, "rotor mass"),
        ({"service_hz": float("inf")}, "service speed"),
        ({"grade_mm_s": -2.5}, "balance grade"),
        ({"permissible_gmm": 0.0}, "permissible"),
        ({"first_critical_hz": 0.0}, "first critical"),
        ({"vibration_limit_um_pk": 0.0}, "vibration limit"),
        ({"bearing_loads_kg": (20.0, -1.0)}, "bearing load"),
        ({"planes": (WeightPlane(0, 140.0, 24, CLOCKWISE),)}, "numbered 0"),
        ({"planes": (WeightPlane(1, 0.0, 24, CLOCKWISE),)}, "radius of plane 1"),
        ({"planes": (WeightPlane(1, 140.0, -1, CLOCKWISE),)}, "-1 holes"),
        ({"planes": (WeightPlane(1, 140.0, 24, CLOCKWISE),) * 2}, "same number"),
        ({"planes": (WeightPlane(1, 140.0, 24, Sense("upwards", "drive")),)}, "upwards"),  # type: ignore[arg-type]
        ({"planes": (WeightPlane(1, 140.0, 24, Sense("clockwise", "")),)}, "end's name"),
        ({"planes": (WeightPlane(1, 140.0, 24, CLOCKWISE, float("inf")),)}, "position of plane 1"),
        ({"model_code": "new", "planes": ()}, "not known yet"),
    ],
)
def test_bad_machines(refusing: Stand, change: dict[str, Any], says: str) -> None:
    with pytest.raises(Refusal, match=says):
        refusing.ledger.add_machine(replace(MACHINE, **change), "ana")


# --- mounts ------------------------------------------------------------------------------------------


def test_mount_opens_a_job(stand: Stand) -> None:
    mount = stand.mount()
    job = stand.history.job("0142")
    assert (job.machine_serial, job.speeds_hz, job.id) == ("F-204", (25.0,), mount.job_id)
    assert (mount.rotation, mount.marks) == (Sense("counterclockwise", "drive"), (MarkPosition(1, 30.0),))
    assert (mount.mark_how, mount.mark_width_deg, mount.ended_us) == ("degree wheel", 4.0, None)
    assert (mount.support, mount.coupling, mount.who) == ("hard bearings", "belt", "ana")
    assert stand.history.current_mount() == mount
    assert stand.history.job_of(mount.id) == job


def test_new_mount_ends_the_old_one_and_none_ends_without_another(stand: Stand) -> None:
    first = stand.mount()
    second = stand.mount(speeds_hz=(25.0, 50.0))
    assert stand.history.mount(first.id).ended_us == second.at_us
    assert stand.history.job("0142").speeds_hz == (25.0, 50.0)
    ended = stand.ledger.unmount("ana")
    assert ended is not None
    assert (ended.id, ended.ended_us is not None) == (second.id, True)
    assert stand.history.current_mount() is None
    assert stand.ledger.unmount("ana") is None
    assert [m.id for m in stand.history.mounts("0142")] == [first.id, second.id]


def test_speeds_typed_win_over_the_service_speed(stand: Stand) -> None:
    stand.mount(speeds_hz=(20.0, 24.0))
    stand.mount(speeds_hz=(20.0 + 1e-9,))
    assert stand.history.job("0142").speeds_hz == (20.0, 24.0)


def test_job_is_one_machine(stand: Stand) -> None:
    stand.ledger.add_machine(replace(MACHINE, serial="F-211"), "ana")
    mount = stand.mount()
    with pytest.raises(Refusal, match="Job 0142 is of machine F-204, not F-211"):
        stand.mount(serial="F-211")
    assert stand.history.current_mount() == mount


def test_mark_position_not_typed_comes_from_the_mount_before(stand: Stand) -> None:
    with pytest.raises(Refusal, match="hole 1 of plane 1, is not known"):
        stand.mount(marks=())
    stand.mount()
    again = stand.mount(job_number="0143", marks=())
    assert (again.marks, again.mark_how) == ((MarkPosition(1, 30.0),), None)


@pytest.mark.parametrize("name", [*BAD_NAMES, "U"])
def test_bad_job_names(refusing: Stand, name: str) -> None:
    with pytest.raises(Refusal):
        refusing.mount(job_number=name)


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"serial": "F-999"}, "no machine 'F-999'"),
        ({"rotation": Sense("clockwise", "motor")}, "'motor' is not an end"),
        ({"marks": (MarkPosition(1, 0.0), MarkPosition(7, 0.0))}, "no plane 7"),
        ({"marks": (MarkPosition(1, 0.0), MarkPosition(1, 1.0))}, "given twice"),
        ({"marks": (MarkPosition(1, float("nan")),)}, "mark's position"),
        ({"mark_width_deg": 0.0}, "0 deg wide"),
        ({"mark_how": "two\nlines"}, "mark was measured"),
        ({"support": "a\x1bb"}, "support"),
        ({"coupling": "a\x1bb"}, "coupling"),
        ({"speeds_hz": (0.0,)}, "balancing speed"),
        ({"fitted": (PieceDraft(1, 3.0, 25),)}, "holes 1 to 24; there is no hole 25"),
        ({"carry_over": True}, "not mounted before in this job"),
    ],
)
def test_bad_mounts_change_nothing(refusing: Stand, change: dict[str, Any], says: str) -> None:
    with pytest.raises(Refusal, match=says):
        refusing.mount(**change)


def test_mount_before_any_set_up(store_path: Any, clock: Any) -> None:
    from store.ledger import Ledger

    with Ledger.open(store_path, clock=clock, software="x") as ledger:
        ledger.add_machine(MACHINE, "ana")
        with pytest.raises(Refusal, match="set-up is not stored yet"):
            ledger.mount(MOUNT, "ana")


# --- what carries over -------------------------------------------------------------------------------


def _pieces(stand: Stand) -> list[tuple[object, ...]]:
    mount = stand.history.current_mount()
    assert mount is not None
    return [
        (p.act, p.plane, p.mass_g, p.hole, p.angle_deg, p.at_mount) for p in stand.history.weights(mount.id)
    ]


def _worked_on(stand: Stand) -> None:
    stand.mount(fitted=(PieceDraft(1, 2.0, 3),), marks=(MarkPosition(1, 30.0), MarkPosition(2, 0.0)))
    stand.ledger.fit(PieceDraft(2, 1.5, angle_deg=100.0), "ana")
    stand.ledger.drill(PieceDraft(1, 0.5, 7), "ana")


def test_carry_over(stand: Stand) -> None:
    _worked_on(stand)
    stand.mount(carry_over=True, marks=(MarkPosition(1, 30.0), MarkPosition(2, 0.0)))
    assert _pieces(stand) == [
        ("fitted", 1, 2.0, 3, None, True),
        ("fitted", 2, 1.5, None, 100.0, True),
        ("drilled", 1, 0.5, 7, None, True),
    ]


def test_clean_rotor_keeps_what_was_drilled(stand: Stand) -> None:
    _worked_on(stand)
    stand.mount()
    assert _pieces(stand) == [("drilled", 1, 0.5, 7, None, True)]
    stand.mount(job_number="0143")
    assert _pieces(stand) == []


def test_angle_is_counted_from_the_new_rotor_mark(stand: Stand) -> None:
    """Rotation counterclockwise, holes numbered clockwise: numbering runs against rotation (METHODS 6.1).

    The piece sits 100 deg against rotation from the old mark. The mark moves 10 deg in the sense of the
    numbering, so it now lies 90 deg from the mark: hand calculation.
    """
    _worked_on(stand)
    marks = (MarkPosition(1, 40.0), MarkPosition(2, 10.0))
    stand.mount(carry_over=True, marks=marks, mark_change="moved")
    assert _pieces(stand)[1][4] == pytest.approx(90.0)


def test_angle_cannot_be_carried_when_rotation_turns_round(stand: Stand) -> None:
    _worked_on(stand)
    with pytest.raises(Refusal, match="cannot be carried over"):
        stand.mount(
            carry_over=True,
            rotation=CLOCKWISE,
            marks=(MarkPosition(1, 30.0), MarkPosition(2, 0.0)),
        )
