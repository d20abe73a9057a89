"""Lines that are no multiple of the speed: whirl below it, hum, a neighbour machine.

They are looked for in the folded window (``daq.signal.folding``) after offset, orders and a slow drift of
each are fitted: a peak of the spectrum that stands out of its neighbourhood, its frequency refined by least
squares. What is found joins the model; what lies too near an order to be told apart widens that vector's
uncertainty.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from daq.signal.folding import Rows
from daq.signal.shapes import Floats, Surroundings
from daq.signal.vectors import Fit

MOST_LINES = 6
STANDS_OUT = 40.0
"""A peak is a line when its power is so many times the median of either side: noise reaches that once in
a thousand windows of 16 probes."""
SIGNIFICANT = 13.8
"""Power of a known frequency over its noise's mean that noise passes once in a million times (e^-13.8)."""
NEAR = 2.0
"""Nearer than this over the length of the window, nothing is told apart."""
SIDE = 24
"""Points of the spectrum on either side that say what its neighbourhood is."""
SKIRT = 4.0
"""Half width of a peak that is not its neighbourhood, over the length of the window."""
LOWEST = 3.0
"""No line is looked for below this over the length of the window: drift lives there."""
STEPS = 6
BLOCK = 128
"""Rows multiplied at once."""
CANDIDATES = 5
"""Points of a spectrum that are looked at closely."""
STRONG_SHARE = 0.25
"""A line below the speed is strong from this share of 1X on. [J]"""
LEAST_SHARE = 0.02
"""Lines below this share of 1X are passed over, unless they scatter the parts of the window [J]"""
LEAST_COUNTS = 0.5
"""... and below half a step of the converter, whose own pattern has lines where there is no noise."""
SCATTERS = 0.5
"""... by so much of the noise of a part's vector."""
NEAR_SHARE = 0.05
"""A peak beside an order counts as a neighbour from this share of it on; less may be a bent drift. [J]"""
FLOOR_SD = 3.0
"""Hum that may be there but shows nowhere is taken as so many standard deviations of a line. [J]"""


@dataclass(frozen=True, slots=True)
class Place:
    """Where and how long it turned."""

    speed_hz: float
    turns: int
    near: Surroundings

    @property
    def apart(self) -> float:
        """What the whole window cannot tell apart, in orders: 2/T over the speed."""
        return NEAR / self.turns


@dataclass(frozen=True, slots=True, eq=False)
class Found:
    """What beside offset and orders is in a window. Amplitudes in counts."""

    orders: Floats
    """Shape (lines,): frequency over speed."""
    weights: Floats
    """Shape (2 lines, probes): of cosine and sine from ``origin`` on; 0 where a line is not in a probe."""
    power: Floats
    """Shape (probes,): mean square that the lines take from the residual."""
    origin: float
    """Angle zero of the lines, in turns from the first edge."""
    hidden: Floats
    """Shape (orders of the fit, probes): amplitude that may hide in each vector; 0 = none."""
    mains: bool
    """Whether hum may be what hides."""
    neighbours: tuple[int, ...]
    """Probes in which something else may be."""
    modelled: bool
    """Whether the lines lie over the whole window, so that they can be taken out of the vectors."""

    @property
    def amplitudes(self) -> Floats:
        """Shape (lines, probes)."""
        size: Floats = np.hypot(self.weights[::2], self.weights[1::2])
        return size


def search(rows: Rows | None, fit: Fit, place: Place, parts: int, *, complete: bool) -> Found:
    """Lines in a folded window whose orders are ``fit`` (probes only) and which is cut into ``parts``.

    ``complete``: all of the window is in ``rows``; with None (too few turns or samples) only what is known of
    the surroundings is judged."""
    look = _Search(rows, fit, parts) if rows is not None else None
    by_mains, by_neighbours = _mains(place, fit, look), _neighbours(place, fit, look)
    hidden, seen = np.maximum(by_mains, by_neighbours), by_neighbours.any(axis=0)
    orders, weights = np.empty(0), np.empty((0, fit.values.shape[1]))
    power, origin = np.zeros(fit.values.shape[1]), 0.0
    if look is not None:
        weights, shown, power = look.weights()
        orders, weights = look.found[shown], weights[np.repeat(shown, 2)]
        beside, origin = look.beside_orders(), look.rows.middle
        hidden = np.maximum(hidden, beside)
        strong = (beside > NEAR_SHARE * np.abs(fit.value(1))).any(axis=0)
        seen = seen | (strong & ~by_mains.any())
    return Found(
        orders=orders,
        weights=weights,
        power=power,
        origin=origin,
        hidden=hidden,
        mains=bool(by_mains.any()),
        neighbours=tuple(np.flatnonzero(seen).tolist()),
        modelled=complete and rows is not None,
    )


def _mains(place: Place, fit: Fit, look: _Search | None) -> Floats:
    """Hum that may hide in the fitted orders: the largest at the other multiples of mains, or the floor.
    Shape (orders, probes), zero where no multiple comes near."""
    hidden = np.zeros(fit.values.shape)
    if place.near.mains_hz is None:
        return hidden
    base = place.near.mains_hz / place.speed_hz
    multiples: Floats = base * np.arange(1.0, max(2, int(max(fit.orders) / base) + 3))
    close = [bool(np.min(np.abs(multiples - order)) < place.apart) for order in fit.orders]
    if any(close):
        hidden[close] = _largest(multiples, fit, look)
    return hidden


def _neighbours(place: Place, fit: Fit, look: _Search | None) -> Floats:
    """What a neighbour known to turn near a fitted order may add; shape (orders, probes)."""
    hidden = np.zeros(fit.values.shape)
    for hz in place.near.neighbours_hz:
        line = hz / place.speed_hz
        for i, order in enumerate(fit.orders):
            if abs(line - order) < place.apart:
                hidden[i] = np.maximum(hidden[i], _largest(np.array([line]), fit, look))
    return hidden


def _largest(orders: Floats, fit: Fit, look: _Search | None) -> Floats:
    """The largest amplitude at those of ``orders`` that can be told apart, at least the floor; (probes,)."""
    floor: Floats = FLOOR_SD * fit.residual_sd * np.sqrt(2 / max(fit.samples, 1))
    return floor if look is None else look.largest(orders, floor)


class _Search:
    """The folded window, the lines found in it so far, and what they leave."""

    def __init__(self, rows: Rows, fit: Fit, parts: int) -> None:
        self.rows = rows
        self.fitted = fit.orders
        self._values = fit.values
        self._first = np.abs(fit.value(1))
        self._part_turns = rows.turns / max(parts, 1)
        self._scatters = SCATTERS * fit.residual_sd * np.sqrt(2 * parts / max(fit.samples, 1))
        self.found: Floats = np.empty(0)
        self._given = self._nuisance()
        self._rest = rows.values
        self._refused: list[float] = []
        self._spectrum: tuple[Floats, Floats] | None = None
        self._fit()
        while len(self.found) < MOST_LINES and self.another():
            pass

    @property
    def near(self) -> float:
        """What cannot be told apart, in orders."""
        return NEAR / self.rows.turns

    def _model(self) -> Floats:
        """Offset and orders: shape (n, 1 + 2 orders)."""
        turning = self.rows.columns(np.array(self.fitted, np.float64))
        return np.concatenate((np.ones((len(turning), 1)), turning), axis=1)

    def _nuisance(self) -> Floats:
        """Offset, the orders, and a drift of each: shape (n, 2 + 4 orders)."""
        fixed = self._model()
        along = (self.rows.angle - self.rows.middle) / max(self.rows.turns / 2, 1e-9)
        return np.concatenate((fixed, fixed * along[:, None]), axis=1)

    def _fit(self) -> tuple[Floats, Floats]:
        """Least squares of all that is known; leaves what remains. Returns (design, coefficients)."""
        design = np.concatenate((self._given, self.rows.columns(self.found)), axis=1)
        told = _solved(design, self.rows.values)
        self._rest, self._spectrum = self.rows.values - _applied(design, told), None
        return design, told

    # --- a new line --------------------------------------------------------------------------------------

    def another(self) -> bool:
        """Find the line that stands out most, refine all, and fit again. False when none stands out."""
        at = self._peak()
        if at is None:
            return False
        before = self.found
        self.found = np.append(before, at)
        if self._refine(at):
            return True
        self.found = before
        self._refused.append(at)
        self._fit()
        return len(self._refused) < MOST_LINES

    def _peak(self) -> float | None:
        """The order of the peak that stands out most in any probe."""
        orders, power = self.spectrum()
        free = self._free(orders)
        best, at = STANDS_OUT, None
        beat = int(np.ceil(1 / self.rows.turns / float(orders[1])))  # a skirt of what is nearer is no line
        away = np.min(np.abs(orders[:, None] - np.array(self.fitted)), axis=1)
        scatters = self._scatters * np.maximum(1, np.pi * self._part_turns * away)[:, None]
        least = np.maximum(np.minimum(LEAST_SHARE * self._first, scatters), LEAST_COUNTS)
        flat = np.where(free[:, None] & (power > least**2), power / _blockwise(power), 0.0)
        for p in np.flatnonzero(flat.max(axis=0) > STANDS_OUT / 4).tolist():
            column = power[:, p]
            for k in np.argpartition(flat[:, p], -CANDIDATES)[-CANDIDATES:].tolist():
                top = column[k] == column[max(0, k - beat) : k + beat + 1].max()
                ratio = column[k] / self._around(orders, column, k) if top and flat[k, p] > 0 else 0.0
                if ratio > best:
                    best, at = ratio, float(orders[k])
        return at

    def spectrum(self) -> tuple[Floats, Floats]:
        """Power of what remains, Hann-weighted, as squared amplitude: orders (m,), (m, probes)."""
        if self._spectrum is None:
            self._spectrum = self._transformed()
        return self._spectrum

    def _transformed(self) -> tuple[Floats, Floats]:
        rows = self.rows
        first, length = int(rows.slot[0]), int(rows.slot[-1] - rows.slot[0]) + 1
        points = 1 << (length - 1).bit_length()
        window = np.sin(np.pi * (rows.slot - first + 0.5) / length) ** 2
        scale = 2 / window.sum()
        power = np.empty((points // 2 + 1, rows.values.shape[1]))
        spread = np.zeros(points)
        for p, rest in enumerate(self._rest.T):
            spread[rows.slot - first] = rest * window * scale
            power[:, p] = np.abs(np.fft.rfft(spread)) ** 2
        return np.arange(len(power)) * rows.bins / points, power

    def _free(self, orders: Floats) -> NDArray[np.bool_]:
        """Where a line may be: no drift, no multiple of the speed, none found there yet."""
        free = (orders > LOWEST / self.rows.turns) & (orders < self.rows.bins / 2 - 1)
        free &= np.abs(orders - np.rint(orders)) > self.near
        for known in (*self.found.tolist(), *self._refused):
            free &= np.abs(orders - known) > self.near
        return np.asarray(free)

    def _around(self, orders: Floats, power: Floats, k: int) -> float:
        """What noise would show at point ``k``: the larger of the medians on either side, the upper one
        carried down as if the noise fell as steeply as a random walk (1/f^2)."""
        skirt = int(np.ceil(SKIRT / self.rows.turns / float(orders[1])))
        left, right = max(1, k - skirt), min(k + skirt + 1, len(power) - SIDE)
        carried = float(np.median(power[right : right + SIDE])) * ((right + SIDE / 2) / max(k, 1)) ** 2
        below = power[max(1, left - SIDE) : left]
        return max(carried, float(np.median(below)) if len(below) >= SIDE // 4 else 0.0, 1e-12)

    def _refine(self, start: float) -> bool:
        """Gauss-Newton on the orders of all lines, shared by all probes. False when the new one runs away."""
        reach = 0.5 / self.rows.turns
        for _ in range(STEPS):
            design, told = self._fit()
            shift = self._shift(design, told)
            self.found = self.found + np.clip(shift, -reach, reach)
        self._fit()
        new = float(self.found[-1])
        others = np.append(self.found[:-1], np.rint(new))
        return abs(new - start) < 2 * reach and bool(np.all(np.abs(others - new) > self.near / 2))

    def _shift(self, design: Floats, told: Floats) -> Floats:
        """One step of Gauss-Newton for the orders, the rest being solved for; shape (lines,)."""
        count = len(self.found)
        lines, weights = design[:, -2 * count :], told[-2 * count :]
        noise = np.maximum(np.mean(self._rest**2, axis=0), 1e-12)
        lean = 2 * np.pi * (self.rows.angle - self.rows.middle)[:, None]
        curve, pull = np.zeros((count, count)), np.zeros(count)
        for p, rest in enumerate(self._rest.T):
            slopes = lean * (lines[:, ::2] * weights[1::2, p] - lines[:, 1::2] * weights[::2, p])
            left = slopes - _applied(design, _solved(design, slopes))
            curve += _crossed(left, left) / noise[p]
            pull += _crossed(left, rest[:, None])[:, 0] / noise[p]
        curve[np.diag_indices(count)] *= 1 + 1e-9
        return np.asarray(np.linalg.solve(curve, pull), np.float64)

    # --- what it amounts to ------------------------------------------------------------------------------

    def weights(self) -> tuple[Floats, NDArray[np.bool_], Floats]:
        """Cosine and sine of each line in each probe beside offset and orders, 0 where it does not stand out
        there; which lines stand out in any; by how much they lessen the mean square of the residual."""
        rows, fixed = self.rows, self._model()
        if not len(self.found):
            return np.empty((0, rows.values.shape[1])), np.zeros(0, bool), np.zeros(rows.values.shape[1])
        noise = np.array([self._noise(order) for order in self.found])
        before = self._without_orders(fixed)
        design = np.concatenate((fixed, rows.columns(self.found)), axis=1)
        told = _solved(design, rows.values)
        after = rows.values - _applied(design, told)
        weights = told[fixed.shape[1] :]
        squared = weights[::2] ** 2 + weights[1::2] ** 2
        lost = np.array([1 - np.mean(rows.pull(order) ** 2) for order in self.found])
        less = np.average(before**2 - after**2, axis=0, weights=rows.size) + lost @ squared / 2
        shown = squared > SIGNIFICANT * noise
        return weights * np.repeat(shown, 2, axis=0), np.asarray(shown.any(axis=1)), less * shown.any(axis=0)

    def _without_orders(self, fixed: Floats) -> Floats:
        """What the fit over all samples leaves of the bins: its values, not those of a fit of the bins, so
        that squares of bins and of samples belong to one residual."""
        orders = np.array(self.fitted)[:, None]
        turned = self._values * np.exp(-2j * np.pi * ((orders * self.rows.middle) % 1.0))
        told = np.zeros((fixed.shape[1], turned.shape[1]))
        told[1::2], told[2::2] = turned.real, turned.imag
        left = self.rows.values - _applied(fixed, told)
        return left - np.average(left, axis=0, weights=self.rows.size)

    def _noise(self, order: float) -> Floats:
        """Mean squared amplitude that noise would show at ``order``; shape (probes,)."""
        orders, power = self.spectrum()
        k = int(np.argmin(np.abs(orders - order)))
        around = np.array([self._around(orders, column, k) for column in power.T])
        mean: Floats = around / np.log(2)
        return mean / 1.5  # median to mean; the Hann window takes in 1.5 times the noise

    def beside_orders(self) -> Floats:
        """Amplitude of a peak nearer to a fitted order than can be told apart; shape (orders, probes)."""
        orders, power = self.spectrum()
        hidden = np.zeros(self._values.shape)
        for i, order in enumerate(self.fitted):
            beside = np.flatnonzero(np.abs(orders - order) <= self.near)
            if not len(beside):
                continue
            top = beside[np.argmax(power[beside], axis=0)]
            size = np.sqrt(power[top, np.arange(len(top))])
            least = np.maximum(NEAR_SHARE * np.abs(self._values[i]), LEAST_COUNTS)
            for p in np.flatnonzero(size > least).tolist():
                if size[p] ** 2 > STANDS_OUT * self._around(orders, power[:, p], int(top[p])):
                    hidden[i, p] = size[p]
        return hidden

    def largest(self, orders: Floats, floor: Floats) -> Floats:
        """The largest amplitude at any of ``orders`` that lies in reach and apart from the multiples of the
        speed, at least ``floor``; shape (probes,)."""
        largest = floor
        for order in orders:
            beside = abs(order - np.rint(order))
            fitted = bool(np.rint(order) in self.fitted)
            if order > self.rows.bins / 2 - 1 or beside < self.near / (2 if fitted else 1):
                continue
            known = self.found[np.abs(self.found - order) < self.near]
            there = known if len(known) else np.array([order])
            design = np.concatenate((self._given, self.rows.columns(there)), axis=1)
            told = _solved(design, self.rows.values)[self._given.shape[1] :]
            largest = np.maximum(largest, np.hypot(told[::2], told[1::2]).max(axis=0))
        return np.asarray(largest, np.float64)


def _blockwise(power: Floats) -> Floats:
    """A coarse neighbourhood of each point of (points, probes): the median of its block of points."""
    blocks = len(power) // SIDE
    middles = np.partition(power[: blocks * SIDE].reshape(blocks, SIDE, -1), SIDE // 2, axis=1)[:, SIDE // 2]
    spread = np.repeat(middles, SIDE, axis=0)
    tail = np.broadcast_to(middles[-1], (len(power) - len(spread), power.shape[1]))
    return np.asarray(np.maximum(np.concatenate((spread, tail)), 1e-12), np.float64)


def _solved(design: Floats, values: Floats) -> Floats:
    """Least squares by the normal equations; the columns are near orthogonal."""
    gram = _crossed(design, design)
    gram[np.diag_indices_from(gram)] *= 1 + 1e-12
    return np.asarray(np.linalg.solve(gram, _crossed(design, values)), np.float64)


def _crossed(one: Floats, other: Floats) -> Floats:
    """``one.T @ other`` in blocks so small that no library spreads them over threads: quicker on a busy
    machine, and the same bits on any."""
    total = np.zeros((one.shape[1], other.shape[1]))
    for i in range(0, len(one), BLOCK):
        total += one[i : i + BLOCK].T @ other[i : i + BLOCK]
    return total


def _applied(design: Floats, told: Floats) -> Floats:
    """``design @ told``, in blocks for the same reason."""
    out = np.empty((len(design), told.shape[1]))
    for i in range(0, len(design), BLOCK):
        np.matmul(design[i : i + BLOCK], told, out=out[i : i + BLOCK])
    return out


def leak(rows: Rows, orders: Sequence[int], found: Found, first: int, stop: int) -> Floats:
    """What each line of unit size adds to offset and orders in a fit over turns ``first`` to ``stop`` that
    leaves it out: shape (1 + 2 orders, 2 lines). It hangs on the angles alone: sums of products of cosines
    over the samples of whole turns, bin by bin, beside which the products of two orders all but vanish."""
    part = rows.part(first, stop)
    out = np.zeros((1 + 2 * len(orders), 2 * len(found.orders)))
    total = float(part.size.sum())
    for j, line in enumerate(found.orders):
        for i, order in enumerate((0, *orders)):
            plus, minus = (part.sum_of(order, sign * float(line), found.origin) for sign in (1.0, -1.0))
            cos = np.array([(plus + minus).real, (plus - minus).imag]) / total
            sin = np.array([(plus + minus).imag, (minus - plus).real]) / total
            if order == 0:
                out[0, 2 * j : 2 * j + 2] = cos / 2
            else:
                out[2 * i - 1, 2 * j : 2 * j + 2], out[2 * i, 2 * j : 2 * j + 2] = cos, sin
    return out
