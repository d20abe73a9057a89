"""Several pulses a turn: which of them is the one that counts.

By spacing, each pulse is looked at with a window of the intervals before it, or after it where that does not
tell (the start of a stream, or a pulse that was missed a moment ago); the window is compared with every
rotation of the spacing. By length, each pulse is compared with those before it. What neither tells is told by
the turn of the marks before, if it is clear from that, and else not at all: nothing is guessed.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from daq.signal.shapes import Floats, PulseParams

Places = NDArray[np.int64]

FEWEST_INTERVALS = 8
"""A window has so many pulses at least, always whole turns: with few pulses a turn several."""
CLEAR = 0.5
"""The best rotation must fit within this share of the misfit of the next best one ..."""
NEAR = 0.25
"""... and within this share of how far the rotations lie apart, and of the narrowest spacing."""
LONG_RATIO = 1.25
"""The marked pulse lasts so many times as long as the others ..."""
LONG_SAMPLES = 1.5
"""... and longer by so many samples: widths are whole samples."""
RHYTHM_SHARE = 0.25
"""A mark may be told by the turn before it when it comes within this share of the narrowest spacing ..."""
RHYTHM_TURNS = 0.03
"""... and within this of its turn."""
UNTOLD, OTHER = -1, 1


class MarkTeller:
    """Takes the edges of all pulses of a stream and gives those of the pulse that counts.

    What is decided of a pulse hangs on the pulses about it alone, not on how the stream is cut."""

    def __init__(self, params: PulseParams) -> None:
        if not (params.marked or params.spacing_deg):
            raise ValueError("of several pulses a turn one must be marked, or their spacing known")
        turn = params.pulses
        self._window = turn * max(2 if params.marked else 1, -(-FEWEST_INTERVALS // turn))
        self._spacing = Spacing(params.spacing_deg, self._window) if params.spacing_deg else None
        narrowest = min(params.spacing_deg or (360.0 / turn,)) / 360
        self._near = min(RHYTHM_SHARE * narrowest, RHYTHM_TURNS)
        self.untold = self.in_a_row = 0
        """Pulses of which it could not tell which they are, in all and since the last that counts."""
        self.restart()

    def restart(self) -> None:
        """A gap in the samples: pulses before it say nothing of those after."""
        self._edges, self._widths = np.empty(0), np.empty(0)
        self._done = 0
        self._newest: list[float] = []
        """The last three edges that count."""

    @property
    def undecided(self) -> float | None:
        """The oldest edge not decided yet; None when there is none."""
        return float(self._edges[self._done]) if self._done < len(self._edges) else None

    def feed(self, edges: Floats, widths: Floats) -> Floats:
        """Edges of the pulses that count among those that can be decided now. ``edges`` (n,) of all pulses,
        and ``widths`` (n,) in samples of the pulse *before* each."""
        self._edges = np.concatenate((self._edges, edges))
        self._widths = np.concatenate((self._widths, widths))
        places, decided = self._by_spacing() if self._spacing is not None else self._by_length()
        marks = self._marks(self._edges[self._done : decided], places[self._done : decided])
        drop = max(0, decided - self._window)
        self._edges, self._widths = self._edges[drop:], self._widths[drop:]
        self._done = max(self._done, decided) - drop
        return marks

    def finish(self) -> Floats:
        """Edges that count among those left: no pulse follows, so only the turn before can tell."""
        left, self._edges = self._edges[self._done :], self._edges[: self._done]
        return self._marks(left, np.full(len(left), UNTOLD))

    # --- what each pulse tells ---------------------------------------------------------------------------

    def _by_spacing(self) -> tuple[Places, int]:
        """Place in the turn of each pulse held, and how many of them are decided."""
        n, w = len(self._edges), self._window
        places = np.full(n, UNTOLD)
        if n > w and self._spacing is not None:
            first = self._spacing.rotations(np.diff(self._edges))
            places[: n - w] = first
            places[w:][first != UNTOLD] = first[first != UNTOLD]
        reached = max(self._done, n - w)
        waiting = np.flatnonzero(places[reached:] == UNTOLD)
        return places, reached + int(waiting[0]) if len(waiting) else n

    def _by_length(self) -> tuple[Places, int]:
        """The same: place 0 for long pulses, ``OTHER`` for the others."""
        known, w = self._widths[1:], self._window
        if len(known) < w:
            return np.empty(0, np.int64), self._done
        windows = np.sort(sliding_window_view(known, w), axis=1)
        at = np.maximum(np.arange(len(known)) - (w - 1), 0)
        short, long = windows[at, w // 4], windows[at, -1]
        clear = (long >= LONG_RATIO * short) & (long >= short + LONG_SAMPLES)
        places = np.where(clear, np.where(known > (short + long) / 2, 0, OTHER), UNTOLD)
        return places, len(known)

    # --- what the rhythm tells ---------------------------------------------------------------------------

    def _marks(self, edges: Floats, places: Places) -> Floats:
        """Those of ``edges`` that count, told by the turn before where ``places`` do not tell."""
        if not (places == UNTOLD).any():
            self.in_a_row = 0
            marks: Floats = edges[places == 0]
            self._newest = [*self._newest, *marks[-3:].tolist()][-3:]
            return marks
        found = []
        for edge, place in zip(edges.tolist(), places.tolist(), strict=True):
            if place == 0 or (place == UNTOLD and self._in_rhythm(edge)):
                found.append(edge)
                self.in_a_row = 0
                self._newest = [*self._newest, edge][-3:]
        return np.array(found, np.float64)

    def _in_rhythm(self, edge: float) -> bool:
        """True when ``edge`` comes a turn or two after the newest that counts; books it where none may."""
        known = self._newest
        turn = min((b - a for a, b in pairwise(known)), default=np.nan)
        turns = (edge - known[-1]) / turn if known else np.nan
        if not turns < 2.5:  # nan: nothing is known of the turn
            self.untold += 1
            self.in_a_row += 1
            return False
        return bool(turns > 0.5 and abs(turns - round(turns)) <= self._near)


class Spacing:
    """Windows of intervals compared with the spacing of the pulses, at any speed that changes evenly."""

    def __init__(self, spacing_deg: tuple[float, ...], window: int) -> None:
        self._window = window
        share = np.resize(np.array(spacing_deg) / 360.0, window) * (len(spacing_deg) / window)
        turned = np.stack([np.roll(share, -k) for k in range(len(spacing_deg))])
        even = np.stack((np.ones(window), np.arange(window) - (window - 1) / 2), axis=1)
        self._even: Floats = even / np.sqrt((even**2).sum(axis=0))
        self._turned = self._uneven(turned)
        gaps = np.sqrt(((self._turned[:, None] - self._turned[None]) ** 2).sum(axis=2))
        apart = float(gaps[~np.eye(len(gaps), dtype=bool)].min())
        self._near = NEAR * min(apart, float(share.min()))

    def _uneven(self, shares: Floats) -> Floats:
        """What an even speed and an even change of it do not explain."""
        left: Floats = shares - (shares @ self._even) @ self._even.T
        return left

    def rotations(self, intervals: Floats) -> Places:
        """Shape (intervals - window + 1,): the place of the pulse each window starts with, or ``UNTOLD``."""
        windows = sliding_window_view(intervals, self._window)
        seen = self._uneven(windows / windows.sum(axis=1, keepdims=True))
        square = (seen**2).sum(axis=1)[:, None] - 2 * seen @ self._turned.T + (self._turned**2).sum(axis=1)
        misfit = np.sqrt(np.maximum(square, 0.0))
        at = misfit.argmin(axis=1)
        best, second = np.partition(misfit, 1, axis=1)[:, :2].T
        clear = (best <= CLEAR * second) & (best <= self._near)
        return np.where(clear, at, UNTOLD)
