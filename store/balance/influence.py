"""The influence-coefficient method on plain complex numbers (METHODS sections 1 and 2).

Vectors V = A e^{+j lag}; weights W = m e^{j theta} with theta against rotation; V = V0 + alpha W. Units are
the caller's: grams or g.mm for weights, any one unit per channel for vectors.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

ComplexArray = NDArray[np.complex128]
FloatArray = NDArray[np.float64]

RANK_TOLERANCE = 1e-2
"""Directions in which the weight differences (each plane scaled to its own largest) are smaller than this
share of the largest tell nothing apart: masses and holes are typed to about a percent (judgement)."""
SAME_WEIGHT = 1e-6
"""Weight differences below this share of the largest weight are rounding."""


def coefficient(before: complex, after: complex, weight_change: complex) -> complex:
    """alpha = (V1 - V0) / W."""
    return (after - before) / weight_change


def correction_one_plane(v0: complex, v1: complex, trial: complex, *, kept: bool = False) -> complex:
    """Weight to add: -V0 W / (V1 - V0) with the trial weight removed, -V1 W / (V1 - V0) with it kept."""
    return -(v1 if kept else v0) / coefficient(v0, v1, trial)


def coefficient_matrix(
    v0: Sequence[complex], runs: Sequence[tuple[Sequence[complex], complex]], *, kept: bool = False
) -> ComplexArray:
    """A, shape (channels, planes), from one trial run per plane, in plane order.

    ``runs`` holds (vectors of the run, its trial weight). With ``kept`` each trial weight stayed on for the
    runs after it, so each run is compared with the one before it; otherwise with ``v0``.
    """
    base = np.asarray(v0, dtype=np.complex128)
    columns = []
    for vectors, weight in runs:
        now = np.asarray(vectors, dtype=np.complex128)
        columns.append((now - base) / weight)
        base = now if kept else base
    return np.stack(columns, axis=1)


def correction(
    A: ComplexArray, v: Sequence[complex] | ComplexArray, row_weights: FloatArray | None = None
) -> ComplexArray:
    """Weights to add, shape (planes,): the least-squares w of A w + V = 0 (exact when square).

    ``row_weights`` P multiply the squares: w = -(A^H P A)^{-1} A^H P V (METHODS section 2).
    """
    root = np.ones(A.shape[0]) if row_weights is None else np.sqrt(row_weights)
    solution = np.linalg.lstsq(root[:, None] * A, -root * np.asarray(v, dtype=np.complex128), rcond=None)[0]
    return np.asarray(solution, dtype=np.complex128)


def inverse(A: ComplexArray, row_weights: FloatArray | None = None) -> ComplexArray:
    """The (weighted) least-squares inverse of A, shape (planes, channels): w = -inverse @ V."""
    root = np.ones(A.shape[0]) if row_weights is None else np.sqrt(row_weights)
    return np.asarray(np.linalg.pinv(root[:, None] * A) * root[None, :], dtype=np.complex128)


def condition_number(A: ComplexArray) -> float:
    """Ratio of the largest singular value to the smallest."""
    return float(np.linalg.cond(A))


@dataclass(frozen=True, slots=True)
class PlaneEffects:
    """What runs with different weights say of each plane, for one channel."""

    known: tuple[bool, ...]
    """Per plane: whether the weight differences tell it apart."""
    values: ComplexArray
    """alpha per plane, shape (planes,); 0 where not known."""
    maps: ComplexArray
    """Shape (planes, readings): values = maps @ vectors, so errors propagate by |maps|^2."""


def plane_effects(weights: ComplexArray, vectors: ComplexArray, sd: FloatArray) -> PlaneEffects:
    """Least squares of V_i = V_base + sum_p alpha_p W_ip with V_base unknown too.

    ``weights`` (readings, planes), ``vectors`` (readings,), ``sd`` (readings,) per component. A plane whose
    weights never changed, or changed only together with another's, is not known.
    """
    readings, planes = weights.shape
    scaled, scale = _scaled_differences(weights)
    basis = _told_apart(scaled)
    known = _known_planes(basis, scale)
    maps = np.zeros((planes, readings), dtype=np.complex128)
    if basis.shape[1]:
        root = 1.0 / sd
        design = np.column_stack([np.ones(readings), scaled @ basis]) * root[:, None]
        solved = np.linalg.pinv(design)[1:] * root[None, :]
        maps = (basis @ solved) / np.where(scale > 0, scale, 1.0)[:, None]
        maps[~np.array(known)] = 0.0
    return PlaneEffects(known, np.asarray(maps @ vectors, dtype=np.complex128), maps)


def _scaled_differences(weights: ComplexArray) -> tuple[ComplexArray, FloatArray]:
    """Differences from the mean weight, each plane over its own largest; the scale is 0 where none is."""
    centred = weights - weights.mean(axis=0)
    spread = np.abs(centred).max(axis=0)
    floor = SAME_WEIGHT * max(1.0, float(np.abs(weights).max(initial=0.0)))
    scale = np.where(spread > floor, spread, 0.0)
    return np.where(scale > 0, centred / np.where(scale > 0, scale, 1.0), 0.0), scale


def _told_apart(scaled: ComplexArray) -> ComplexArray:
    """Orthonormal basis, shape (planes, rank), of the directions the readings tell apart."""
    _, singular, vh = np.linalg.svd(scaled, full_matrices=False)
    largest = float(singular.max(initial=0.0))
    return np.asarray(vh[singular > max(RANK_TOLERANCE * largest, 1e-12)].conj().T, dtype=np.complex128)


def _known_planes(basis: ComplexArray, scale: FloatArray) -> tuple[bool, ...]:
    """Planes that lie wholly inside the basis (no share in the null space)."""
    inside = (np.abs(basis) ** 2).sum(axis=1)
    return tuple(bool(s > 0 and i > 1.0 - 1e-6) for s, i in zip(scale, inside, strict=True))
