"""Several pulses a turn: which of them is the one that counts.

Each pulse is looked at with a window of the pulses before it, or after it where that does not tell (the start
of a stream, or a pulse that was missed a moment ago). The window is compared with every rotation of what the
stand file says of the pulses; where none of them stands out clearly, nothing is guessed.
"""

from __future__ import annotations

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from daq.signal.shapes import Floats, PulseParams

FEWEST_INTERVALS = {"long": 4, "spacing": 8}
"""A window has so many intervals at least, always whole turns: with two or three pulses a turn several."""
CLEAR = 0.5
"""The best rotation must fit within this share of the misfit of the next best one ..."""
NEAR = 0.5
"""... and within this share of how far the rotations lie apart."""
LONG_RATIO = 1.25
"""The marked pulse lasts so many times as long as the longest of the others."""
LONG_SAMPLES = 1.0
"""... and longer by so many samples: widths are whole samples."""
UNTOLD = -1


class MarkTeller:
    """Takes the edges of all pulses of a stream and gives those of the pulse that counts.

    What is decided of a pulse hangs on the pulses around it alone, not on how the stream is cut."""

    def __init__(self, params: PulseParams) -> None:
        if not (params.marked or params.spacing_deg):
            raise ValueError("of several pulses a turn one must be marked, or their spacing known")
        self._turn = params.pulses
        kind = "spacing" if params.spacing_deg else "long"
        self._window = self._turn * -(-FEWEST_INTERVALS[kind] // self._turn)
        self._spacing = Spacing(params.spacing_deg, self._window) if params.spacing_deg else None
        self.untold = 0
        """Pulses of which it could not tell which they are."""
        self.restart()

    def restart(self) -> None:
        """A gap in the samples: pulses before it say nothing of those after."""
        self._edges, self._widths = np.empty(0), np.empty(0)
        self._done = 0

    @property
    def undecided(self) -> float | None:
        """The oldest edge not decided yet; None when there is none."""
        return float(self._edges[self._done]) if self._done < len(self._edges) else None

    def feed(self, edges: Floats, widths: Floats) -> Floats:
        """Edges (n,) of the pulses that count among those that can be decided now. ``edges`` (n,) of all
        pulses, and ``widths`` (n,) in samples of the pulse *before* each."""
        self._edges = np.concatenate((self._edges, edges))
        self._widths = np.concatenate((self._widths, widths))
        places, decided = self._places()
        told = places[self._done : decided]
        self.untold += int((told == UNTOLD).sum())
        marks: Floats = self._edges[self._done : decided][told == 0]
        drop = max(0, decided - self._window)
        self._edges, self._widths = self._edges[drop:], self._widths[drop:]
        self._done = max(self._done, decided) - drop
        return marks

    def _places(self) -> tuple[NDArray[np.int64], int]:
        """Place in the turn of each pulse held, and how many of them are decided."""
        n, w = len(self._edges), self._window
        places = np.full(n, UNTOLD, np.int64)
        if n > w:
            at_first = self._rotations()
            places[: n - w] = at_first
            before = at_first != UNTOLD
            places[w:][before] = at_first[before]
        waiting = np.flatnonzero(places[max(self._done, n - w) :] == UNTOLD)
        return places, max(self._done, n - w) + int(waiting[0]) if len(waiting) else n

    def _rotations(self) -> NDArray[np.int64]:
        """Shape (pulses - window,): the place of the first pulse of each window, or ``UNTOLD``."""
        if self._spacing is not None:
            return self._spacing.rotations(np.diff(self._edges))
        return longest(self._widths[1:], self._window, self._turn)


def longest(widths: Floats, window: int, turn: int) -> NDArray[np.int64]:
    """Where each window of ``widths`` starts in the turn, when the longest of ``turn`` pulses is number 0."""
    folded = sliding_window_view(widths, window).reshape(-1, window // turn, turn)
    mean = folded.mean(axis=1)
    at = mean.argmax(axis=1)
    rows = np.arange(len(mean))
    rest = mean.copy()
    rest[rows, at] = -np.inf
    second, least = rest.max(axis=1), folded[rows, :, at].min(axis=1)
    clear = (least >= LONG_RATIO * second) & (least >= second + LONG_SAMPLES)
    return np.where(clear, -at % turn, UNTOLD)


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
        self._apart = float(gaps[~np.eye(len(gaps), dtype=bool)].min())

    def _uneven(self, shares: Floats) -> Floats:
        """What an even speed and an even change of it do not explain."""
        left: Floats = shares - (shares @ self._even) @ self._even.T
        return left

    def rotations(self, intervals: Floats) -> NDArray[np.int64]:
        """Shape (intervals - window + 1,): the place of the pulse each window starts with, or ``UNTOLD``."""
        windows = sliding_window_view(intervals, self._window)
        seen = self._uneven(windows / windows.sum(axis=1, keepdims=True))
        square = (seen**2).sum(axis=1)[:, None] - 2 * seen @ self._turned.T + (self._turned**2).sum(axis=1)
        misfit = np.sqrt(np.maximum(square, 0.0))
        at = misfit.argmin(axis=1)
        best, second = np.partition(misfit, 1, axis=1)[:, :2].T
        clear = (best <= CLEAR * second) & (best <= NEAR * self._apart)
        return np.where(clear, at, UNTOLD)
