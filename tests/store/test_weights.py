"""Weight events: order, removal, late entries, and what follows from them."""

from __future__ import annotations

from typing import Any

import pytest
from store_kit import Stand

from config.errors import Refusal
from store.balance.weights import pieces_at
from store.records import Label, PieceDraft


def _now(stand: Stand) -> list[tuple[str, float, int | None]]:
    mount = stand.history.current_mount()
    assert mount is not None
    return [(p.act, p.mass_g, p.hole) for p in stand.history.weights(mount.id)]


def _at_each_run(stand: Stand, **how: Any) -> list[list[float]]:
    story = stand.history.job_story("0142", **how)
    return [[p.mass_g for p in pieces_at(story, run)] for run in story.runs]


def test_fit_and_remove(stand: Stand) -> None:
    stand.mount()
    (fitted,) = stand.ledger.fit(PieceDraft(1, 3.0, 16), "ana")
    assert (fitted.act, fitted.radius_mm, fitted.after_run_id, fitted.who) == ("fitted", 140.0, None, "ana")
    stand.ledger.fit(PieceDraft(1, 1.0, 16, radius_mm=150.0), "ana")  # a second piece in one hole
    stand.ledger.fit(PieceDraft(1, 2.0, 4), "ana")
    gone = stand.ledger.remove(1, "ana", hole=16)
    assert [(g.act, g.mass_g, g.radius_mm) for g in gone] == [
        ("removed", 3.0, 140.0),
        ("removed", 1.0, 150.0),
    ]
    assert gone[0].removes_id == fitted.id
    assert _now(stand) == [("fitted", 2.0, 4)]
    with pytest.raises(Refusal, match="No piece is fitted in hole 16"):
        stand.ledger.remove(1, "ana", hole=16)


def test_remove_needs_to_know_which(stand: Stand) -> None:
    stand.mount()
    stand.fit(1.0, 1)
    stand.fit(2.0, 2)
    with pytest.raises(Refusal, match="carries 2 pieces"):
        stand.ledger.remove(1, "ana")
    assert len(stand.ledger.remove(1, "ana", every=True)) == 2
    stand.fit(3.0, 3)
    assert [g.hole for g in stand.ledger.remove(1, "ana")] == [3]
    with pytest.raises(Refusal, match="No piece is fitted in plane 1"):
        stand.ledger.remove(1, "ana", every=True)


def test_pieces_at_angles(stand: Stand) -> None:
    stand.mount()
    (event,) = stand.ledger.fit(PieceDraft(2, 5.0, angle_deg=-10.0), "ana")
    assert (event.angle_deg, event.hole, event.radius_mm) == (350.0, None, 120.0)
    with pytest.raises(Refusal, match="at 20 deg in plane 2"):
        stand.ledger.remove(2, "ana", angle_deg=20.0)
    assert len(stand.ledger.remove(2, "ana", angle_deg=350.2)) == 1


def test_drilled_stays(stand: Stand) -> None:
    stand.mount()
    stand.ledger.drill(PieceDraft(1, 0.7, 5), "ana")
    with pytest.raises(Refusal, match="No piece is fitted in hole 5"):
        stand.ledger.remove(1, "ana", hole=5)
    assert _now(stand) == [("drilled", 0.7, 5)]


@pytest.mark.parametrize(
    ("piece", "says"),
    [
        (PieceDraft(1, 3.0, 0), "there is no hole 0"),
        (PieceDraft(1, 3.0, 25), "holes 1 to 24; there is no hole 25"),
        (PieceDraft(2, 3.0, 1), "has no holes"),
        (PieceDraft(3, 3.0, 1), "has no plane 3"),
        (PieceDraft(1, 3.0), "either a hole or an angle"),
        (PieceDraft(1, 3.0, 1, 15.0), "either a hole or an angle"),
        (PieceDraft(1, 0.0, 1), "mass"),
        (PieceDraft(1, float("nan"), 1), "mass"),
        (PieceDraft(1, 3.0, 1, radius_mm=-1.0), "radius"),
        (PieceDraft(1, 3.0, angle_deg=float("inf")), "angle"),
    ],
)
def test_bad_pieces(refusing_mounted: Stand, piece: PieceDraft, says: str) -> None:
    with pytest.raises(Refusal, match=says):
        refusing_mounted.ledger.fit(piece, "ana")


def test_nothing_mounted(stand: Stand) -> None:
    with pytest.raises(Refusal, match="Nothing is mounted"):
        stand.fit()
    stand.mount()
    stand.ledger.unmount("ana")
    with pytest.raises(Refusal, match="Nothing is mounted"):
        stand.ledger.remove(1, "ana", every=True)


def test_refused_while_a_mark_is_pending(stand: Stand) -> None:
    stand.mount()
    mark = stand.ask(Label.O)
    for act in (
        stand.fit,
        lambda: stand.ledger.remove(1, "ana", every=True),
        lambda: stand.ledger.drill(PieceDraft(1, 1.0, 1), "ana"),
        stand.mount,
        lambda: stand.ledger.unmount("ana"),
    ):
        with pytest.raises(Refusal, match="mark O of job 0142 is pending"):
            act()
    stand.ledger.cancel_mark(mark.key)
    stand.fit()


# --- order -------------------------------------------------------------------------------------------


def test_weights_at_each_run_follow_from_the_events(stand: Stand) -> None:
    stand.mount()
    stand.run(None)
    stand.fit(3.0, 16)
    stand.run(None)
    stand.ledger.remove(1, "ana", every=True)
    stand.run(None)
    assert _at_each_run(stand) == [[], [3.0], []]


def test_late_entry_puts_history_right(stand: Stand) -> None:
    stand.mount()
    stand.run(None)
    stand.run(None)
    stand.fit(5.0, 1)
    stand.run(None)
    stand.ledger.fit(PieceDraft(1, 3.0, 16), "ana", after_run="0142/1")
    stand.ledger.fit(PieceDraft(1, 2.0, 2), "ana", after_run="mount")
    assert _at_each_run(stand) == [[2.0], [2.0, 3.0], [2.0, 3.0, 5.0]]
    # taken off after run 2, typed later; it was fitted after run 1, so that is fine
    stand.ledger.remove(1, "ana", hole=16, after_run="0142/2")
    assert _at_each_run(stand) == [[2.0], [2.0, 3.0], [2.0, 5.0]]
    with pytest.raises(Refusal, match="No piece is fitted in hole 1 "):
        stand.ledger.remove(1, "ana", hole=1, after_run="0142/1")  # fitted only after run 2
    events = stand.history.job_story("0142").weights
    assert [e.mass_g for e in events] == [2.0, 3.0, 5.0, 3.0]


def test_late_entry_changes_the_coefficients(stand: Stand) -> None:
    stand.mount()
    stand.run(Label.O, 10 + 0j)
    stand.run(Label.O_T, 4 + 3j)
    assert stand.history.coefficients() == ()
    stand.ledger.fit(PieceDraft(1, 3.0, 16), "ana", after_run="0142/1")
    (found, _) = stand.history.coefficients()
    # (4+3j - 10) um over 3 g at 140 mm; hole 16 is 225 deg from hole 1 in the sense of the numbering,
    # the mark 30 deg: 195 deg against rotation. METHODS 1.0: alpha = (V1 - V0) / U
    assert abs(found.value) == pytest.approx(abs(-6 + 3j) / 420, rel=1e-9)
    u = 420 * complex(-0.9659258262890683, -0.25881904510252074)  # cos, sin of 195 deg
    assert found.value == pytest.approx((-6 + 3j) / u, rel=1e-9)
    assert found.run_names == ("0142/1", "0142/2")


def test_events_after_a_void_run_keep_their_place(stand: Stand) -> None:
    stand.mount()
    stand.run(None)
    stand.run(None)
    stand.fit(3.0, 16)
    stand.run(None)
    stand.ledger.void_run("0142/2", "belt slipped", "ana")
    story = stand.history.job_story("0142")
    assert [r.name for r in story.runs] == ["0142/1", "0142/3"]
    assert story.weights[0].after_run_id == story.runs[0].id
    assert _at_each_run(stand) == [[], [3.0]]
    assert _at_each_run(stand, with_void=True) == [[], [], [3.0]]


def test_order_does_not_follow_the_wall_clock(stand: Stand) -> None:
    """The clock is set back by a day between the runs: order of entry counts, not time."""
    stand.mount()
    stand.run(None)
    stand.clock.us -= 86_400_000_000
    stand.fit(3.0, 16)
    stand.run(None)
    stand.clock.us += 3 * 86_400_000_000
    stand.ledger.remove(1, "ana", every=True)
    stand.clock.us -= 2 * 86_400_000_000
    stand.run(None)
    assert [r.name for r in stand.history.job_story("0142").runs] == ["0142/1", "0142/2", "0142/3"]
    assert _at_each_run(stand) == [[], [3.0], []]


def test_story_before_a_run(stand: Stand) -> None:
    stand.mount()
    stand.run(Label.O)
    stand.fit(3.0, 16)
    stand.run(Label.O_T)
    stand.mount(fitted=(PieceDraft(1, 1.0, 2),))
    stand.run(Label.CHECK)
    story = stand.history.job_story("0142", before_run="0142/2")
    assert [r.name for r in story.runs] == ["0142/1"]
    assert [w.mass_g for w in story.weights] == [3.0]
    assert len(story.mounts) == 1
    story = stand.history.job_story("0142", before_run="0142/3")
    assert ([r.name for r in story.runs], len(story.mounts)) == (["0142/1", "0142/2"], 2)
    assert [w.mass_g for w in story.weights] == [3.0, 1.0]
    stand.mount(job_number="0143")
    stand.run(None)
    with pytest.raises(Refusal, match="Run 0143/1 is not of job 0142"):
        stand.history.job_story("0142", before_run="0143/1")
