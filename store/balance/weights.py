"""Which weights were on the rotor at a run, derived from the weight events of its mount."""

from __future__ import annotations

from store.balance.angles import Ends, piece_unbalance
from store.records import JobStory, Mount, Run, WeightEvent

Unbalances = dict[int, complex]
"""Plane number -> U in g.mm against rotation from the rotor mark."""


def mount_of(story: JobStory, run: Run) -> Mount | None:
    """The mount of a run; for one recorded with nothing mounted, the mount that stood then or came next."""
    by_id = {m.id: m for m in story.mounts}
    if run.mount_id in by_id:
        return by_id[run.mount_id]
    before = [m for m in story.mounts if m.at_us <= run.started_us]
    return before[-1] if before else next(iter(story.mounts), None)


def _done_before(event: WeightEvent, run: Run, order: dict[object, int]) -> bool:
    """Whether the event belongs before ``run``. A run taken out of the story is placed by the clock."""
    if event.at_mount or event.after_run_id is None:
        return True
    position = order.get(event.after_run_id)
    if position is None:
        return event.at_us <= run.started_us
    return position < order.get(run.id, len(order))


def pieces_at(story: JobStory, run: Run) -> tuple[WeightEvent, ...]:
    """What was on the rotor (or drilled out of it) while ``run`` was recorded."""
    mount = mount_of(story, run)
    order: dict[object, int] = {r.id: i for i, r in enumerate(story.runs)}
    if mount is None:
        return ()
    return _left([e for e in story.weights if e.mount_id == mount.id and _done_before(e, run, order)])


def pieces_now(story: JobStory, mount: Mount) -> tuple[WeightEvent, ...]:
    """What is on the rotor at the end of the story, in its mount."""
    return _left([e for e in story.weights if e.mount_id == mount.id])


def pieces_listed(story: JobStory, mount: Mount) -> tuple[WeightEvent, ...]:
    """What was listed as already fitted when it was mounted."""
    return tuple(e for e in story.weights if e.mount_id == mount.id and e.at_mount and e.act != "removed")


def _left(events: list[WeightEvent]) -> tuple[WeightEvent, ...]:
    gone = {e.removes_id for e in events if e.act == "removed"}
    return tuple(e for e in events if e.act != "removed" and e.id not in gone)


def unbalances(pieces: tuple[WeightEvent, ...], mount: Mount, ends: Ends) -> Unbalances:
    """Sum of the pieces by plane, every plane of the model named (0 when it holds nothing).

    Raises Refusal when a piece's place cannot be told (no mark position, no such hole or plane).
    """
    total: Unbalances = {p.number: 0j for p in mount.machine.model.planes}
    for piece in pieces:
        total[piece.plane] = total.get(piece.plane, 0j) + piece_unbalance(piece, mount, ends)
    return total


def same_weights(a: Unbalances, b: Unbalances, *, scale_gmm: float = 1.0) -> bool:
    """Equal but for rounding: within 1e-6 of the largest weight (or of ``scale_gmm``)."""
    planes = a.keys() | b.keys()
    largest = max([scale_gmm, *(abs(v) for v in (*a.values(), *b.values()))])
    return all(abs(a.get(p, 0j) - b.get(p, 0j)) <= 1e-6 * largest for p in planes)
