"""Errors of stored vectors over their bound, and how often stated regions hold the truth, on a large grid.

    python tests/bench/bench_bound.py [errors a point]

Prints, asserts nothing. The bound is that of tests/signal/test_bound.py: METHODS 8.2 (4 s^2/N over both
components of whole turns) and 8.4 (jitter of the edges e/sqrt(M) across the vector).
"""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import sys
from itertools import product
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))
sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "signal"))

import numpy as np
from window_kit import Window, covariances, first_orders, inside

SAMPLES = (20.3, 60.3, 257.3, 1000.7, 4000.3)
TURNS = (8, 64, 512)
RATIOS = (3.0, 50.0, 1000.0)
RPM = (60.0, 3000.0, 60_000.0)
COLUMNS = 100
MOST_FRAMES = 300_000  # of a window; longer ones are left out


def white(w: Window, signal_to_noise: float, errors: int, rng: np.random.Generator) -> tuple[float, ...]:
    """(rms over bound, share inside, stated over bound) with noise in the probes."""
    s = abs(w.vector) / signal_to_noise
    squares, held, stated = [], [], []
    columns = int(min(COLUMNS, max(8, 2e7 // w.frames)))
    for _ in range(max(1, errors // columns)):
        m = w.measured(w.counts(rng.normal(0, s, (w.frames, columns))))
        squares.append(np.abs(first_orders(m) - w.vector) ** 2)
        held.append(inside(m, w.vector))
        stated.append(np.trace(covariances(m), axis1=1, axis2=2))
    bound = 4 * s**2 / (w.per_turn * w.turns)
    return (
        float(np.sqrt(np.mean(squares) / bound)),
        float(np.mean(held)),
        float(np.sqrt(np.mean(stated) / bound)),
    )


def jitter(w: Window, e_deg: float, errors: int, rng: np.random.Generator) -> tuple[float, ...]:
    """(rms of the phase over bound, share inside, mean amplitude less 1) with edges displaced by hand."""
    e, phases, held, sizes = np.radians(e_deg), [], [], []
    for _ in range(errors):
        late = rng.normal(0, e / (2 * np.pi) * w.per_turn, w.turns + 3)
        m = w.measured(w.counts(np.zeros((w.frames, 1)), late=late))
        ratio = first_orders(m)[0] / w.vector
        phases.append(np.angle(ratio))
        sizes.append(abs(ratio))
        held.append(inside(m, w.vector)[0])
    rms = float(np.sqrt(np.mean(np.square(phases))) / (e / np.sqrt(w.turns)))
    return rms, float(np.mean(held)), float(np.mean(sizes) - 1)


def main() -> None:
    errors = int(sys.argv[1]) if len(sys.argv) > 1 else 400
    rng = np.random.default_rng(1)
    print(f"about {errors} errors a point: chance moves a ratio by {50 / errors**0.5:.1f} %")
    print("samples/turn  turns  r/min    S/N   rms/bound  inside  stated/bound")
    for k, (per_turn, turns, ratio) in enumerate(product(SAMPLES, TURNS, RATIOS)):
        w = Window(per_turn=per_turn, turns=turns, rpm=RPM[k % 3], stamped=per_turn < 60)
        if w.frames > MOST_FRAMES:
            continue
        rms, share, stated = white(w, ratio, errors, rng)
        print(f"{per_turn:12.1f} {turns:6d} {w.rpm:6.0f} {ratio:6.0f} {rms:11.3f} {share:7.3f} {stated:9.2f}")
    print("samples/turn  turns  jitter  rms/bound  inside  amplitude - 1")
    for per_turn, turns, e_deg in product((60.3, 400.3), (8, 64), (0.1, 2.0, 5.0)):
        w = Window(per_turn=per_turn, turns=turns)
        rms, share, size = jitter(w, e_deg, errors, rng)
        print(f"{per_turn:12.1f} {turns:6d} {e_deg:5.1f} deg {rms:9.3f} {share:7.3f} {size:12.1e}")


if __name__ == "__main__":
    main()
