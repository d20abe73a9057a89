"""How sure the arithmetic is (METHODS section 10). s = standard deviation per component of one vector."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from store.balance.influence import ComplexArray

REFUSE_BELOW_RATIO = 5.0
"""|V1 - V0| / (sqrt2 s) below which the first-order errors no longer hold (METHODS 10.2)."""
WARN_BELOW_RATIO = 10.0
CHANGED_ABOVE = 4.6
"""|measured - predicted|^2 / (2 variance per component) above which 99 % of honest runs do not lie."""


def effect_ratio(before: complex, after: complex, s: float) -> float:
    """|V1 - V0| / (sqrt2 s)."""
    return abs(after - before) / (math.sqrt(2.0) * s)


def sd_coefficient(s: float, trial: complex) -> float:
    """sd of alpha = (V1 - V0)/W per component: sqrt2 s / |W|."""
    return math.sqrt(2.0) * s / abs(trial)


def sd_correction_one_plane(v0: complex, v1: complex, trial: complex, s: float) -> float:
    """sd per component of w = -V0 W / (V1 - V0), first order; the same for the keep-trial weight."""
    weight = abs(trial) * s * math.hypot(abs(v0), abs(v1))
    return weight / abs(v1 - v0) ** 2


def sd_correction(
    inverse: ComplexArray, w: Sequence[complex], trials: Sequence[complex], s: float
) -> list[float]:
    """sd per component of each plane's weight, one trial run per plane against a common first run.

    s sqrt(sum_p |A^-1_kp|^2) sqrt(|1 - sum_j w_j/W_j|^2 + sum_j |w_j/W_j|^2).
    """
    shares = np.asarray(w) / np.asarray(trials)
    common = math.sqrt(abs(1.0 - shares.sum()) ** 2 + float((np.abs(shares) ** 2).sum()))
    return [s * float(np.sqrt((np.abs(row) ** 2).sum())) * common for row in inverse]


def sd_correction_reused(alpha: complex, sd_alpha: float, w: complex, s: float) -> float:
    """sd per component of w = -V0/alpha with alpha from elsewhere: sqrt(s^2 + |w|^2 sd_alpha^2)/|alpha|."""
    return math.hypot(s, abs(w) * sd_alpha) / abs(alpha)


def pool_effects(trials: Sequence[complex], effects: Sequence[complex]) -> complex:
    """alpha = sum conj(W) dV / sum |W|^2 over trials with a first run of their own each (METHODS 10.3)."""
    total = sum(abs(w) ** 2 for w in trials)
    return sum((w.conjugate() * dv for w, dv in zip(trials, effects, strict=True)), start=0j) / total


def chance_within(limit: float, mean: float, s: float) -> float:
    """P(|residual| <= limit) of a vector of that mean and s per component (Rice, METHODS 10.4)."""
    if s <= 0.0:
        return 1.0 if mean <= limit else 0.0
    from scipy.special import chndtr

    return float(chndtr((limit / s) ** 2, 2.0, (mean / s) ** 2))


def amplitude_quantile(share: float, mean: float, s: float) -> float:
    """The amplitude that a share of such vectors stays below: the inverse of ``chance_within``."""
    if s <= 0.0:
        return mean
    from scipy.special import chndtrix

    return s * math.sqrt(max(float(chndtrix(share, 2.0, (mean / s) ** 2)), 0.0))


def innovation(measured: complex, predicted: complex, sd: float) -> float:
    """|measured - predicted|^2 / (2 sd^2), sd per component of the difference; see ``CHANGED_ABOVE``."""
    return abs(measured - predicted) ** 2 / (2.0 * sd**2) if sd > 0 else math.inf
