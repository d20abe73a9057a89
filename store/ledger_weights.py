"""Weight events: fitted, removed, drilled. The weights at a run are derived from them, never stored."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any
from uuid import UUID

from sqlalchemy import select

from config.errors import Refusal
from store import ledger_coefficients, recall, recall_runs
from store.balance.angles import Ends, difference_deg, frame_turn_deg, plane_of, same_sense, wrap_deg
from store.names import check_finite, check_positive, check_text
from store.records import Mount, PieceDraft, WeightAct, WeightEvent, WeightPlane
from store.tables import weight, weight_void
from store.views import run_now
from store.writer import Writer

AT_MOUNT = "mount"
"""As ``after_run``: before the first run of the current mount."""
_SAME_ANGLE_DEG = 0.5


def put(
    w: Writer, act: WeightAct, piece: PieceDraft, who: str, after_run: str | None
) -> tuple[WeightEvent, ...]:
    """Fit or drill one piece, now or (``after_run``) where it belongs in the order.

    Raises Refusal: nothing mounted, no such plane or hole, neither or both of hole and angle.
    """
    at, after = _place(w, after_run)
    event_id = w.ids.new()
    w.add(weight, **_row(w, event_id, at, piece, act=act, who=who), after_run_id=after, at_mount=0)
    ledger_coefficients.rebuild(w, at.job_id)
    return _events(w, at, {event_id})


def remove(
    w: Writer,
    plane: int,
    who: str,
    after_run: str | None,
    *,
    hole: int | None,
    angle_deg: float | None,
    every: bool,
) -> tuple[WeightEvent, ...]:
    """Take pieces off: those of a hole, at an angle, or every one of the plane; the one piece by itself.

    Raises Refusal when there is none, or when it is not said which of several.
    """
    at, after = _place(w, after_run)
    plane_of(at, plane)
    there = [p for p in _removable(w, at, after) if p.plane == plane]
    gone = _choose(there, plane, hole=hole, angle_deg=angle_deg, every=every)
    ids: set[UUID] = set()
    for piece in gone:
        ids.add(event_id := w.ids.new())
        as_typed = PieceDraft(plane, piece.mass_g, piece.hole, piece.angle_deg, piece.radius_mm)
        row = _row(w, event_id, at, as_typed, act="removed", who=who)
        w.add(weight, **{**row, "removes_id": piece.id}, after_run_id=after, at_mount=0)
    ledger_coefficients.rebuild(w, at.job_id)
    return _events(w, at, ids)


def void(w: Writer, number: int, why: str, who: str) -> tuple[WeightEvent, ...]:
    """Take an entry out, with the removal of the piece that it fitted; both stay in the store.

    ``number`` is its ``seq``. Raises Refusal: no such entry, void already, no reason.
    """
    why = check_text("The reason", why)
    if not why:
        raise Refusal("A void needs a reason.", "Say why the entry does not count.")
    mount_id = w.c.execute(select(weight.c.mount_id).where(weight.c.seq == number)).scalar()
    if mount_id is None:
        raise Refusal(
            f"There is no weight entry {number}.", "`revmark weight list --all` shows the entries' numbers."
        )
    events = recall.weight_events(w.c, [mount_id], with_void=True)
    entry = next(e for e in events if e.seq == number)
    if entry.void is not None:
        raise Refusal(f"Weight entry {number} is void already ({entry.void}).", "Nothing to do.")
    gone = [e for e in events if e.void is None and entry.id in (e.id, e.removes_id)]
    for event in gone:
        w.add(weight_void, weight_id=event.id, why=why, at_us=w.now_us(), who=who)
    ledger_coefficients.rebuild(w, recall.mount_by_id(w.c, mount_id).job_id)
    ids = {e.id for e in gone}
    return tuple(e for e in recall.weight_events(w.c, [mount_id], with_void=True) if e.id in ids)


def list_at_mount(
    w: Writer,
    begun: Mount,
    fitted: Sequence[PieceDraft],
    earlier: Mount | None,
    *,
    carry_over: bool,
    who: str,
) -> None:
    """What is on the rotor at a mount: the pieces listed, and what stays from the job's mount before.

    What was drilled stays drilled; fitted pieces stay when ``carry_over`` says so.
    """
    if carry_over and earlier is None:
        raise Refusal(
            f"{begun.machine.serial} was not mounted before in this job.",
            "List what is fitted, or say that the rotor is clean.",
        )
    rows = [_row(w, w.ids.new(), begun, p, act="fitted", who=who) for p in fitted]
    if earlier is not None:
        for old in recall.still_there(recall.weight_events(w.c, [earlier.id])):
            if carry_over or old.act == "drilled":
                _refuse_changed_plane(w, old, earlier, begun)
                piece = _carried(w, old, earlier, begun)
                rows.append(_row(w, w.ids.new(), begun, piece, act=old.act, who=who))
    w.add_all(weight, [{**row, "after_run_id": None, "at_mount": 1} for row in rows])


def _refuse_changed_plane(w: Writer, old: WeightEvent, then: Mount, now: Mount) -> None:
    """A piece is at its hole and radius as they were; where these were revised it would be moved silently."""
    stands = recall.newest_set_up(w.c)
    assert stands is not None  # a mount is refused without one
    was, plane = plane_of(then, old.plane), plane_of(now, old.plane)
    changed = _plane_changes(was, plane, stands.ends)
    if changed:
        raise Refusal(
            f"The pieces in plane {plane.number} of {now.machine.serial} cannot be carried over: since its "
            f"last mount {' and '.join(changed)}.",
            "List what is fitted as it is counted now (--fitted), or open another job."
            if old.act == "fitted"
            else "What was drilled stays drilled: open another job, with the rotor as it is for its start.",
        )


def _plane_changes(was: WeightPlane, now: WeightPlane, ends: Ends) -> list[str]:
    changed: list[str] = []
    if not math.isclose(was.radius_mm, now.radius_mm, rel_tol=1e-9):
        changed.append(f"its radius changed from {was.radius_mm:g} to {now.radius_mm:g} mm")
    if was.holes != now.holes:
        changed.append(f"its holes changed from {was.holes} to {now.holes}")
    if not same_sense(was.numbering, now.numbering, ends):
        changed.append(f"its numbering changed from {was.numbering} to {now.numbering}")
    return changed


def _carried(w: Writer, old: WeightEvent, then: Mount, now: Mount) -> PieceDraft:
    """A piece of the mount before, counted from this mount's rotor mark where it has no hole."""
    angle = old.angle_deg
    if old.hole is None and angle is not None:
        stands = recall.newest_set_up(w.c)
        assert stands is not None  # a mount is refused without one
        turned = frame_turn_deg(then, now, stands.ends)
        if turned is None or not same_sense(then.rotation, now.rotation, stands.ends):
            raise Refusal(
                f"The piece at {angle:g} deg in plane {old.plane} cannot be carried over: the rotor mark's "
                "position or the direction of rotation changed.",
                "Give the rotor mark's position for this mount, or open another job.",
            )
        angle = wrap_deg(angle + turned)
    return PieceDraft(old.plane, old.mass_g, old.hole, angle, old.radius_mm)


def _place(w: Writer, after_run: str | None) -> tuple[Mount, UUID | None]:
    """The mount an act belongs to, and the run after which it was done (None = before the first)."""
    if after_run not in (None, AT_MOUNT):
        return _after(w, str(after_run))
    current = recall.current_mount(w.c)
    if current is None:
        raise Refusal("Nothing is mounted, so no weight can be entered.", "Mount the machine first.")
    return current, None if after_run == AT_MOUNT else recall_runs.newest_run_of_mount(w.c, current.id)


def _after(w: Writer, name: str) -> tuple[Mount, UUID]:
    run = recall_runs.run_named(w.c, name)
    if run.mount_id is None:
        raise Refusal(f"Run {name} belongs to no mount.", "Assign it to a job first: `revmark run assign`.")
    return recall.mount_by_id(w.c, run.mount_id), run.id


def _row(
    w: Writer, event_id: UUID, at: Mount, piece: PieceDraft, *, act: WeightAct, who: str
) -> dict[str, Any]:
    """The checked values of one event, without its place in the order."""
    plane = plane_of(at, piece.plane)
    radius = plane.radius_mm if piece.radius_mm is None else piece.radius_mm
    hole, angle = _spot(at, piece)
    return {
        "id": event_id,
        "mount_id": at.id,
        "act": act,
        "plane": piece.plane,
        "mass_g": check_positive("The mass (g)", piece.mass_g),
        "radius_mm": check_positive("The radius (mm)", radius),
        "hole": hole,
        "angle_deg": angle,
        "removes_id": None,
        "at_us": w.now_us(),
        "who": who,
    }


def _spot(at: Mount, piece: PieceDraft) -> tuple[int | None, float | None]:
    plane = plane_of(at, piece.plane)
    if (piece.hole is None) == (piece.angle_deg is None):
        raise Refusal(
            f"The piece in plane {piece.plane} needs either a hole or an angle.", "Give one of the two."
        )
    if piece.angle_deg is not None:
        return None, wrap_deg(check_finite("The angle (deg)", piece.angle_deg))
    if piece.hole is None or not 1 <= piece.hole <= plane.holes:
        have = f"holes 1 to {plane.holes}" if plane.holes else "no holes"
        raise Refusal(
            f"Plane {plane.number} of {at.machine.serial} has {have}; there is no hole {piece.hole}.",
            "Choose one of them." if plane.holes else "Give the weight an angle instead.",
        )
    return piece.hole, None


def _removable(w: Writer, at: Mount, after: UUID | None) -> list[WeightEvent]:
    """Pieces fitted by then and never removed; what was drilled cannot be taken off."""
    seq = select(run_now.c.seq).where(run_now.c.id == after)
    limit = 0 if after is None else w.c.execute(seq).scalar_one()
    events = recall.anchored_events(w.c, [at.id])
    left = {p.id for p in recall.still_there(e for e, _ in events)}
    return [e for e, anchor in events if e.act == "fitted" and e.id in left and anchor <= limit]


def _choose(
    there: list[WeightEvent], plane: int, *, hole: int | None, angle_deg: float | None, every: bool
) -> list[WeightEvent]:
    if hole is not None:
        found, where = [p for p in there if p.hole == hole], f"in hole {hole} of plane {plane}"
    elif angle_deg is not None:
        found, where = [p for p in there if _is_at(p, angle_deg)], f"at {angle_deg:g} deg in plane {plane}"
    else:
        found, where = there, f"in plane {plane}"
        if len(found) > 1 and not every:
            raise Refusal(
                f"Plane {plane} carries {len(found)} pieces.", "Name the hole or the angle, or take all."
            )
    if not found:
        raise Refusal(f"No piece is fitted {where}.", "`revmark weight list` shows what is fitted.")
    return found


def _is_at(piece: WeightEvent, angle_deg: float) -> bool:
    """A piece with an angle of its own, typed the same but for rounding."""
    at = piece.angle_deg
    return at is not None and abs(difference_deg(at, angle_deg)) <= _SAME_ANGLE_DEG


def _events(w: Writer, at: Mount, ids: set[UUID]) -> tuple[WeightEvent, ...]:
    return tuple(e for e in recall.weight_events(w.c, [at.id]) if e.id in ids)


# --- comparing ---------------------------------------------------------------------------------------


def same_weights(a: Sequence[WeightEvent], b: Sequence[WeightEvent]) -> bool:
    """Whether two sets of pieces put the same unbalance at the same places (within 1e-6)."""
    there, here = _sums(a), _sums(b)
    largest = max([1.0, *map(abs, there.values()), *map(abs, here.values())])
    places = there.keys() | here.keys()
    return all(math.isclose(there.get(p, 0), here.get(p, 0), abs_tol=1e-6 * largest) for p in places)


def _sums(pieces: Sequence[WeightEvent]) -> dict[tuple[int, int | None, float | None], float]:
    sums: dict[tuple[int, int | None, float | None], float] = {}
    for p in pieces:
        place = (p.plane, p.hole, None if p.angle_deg is None else round(p.angle_deg, 6))
        sums[place] = sums.get(place, 0.0) + p.mass_g * p.radius_mm * (-1 if p.act == "drilled" else 1)
    return sums
