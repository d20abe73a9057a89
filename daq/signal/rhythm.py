"""The rhythm of the rotor: which edges are the mark passing, which are too many, and where one is missing.

Each edge is expected where the parabola through the eight before it says; of those near that place the
nearest is the mark, the others are doubles. Where none comes within the tolerance, one may come after two,
three or four turns, and the missed ones are filled in by the parabola through their neighbours. The tolerance
follows how well the newest edges were foretold. All positions are sample indices; the outcome does not hang
on how the stream is cut.
"""

from __future__ import annotations

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from daq.signal.shapes import Floats, median

HISTORY = 8
"""Edges the next one is foretold from."""
MOST_TURNS = 4
"""From one edge to the next: up to three missed in a row are filled in."""
TOLERANCE = (0.01, 0.35)
"""Least and most distance of an edge from its place, turns ..."""
MISSES = 12.0
"""... and as a multiple of the median distance of the newest ``SCATTER``; 8 sd of a normal one."""
SCATTER = 16
FIRST_SCATTER = (0.002, 0.02)
"""That median when a rhythm begins: at least, and where three edges or fewer tell nothing of it."""
FARTHEST = 0.45
"""Tolerance after several turns: places must not overlap."""
EVEN = 0.9
"""Turns follow each other evenly when neither is shorter than this share of the other ..."""
EVEN_TURNS = 4
"""... so many in a row are a rhythm at once; otherwise the most frequent length among ``TRIED`` edges is."""
CHANGED_TURNS, CHANGED = 3, 0.7
"""The speed has changed when so many turns are even, from this share of the last one to it over this ..."""
SMOOTH = 0.02
"""... and their second difference is no more than this, turns."""
TRIED = 32
ALIKE = 0.2
"""Turns are of one length within this share."""
PROBATION = 16
"""Of the first so many turns of a rhythm half may be repaired; with more it was the wrong one."""
STRIDE = 256
"""Edges looked at together."""
_BEFORE = np.arange(STRIDE)[:, None] + np.arange(HISTORY)
_NEWEST = np.arange(STRIDE)[:, None] + np.arange(SCATTER)
"""Rows of windows that move on by one."""


def _weights(points: int, ahead: int) -> Floats:
    """What foretells the place ``ahead`` turns after the last of ``points`` edges: least squares of a
    parabola, of a straight line for fewer than five."""
    powers = np.arange(3 if points >= 5 else 2)
    design = np.arange(1.0 - points, 1.0)[:, None] ** powers
    found: Floats = float(ahead) ** powers @ np.linalg.pinv(design)
    return found


WEIGHTS = {n: [_weights(n, m) for m in range(1, MOST_TURNS + 1)] for n in range(2, HISTORY + 1)}


class Mended:
    """Edges and what lies between them, grown at the end; in memory that doubles, so that growing by one edge
    at a time costs no more for a long window than for a short one."""

    def __init__(self) -> None:
        self._edges, self._good = np.empty(0), np.empty(0, bool)
        self._missed, self._doubles = np.empty(0, np.int64), np.empty(0, np.int64)
        self._count = 0
        """Edges held."""

    @property
    def edges(self) -> Floats:
        """Shape (edges,)."""
        return self._edges[: self._count]

    @property
    def good(self) -> NDArray[np.bool_]:
        """Shape (edges - 1,): a whole single turn."""
        return self._good[: max(0, self._count - 1)]

    @good.setter
    def good(self, good: NDArray[np.bool_]) -> None:
        self._good = good

    @property
    def missed(self) -> NDArray[np.int64]:
        """Shape (edges - 1,): pulses that did not come; 1 where the edge at the turn's end is filled in."""
        return self._missed[: max(0, self._count - 1)]

    @property
    def doubles(self) -> NDArray[np.int64]:
        """Shape (edges - 1,): pulses too many."""
        return self._doubles[: max(0, self._count - 1)]

    def _grow(self, edges: Floats) -> int:
        """Room for ``edges`` more, and these in it; the turns up to them are good. The first of them."""
        first, self._count = max(0, self._count - 1), self._count + len(edges)
        if self._count > len(self._edges):
            more = max(len(edges), len(self._edges))
            self._edges = np.concatenate((self._edges, np.empty(more)))
            self._good = np.concatenate((self._good, np.ones(more, bool)))
            self._missed = np.concatenate((self._missed, np.zeros(more, np.int64)))
            self._doubles = np.concatenate((self._doubles, np.zeros(more, np.int64)))
        self._edges[self._count - len(edges) : self._count] = edges
        return first

    def add(self, edges: Floats, *, missed: int = 0, doubles: int = 0) -> None:
        """Add good turns up to ``edges``: the first ``missed`` of them are filled in, ``doubles`` taken out
        before the last."""
        first = self._grow(edges)
        self._missed[first : min(first + missed, self._count - 1)] = 1
        self.book(doubles)

    def join(self, other: Mended, *, missed: int = 0, doubles: int = 0, good: bool = False) -> None:
        """Add ``other``; whether the turn up to its first edge, if there is one, is ``good``."""
        first = self._grow(other.edges)
        link = [0] if first + len(other.good) < self._count - 1 else []
        last = max(0, self._count - 1)
        self._good[first:last] = np.concatenate((np.full(len(link), good), other.good))
        self._missed[first:last] = np.concatenate(([missed] * len(link), other.missed))
        self._doubles[first:last] = np.concatenate(([doubles] * len(link), other.doubles))

    def back(self) -> Mended:
        """The same with time running backwards."""
        turned = Mended()
        turned._count = self._count
        turned._edges, turned._good = -self.edges[::-1], self.good[::-1]
        turned._missed, turned._doubles = np.roll(self.missed[::-1], -1), self.doubles[::-1]
        return turned

    def drop(self, first: int) -> None:
        """Forget the ``first`` edges and the turns that begin with them."""
        kept = slice(first, self._count)
        self._edges, self._good = self._edges[kept].copy(), self._good[kept].copy()
        self._missed, self._doubles = self._missed[kept].copy(), self._doubles[kept].copy()
        self._count = len(self._edges)

    def book(self, doubles: int) -> None:
        """Book pulses too many to the last turn."""
        if doubles and self._count > 1:
            self._doubles[self._count - 2] += doubles


class Rhythm:
    """``feed`` it the edges of a stream: ``mended`` grows by those that are settled.

    An edge is settled once the one after it is known, so that a better one cannot come; ``finish`` settles
    the last ones too, when nothing follows."""

    def __init__(self) -> None:
        self.mended = Mended()
        self._waiting: Floats = np.empty(0)
        self._history: Floats = np.empty(0)
        """Newest edges of the rhythm, filled-in ones too; none while there is no rhythm."""
        self._scatter = np.full(SCATTER, FIRST_SCATTER[1])
        """How far the newest edges were from their places, turns."""
        self._turns = self._repaired = 0
        """Since the rhythm was found."""

    @property
    def oldest(self) -> float | None:
        """The oldest edge held, settled or not; None when there is none."""
        held = self.mended.edges if len(self.mended.edges) else self._waiting
        return float(held[0]) if len(held) else None

    def feed(self, edges: Floats) -> None:
        """Take edges, ascending."""
        if len(edges):
            self._waiting = np.concatenate((self._waiting, edges))
            self._work(last=False)

    def finish(self) -> Mended:
        """Settle what is left: no edge follows."""
        self._work(last=True)
        return self.mended

    def _work(self, *, last: bool) -> None:
        while len(self._waiting):
            if not len(self._history) and not self._find(last=last):
                return
            while len(self._waiting) and len(self._history):
                if not (self._pass_regular(last=last) or self._mend_one(last=last)):
                    return

    # --- the beginning of a rhythm -----------------------------------------------------------------------

    def _find(self, *, last: bool) -> bool:
        """Find a rhythm among the edges that wait, and go back from there to the first of them."""
        held = self._waiting
        run = _even_run(held[:TRIED]) or (_commonest(held) if last or len(held) >= TRIED else None)
        if run is None:
            if last:
                alone = Mended()
                alone.add(held[:1])
                self.mended.join(alone)
                self._waiting = held[:0]
            return False
        first, stop = run
        before = Rhythm()
        before._start(-held[first:stop][::-1])
        before.mended.add(before._history)
        before._waiting = -held[:first][::-1]
        while len(before._waiting) and len(before._history) and before._mend_one(last=True):
            pass
        self._start(held[first:stop])
        self._link(before.mended.back(), len(before._waiting))
        self._waiting = held[stop:]
        return True

    def _start(self, edges: Floats) -> None:
        self._history = edges[-HISTORY:]
        self._scatter = np.full(SCATTER, _scatter_of(edges))
        self._turns = self._repaired = 0

    def _link(self, found: Mended, left_out: int) -> None:
        """Add a rhythm just found to what is settled; ``left_out`` pulses between them fit neither."""
        settled = self.mended.edges
        if left_out or not len(settled):
            self.mended.join(found, doubles=left_out)
            return
        about = np.concatenate((settled[-2:], found.edges[:2]))
        turns = about[1:] - about[:-1]
        missed = max(0, round(float(turns[-2] / turns[-1])) - 1)
        even = bool(turns.min() >= EVEN * turns.max())
        self.mended.join(found, missed=missed, good=even)

    # --- along the rhythm --------------------------------------------------------------------------------

    def _pass_regular(self, *, last: bool) -> bool:
        """Settle all edges, up to the first that is not, which come where they are expected and alone there.
        False when there is none."""
        if len(self._history) < HISTORY:
            return False
        new = self._waiting[:STRIDE]
        every = np.concatenate((self._history, new))
        place = every[_BEFORE[: len(new)]] @ WEIGHTS[HISTORY][0]
        turn = place - every[HISTORY - 1 : -1]
        off = np.full(len(new), np.inf)  # what is foretold before the newest edge is no rhythm
        np.divide(np.abs(new - place), turn, out=off, where=turn > 0)
        scatter = np.concatenate((self._scatter, off))
        median_off = np.partition(scatter[_NEWEST[: len(new)]], 7, axis=1)[:, 7]
        allowed = np.clip(MISSES * median_off, *TOLERANCE)
        follows = np.append(self._waiting[1 : len(new)], self._waiting[len(new) :][:1])
        alone = follows > (place + allowed * turn)[: len(follows)]
        if len(follows) < len(new):
            alone = np.append(alone, last)
        bad = np.flatnonzero(~((off <= allowed) & alone))
        passed = int(bad[0]) if len(bad) else len(new)
        if passed:
            self.mended.add(new[:passed])
        self._waiting = self._waiting[passed:]
        self._history = every[passed : passed + HISTORY]
        self._scatter = scatter[passed : passed + SCATTER]
        self._turns += passed
        return passed > 0

    def _mend_one(self, *, last: bool) -> bool:
        """Settle the next edge of the mark, one to four turns on, with the doubles before it; or give the
        rhythm up where there is none. False when edges must come first."""
        history, waiting = self._history, self._waiting
        now = float(history[-1])
        turn = float(history @ WEIGHTS[len(history)][0]) - now
        allowed = float(np.clip(MISSES * median(self._scatter), *TOLERANCE))
        for turns, weights in enumerate(WEIGHTS[len(history)] if turn > 0 else (), start=1):
            place = float(history @ weights)
            reach = min(allowed * (turns + 1) / 2, FARTHEST) * turn
            if not last and waiting[-1] <= place + reach:
                return False
            nearest = int(np.abs(waiting[: np.searchsorted(waiting, place) + 1] - place).argmin())
            if abs(waiting[nearest] - place) <= reach:
                self._settle(nearest, turns, abs(float(waiting[nearest]) - place) / turn)
                return True
            if turns == 1 and not last and len(waiting) < CHANGED_TURNS:
                return False
            if turns == 1 and _changed(np.append(history[-1:], waiting[:CHANGED_TURNS]), turn):
                break
        self._history = history[:0]
        if last and waiting[-1] <= now + FARTHEST * turn + turn:
            self.mended.book(len(waiting))
            self._waiting = waiting[:0]
        return True

    def _settle(self, doubles: int, turns: int, off: float) -> None:
        """Take edge number ``doubles`` of those that wait as the mark, ``turns`` after the last one."""
        found = self._waiting[doubles : doubles + 1]
        filled = _filled(float(self._history[-2]), float(self._history[-1]), float(found[0]), turns)
        edges = np.concatenate((filled, found))
        self.mended.add(edges, missed=turns - 1, doubles=doubles)
        self._history = np.concatenate((self._history, edges))[-HISTORY:]
        if turns == 1:
            self._scatter = np.append(self._scatter[1:], off)
        self._waiting = self._waiting[doubles + 1 :]
        self._turns += turns
        self._repaired += turns - 1 + doubles
        if self._turns <= PROBATION < 2 * self._repaired:
            self._history = self._history[:0]


def _changed(edges: Floats, turn: float) -> bool:
    """Whether the turns between ``edges`` follow each other smoothly, if not from the last ``turn``: then the
    speed changed, and no pulse is at fault."""
    turns = (edges[1:] - edges[:-1]) / turn
    if len(turns) < CHANGED_TURNS:
        return False
    short, long = float(turns.min()), float(turns.max())
    smooth = abs(float(turns[2] - 2 * turns[1] + turns[0])) <= SMOOTH
    return smooth and short >= max(CHANGED, EVEN * long) and long <= 1 / CHANGED


def _scatter_of(edges: Floats) -> float:
    """How far edges foretold from these few may be from their places, turns."""
    if len(edges) < 3:
        return FIRST_SCATTER[1]
    order, size = (3, 20) if len(edges) > EVEN_TURNS else (2, 6)
    uneven = np.diff(edges, order)
    sd = float(np.sqrt(np.mean(uneven**2) / size)) / float(edges[-1] - edges[-2])
    return min(max(2 * sd, FIRST_SCATTER[0]), FIRST_SCATTER[1])


def _filled(before: float, now: float, then: float, turns: int) -> Floats:
    """Edges missed between ``now`` and ``then``, so many ``turns`` on: by the parabola through these two and
    the edge a turn ``before`` the first; evenly where that parabola would turn back."""
    n = np.arange(1.0, turns)
    first, step = now - before, (then - now) / turns
    if abs(step - first) * (turns - 1) >= step * (turns + 1):
        first = step
    found: Floats = now + n * step + n * (n - turns) * (step - first) / (turns + 1)
    return found


def _even_run(edges: Floats) -> tuple[int, int] | None:
    """First and stop edge of the first ``EVEN_TURNS`` turns in a row that are even; None when none are."""
    if len(edges) <= EVEN_TURNS:
        return None
    turns = edges[1:] - edges[:-1]
    even = np.minimum(turns[1:], turns[:-1]) >= EVEN * np.maximum(turns[1:], turns[:-1])
    runs = np.asarray(sliding_window_view(even, EVEN_TURNS - 1).all(axis=1))
    at = int(runs.argmax())
    return (at, at + EVEN_TURNS + 1) if runs[at] else None


def _commonest(edges: Floats) -> tuple[int, int] | None:
    """First and stop edge of turns of the length that most of the first ``TRIED`` have: the two that are most
    alike of those that follow each other, else one; None when there is no turn."""
    turns = np.diff(edges[:TRIED])
    if not len(turns):
        return None
    alike = np.abs(turns[:, None] - turns) <= ALIKE * turns[:, None]
    ours = alike[int(alike.sum(axis=1).argmax())]
    pairs = ours[1:] & ours[:-1]
    if pairs.any():
        at = int(np.where(pairs, np.abs(turns[1:] - turns[:-1]), np.inf).argmin())
        return at, at + 3
    at = int(ours.argmax())
    return at, at + 2
