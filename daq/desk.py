"""What operators ask of the daemon: each act is checked against what the stand does now, then written.

The ledger keeps the rules of what is stored; here are the rules of what is turning. All answers are
plain JSON (keys and units: store/asjson.py).
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from config.errors import NeedsAnswer, Refusal
from daq.board import Board, StandState
from daq.requests import (
    AssignAsked,
    MachineAsked,
    MountAsked,
    PieceBody,
    RemovalAsked,
    Request,
    SenseBody,
    UnmountAsked,
    VoidAsked,
    WeightAsked,
    WeightVoidAsked,
)
from daq.writer import Writer
from store import asjson, consult
from store.balance import cautions
from store.casework import ForceAdvice
from store.history import History
from store.ledger import Ledger
from store.records import (
    MachineDraft,
    MarkPosition,
    MountDraft,
    PieceDraft,
    Sense,
    WeightPlane,
)

Json = dict[str, Any]

LOADS_APART = 0.1
"""The bearings' static loads may differ from the rotor's mass by this share (a belt's pull, rounding)."""


def refuse_if_turning(board: Board, what: str) -> None:
    """Raises Refusal while the rotor turns, or may turn without its pulses."""
    live = board.read()
    if live.state is StandState.TURNING:
        speed = f" ({live.speed_hz * 60:.0f} r/min)" if live.speed_hz else ""
        raise Refusal(
            f"The rotor is turning{speed}; {what} is refused.", "Run it down and lock it out first."
        )
    if live.state is StandState.PULSES_LOST:
        raise Refusal(
            f"The once-per-rev signal is lost while the probes still vibrate; {what} is refused.",
            "Treat the rotor as turning until you have seen and locked it out.",
        )


def require_lock_out(board: Board, *, locked_out: bool) -> None:
    """Raises NeedsAnswer unless the drive is said to be locked out; no pulses is not standstill."""
    refuse_if_turning(board, "work on its weights")
    if not locked_out:
        state = board.read().state
        raise NeedsAnswer(
            f"The state is {state!s}, which does not prove that the rotor stands still.",
            "Stop and lock out the drive, see it at rest, then say so with --locked-out.",
            options=("--locked-out",),
        )


def _sense(body: SenseBody) -> Sense:
    return Sense(body.turn, body.seen_from)


def _piece(body: PieceBody) -> PieceDraft:
    return PieceDraft(body.plane, body.mass_g, body.hole, body.angle_deg, body.radius_mm)


class Desk:
    """Machines, mounts, weights and corrections of the record."""

    def __init__(self, writer: Writer, history: History, board: Board, ends: tuple[str, str]) -> None:
        self._writer = writer
        self._history = history
        self._board = board
        self._ends = ends

    def _once(self, asked: Request, verb: str, act: Callable[[Ledger], Json]) -> Json:
        """Do ``act`` once for the request's key; what it checks is not checked again at a retry, which gets
        the stored answer."""
        body = asked.model_dump(mode="json", exclude={"key"})
        return self._writer.ask(lambda ledger: ledger.once(asked.key, verb, body, lambda: act(ledger)))

    def add_machine(self, asked: MachineAsked, peer: str) -> Json:
        self._check_loads(asked)
        planes = tuple(
            WeightPlane(p.number, p.radius_mm, p.holes, _sense(p.numbering), p.position_mm)
            for p in asked.planes
        )
        for plane in planes:
            self._check_end(plane.numbering.seen_from, f"the hole numbering of plane {plane.number}")
        draft = MachineDraft(
            asked.serial,
            asked.model,
            asked.rotor_mass_kg,
            asked.service_hz,
            asked.grade_mm_s,
            asked.permissible_gmm,
            asked.bearing_loads_kg,
            asked.vibration_limit_um_pk,
            planes,
            asked.first_critical_hz,
        )
        who = asked.who or peer

        def act(ledger: Ledger) -> Json:
            kept = ledger.add_machine(draft, who)
            return {**asjson.machine_json(kept), "notes": consult.mounted_otherwise(self._history, kept)}

        return self._once(asked, "machine", act)

    def mount(self, asked: MountAsked, peer: str) -> Json:
        self._check_end(asked.rotation.seen_from, "the direction of rotation")
        draft = MountDraft(
            asked.serial,
            asked.job,
            _sense(asked.rotation),
            self._marks(asked),
            asked.mark_how,
            asked.mark_width_deg,
            asked.support,
            asked.coupling,
            tuple(_piece(p) for p in asked.fitted),
            asked.speeds_hz,
            asked.carry_over,
            asked.mark_change,
        )

        def act(ledger: Ledger) -> Json:
            refuse_if_turning(self._board, "a mount")
            return asjson.mount_json(ledger.mount(draft, asked.who or peer), asked.job)

        return self._once(asked, "mount", act)

    def unmount(self, asked: UnmountAsked, peer: str) -> Json:
        def act(ledger: Ledger) -> Json:
            refuse_if_turning(self._board, "taking the machine off")
            ended = ledger.unmount(asked.who or peer)
            return {"ended": asjson.mount_json(ended) if ended else None}

        return self._once(asked, "unmount", act)

    def weight(self, asked: WeightAsked, peer: str) -> Json:
        piece, who = _piece(asked.piece), asked.who or peer
        pull = None if asked.drilled else consult.force(self._history, piece)

        def act(ledger: Ledger) -> Json:
            require_lock_out(self._board, locked_out=asked.locked_out)
            if not asked.confirmed and not asked.drilled:
                self._question(piece, pull)
            do = ledger.drill if asked.drilled else ledger.fit
            return {"weights": [asjson.weight_json(w) for w in do(piece, who, asked.after)]}

        told = self._once(asked, "weight", act)
        return {**told, "force": pull.to_dict() if pull else None, "cautions": list(cautions.WEIGHT_FIT)}

    def remove(self, asked: RemovalAsked, peer: str) -> Json:
        if sum([asked.all, asked.hole is not None, asked.angle_deg is not None]) != 1:
            raise Refusal(
                "Which weights came off is not said.", "Name one of --hole, --at and --all; see weight list."
            )

        def act(ledger: Ledger) -> Json:
            require_lock_out(self._board, locked_out=asked.locked_out)
            gone = ledger.remove(
                asked.plane,
                asked.who or peer,
                hole=asked.hole,
                angle_deg=asked.angle_deg,
                every=asked.all,
                after_run=asked.after,
            )
            return {"weights": [asjson.weight_json(w) for w in gone]}

        return self._once(asked, "remove", act)

    def void_weight(self, asked: WeightVoidAsked, peer: str) -> Json:
        """Take a wrong entry out; nothing is touched on the rotor, so no lock-out is asked."""

        def act(ledger: Ledger) -> Json:
            gone = ledger.void_weight(asked.number, asked.why, asked.who or peer)
            return {"weights": [asjson.weight_json(w) for w in gone]}

        return self._once(asked, "void weight", act)

    def void(self, asked: VoidAsked, peer: str) -> Json:
        who = asked.who or peer
        return self._once(asked, "void", lambda led: asjson.run_json(led.void_run(asked.run, asked.why, who)))

    def assign(self, asked: AssignAsked, peer: str) -> Json:
        who = asked.who or peer
        return self._once(
            asked, "assign", lambda led: asjson.run_json(led.assign_run(asked.run, asked.job, who))
        )

    def _marks(self, asked: MountAsked) -> tuple[MarkPosition, ...]:
        """The rotor mark's place by plane; one given for no plane in particular holds for all."""
        if not asked.marks:
            return ()
        named = [m.plane for m in asked.marks]
        twice = next((p for p in named if named.count(p) > 1), 0)
        if twice != 0:
            where = "for no plane in particular" if twice is None else f"for plane {twice}"
            raise Refusal(
                f"The rotor mark's position is given twice {where}.", "Give it once for each plane."
            )
        planes = self._history.machine(asked.serial).model.planes
        for_all = {p.number: m.from_hole1_deg for m in asked.marks if m.plane is None for p in planes}
        by_plane = for_all | {m.plane: m.from_hole1_deg for m in asked.marks if m.plane is not None}
        return tuple(MarkPosition(plane, degrees) for plane, degrees in sorted(by_plane.items()))

    def _question(self, piece: PieceDraft, pull: ForceAdvice | None) -> None:
        """Raises NeedsAnswer for a hole that is taken, and for a weight nobody fits on purpose."""
        mount = self._history.current_mount()
        here = self._history.weights(mount.id) if mount else ()
        there = [w for w in here if w.plane == piece.plane and w.hole == piece.hole and w.act == "fitted"]
        if piece.hole is not None and there:
            held = sum(w.mass_g for w in there)
            raise NeedsAnswer(
                f"Hole {piece.hole} of plane {piece.plane} carries {held:g} g already; "
                f"with this it would carry {held + piece.mass_g:g} g.",
                "If it is a second piece, say --yes; else nothing was entered.",
                options=("--yes",),
            )
        if pull is not None and pull.share_of_load > 1.0:
            raise NeedsAnswer(
                f"{piece.mass_g:g} g at {pull.radius_mm:g} mm pulls with {pull.force_n:.4g} N at "
                f"{pull.speed_hz * 60:.0f} r/min, more than the static load on its bearing.",
                "If it is meant, say --yes; else nothing was entered.",
                options=("--yes",),
            )

    def _check_loads(self, asked: MachineAsked) -> None:
        """Static loads of the bearings must be one for each plane and add up to the rotor's mass."""
        known = next((m for m in self._history.machines() if m.serial == asked.serial), None)
        loads = asked.bearing_loads_kg or (known.bearing_loads_kg if known else ())
        mass = asked.rotor_mass_kg or (known.rotor_mass_kg if known else 0.0)
        code = asked.model or (known.model.code if known else "")
        planes = len({p.number for p in asked.planes} | self._planes_of(code))
        if loads and planes and len(loads) != planes:
            raise Refusal(
                f"{len(loads)} bearing load(s) for {planes} weight plane(s) of model {code}.",
                "Give --bearing-load once for each plane, in their order, or not at all.",
            )
        if loads and mass and abs(sum(loads) - mass) > LOADS_APART * mass:
            raise Refusal(
                f"The bearing loads add up to {sum(loads):g} kg, the rotor has {mass:g} kg.",
                "Correct one of them: the trial weight's size hangs on the loads.",
            )

    def _planes_of(self, code: str) -> set[int]:
        try:
            return {p.number for p in self._history.model(code).planes}
        except Refusal:
            return set()

    def _check_end(self, end: str, what: str) -> None:
        if end not in self._ends:
            raise Refusal(
                f"This stand has no end named {end!r}, from which {what} is seen.",
                f"Its ends are {self._ends[0]!r} and {self._ends[1]!r}.",
            )
