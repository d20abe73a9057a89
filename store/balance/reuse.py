"""Which coefficients of history may be used now, turned and pooled, and how far they may be off.

Same model, plane, channel and speed (0.5 %); turned exactly by the change of the once-per-rev sensor's
angle; a moved rotor mark changes nothing. Everything else that differs forbids reuse and is named (REUSE
section (d)). The spread of a machine not yet measured is a prior (REUSE section (b), judgement) until five
machines of the model are known; smaller numbers of machines update it.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, replace

from config.errors import Refusal
from store.balance.angles import turn
from store.balance.fit import near
from store.balance.standing import Standing, differences, sensor_turn_deg
from store.records import Coefficient, Mount, Origin, SetUp

Candidate = tuple[Coefficient, Mount, SetUp]
"""A coefficient of history with the mount and the set-up it belongs to."""

WEAK_RATIO = 3.0
WEAK_ERROR = 0.5
"""A plane's coefficients are not reused when, in the channel that shows it best, the effect ratio is below
the one or the relative error above the other (REUSE (d) 9)."""
ENOUGH_MACHINES = 5
PLANE_MOVED_MM = 1.0


@dataclass(frozen=True, slots=True)
class Prior:
    """Scatter of a pair (the new machine against the one known), REUSE section (b)."""

    amplitude: float
    phase_deg: float
    dof: float
    words: str

    @property
    def per_component(self) -> float:
        """Relative sd per component of the pair difference, taken as circular."""
        return math.sqrt((self.amplitude**2 + math.radians(self.phase_deg) ** 2) / 2.0)


SISTER = Prior(0.20, 15.0, 4.0, "20 % and 15 deg between sister machines")
SAME_MACHINE = Prior(0.10, 5.0, 6.0, "10 % and 5 deg for the same machine on a later day")


@dataclass(frozen=True, slots=True)
class Pooled:
    """A coefficient of history for this machine, in the frame of its present standing."""

    plane: int
    channel: str
    value: complex
    """Base unit 0-peak per g.mm."""
    sd: float
    """How far this machine's own may be off, per component."""
    machines: tuple[str, ...]
    jobs: tuple[str, ...]
    basis: str
    """Where ``sd`` comes from, in words."""


@dataclass(frozen=True, slots=True)
class NotReused:
    """A coefficient of history that may not be used now, and why (a sentence)."""

    job_number: str
    machine_serial: str
    plane: int
    channel: str
    why: str


@dataclass(frozen=True, slots=True)
class ReusePool:
    pooled: tuple[Pooled, ...]
    refused: tuple[NotReused, ...]
    notes: tuple[str, ...] = ()

    def get(self, plane: int, channel: str) -> Pooled | None:
        return next((p for p in self.pooled if p.plane == plane and p.channel == channel), None)


def pool(
    candidates: Iterable[Candidate],
    now: Standing,
    *,
    speed_hz: float,
    origins: frozenset[Origin],
    not_job: str | None = None,
) -> ReusePool:
    """Sort the candidates (those of job ``not_job``, the present one, are passed over) and pool what fits."""
    fitting: dict[tuple[int, str], list[Coefficient]] = {}
    refused: list[NotReused] = []
    known = [c for c in candidates if not _is_of(c[0], not_job, now.mount.machine.serial)]
    weighings: dict[Weighing, list[Coefficient]] = {}
    for coefficient, _, _ in known:
        weighings.setdefault(_weighing(coefficient), []).append(coefficient)
    for coefficient, mount, set_up in known:
        then = Standing(mount, set_up)
        strongest = _strongest(coefficient, weighings[_weighing(coefficient)])
        why = why_not(coefficient, then, now, speed_hz=speed_hz, origins=origins, strongest=strongest)
        if why:
            refused.append(_refused(coefficient, why))
        else:
            fitting.setdefault((coefficient.plane, coefficient.channel), []).append(
                _turned(coefficient, then, now)
            )
    serial = now.mount.machine.serial
    pooled = tuple(_pool_one(*key, found, serial) for key, found in sorted(fitting.items()))
    return ReusePool(pooled, tuple(refused), _notes(fitting, serial))


def _is_of(c: Coefficient, job: str | None, serial: str) -> bool:
    return c.job_number == job and c.machine_serial == serial


Weighing = tuple[str, str, int, object, object, object]


def _weighing(c: Coefficient) -> Weighing:
    """What one set of weights told of: a plane in one standing of a job, seen by several channels."""
    return c.machine_serial, c.job_number, c.plane, c.mount_id, c.set_up_id, c.origin


def _strongest(c: Coefficient, others: Iterable[Coefficient]) -> Coefficient:
    """Of the same weights at the same speed, the coefficient of the channel that saw them best.

    A far probe answers weakly to a plane, and its coefficient's error, no larger than its neighbours',
    looks large beside it; whether the weights were heavy enough is judged where they show most.
    """
    same = [o for o in others if near(o.speed_hz, c.speed_hz)]
    return max(same, key=lambda o: o.largest_effect_ratio, default=c)


def why_not(
    coefficient: Coefficient,
    then: Standing,
    now: Standing,
    *,
    speed_hz: float,
    origins: frozenset[Origin],
    strongest: Coefficient | None = None,
) -> str:
    """Why a coefficient may not be used in the present standing, as a sentence; empty = it may, turned.

    ``strongest``: of the same plane and job, the coefficient of the channel that saw the weights best.
    """
    reasons = _of_marks(then.mount, now.mount)
    reasons += _of_record(coefficient, strongest or coefficient, speed_hz, origins)
    reasons += _of_model(coefficient, then.mount, now.mount)
    if not reasons:
        try:
            reasons = differences(coefficient.channel, then, now)
        except Refusal as refusal:
            reasons = (refusal.cause.rstrip("."),)
    text = "; ".join(reasons)
    return f"{text[0].upper()}{text[1:]}." if text else ""


def _of_marks(then: Mount, now: Mount) -> tuple[str, ...]:
    if now.mark_how is None:
        return ("the rotor mark's position was not measured for this mount, so nothing is reused",)
    if then.mark_how is None:
        return ("the rotor mark's position was not measured for its mount",)
    return ()


def _of_record(
    c: Coefficient, strongest: Coefficient, speed_hz: float, origins: frozenset[Origin]
) -> tuple[str, ...]:
    reasons: list[str] = []
    if c.origin not in origins:
        reasons.append(f"its runs are {c.origin.value}, and this job takes {_names(origins)} ones only")
    if not near(c.speed_hz, speed_hz):
        reasons.append(f"its speed is {c.speed_hz * 60:.1f} r/min, more than 0.5 % from {speed_hz * 60:.1f}")
    if strongest.largest_effect_ratio < WEAK_RATIO:
        reasons.append(
            f"the largest effect of its weights is only {strongest.largest_effect_ratio:.1f} times the "
            "scatter (3 needed)"
        )
    elif strongest.se > WEAK_ERROR * abs(strongest.value):
        error = 100 * strongest.se / abs(strongest.value)
        reasons.append(f"its error is {error:.0f} % (50 % at most)")
    return tuple(reasons)


def _names(origins: frozenset[Origin]) -> str:
    return " and ".join(sorted(o.value for o in origins))


def _of_model(c: Coefficient, then: Mount, now: Mount) -> tuple[str, ...]:
    model = now.machine.model
    if c.model_code != model.code:
        return (f"it belongs to model {c.model_code}, this machine to {model.code}",)
    old, new = then.machine.model.plane(c.plane), model.plane(c.plane)
    if new is None:
        return (f"the model has no plane {c.plane} now",)
    if old is None or old.position_mm is None or new.position_mm is None:
        return ()
    if abs(old.position_mm - new.position_mm) > PLANE_MOVED_MM:
        return (f"plane {c.plane} was at {old.position_mm:g} mm then, now {new.position_mm:g} mm",)
    return ()


def _refused(c: Coefficient, why: str) -> NotReused:
    return NotReused(c.job_number, c.machine_serial, c.plane, c.channel, why)


def _turned(c: Coefficient, then: Standing, now: Standing) -> Coefficient:
    return replace(c, value=turn(c.value, sensor_turn_deg(then, now)))


@dataclass(frozen=True, slots=True)
class _Mean:
    """Mean coefficient of one machine, and the part of its error that measuring it left."""

    value: complex
    se: float


def _pool_one(plane: int, channel: str, found: list[Coefficient], serial: str) -> Pooled:
    """The machine's own history where it has one, else the mean over its sisters."""
    own = [c for c in found if c.machine_serial == serial]
    used = own or found
    by_machine: dict[str, list[Coefficient]] = {}
    for c in used:
        by_machine.setdefault(c.machine_serial, []).append(c)
    if own:
        value, sd, basis = _same_machine(own)
    else:
        value, sd, basis = _sisters([_within(jobs) for jobs in by_machine.values()])
    jobs = tuple(dict.fromkeys(c.job_number for c in used))
    return Pooled(plane, channel, value, sd, tuple(by_machine), jobs, basis)


def _within(jobs: list[Coefficient]) -> _Mean:
    """Mean of a machine's jobs, weighted by their own error and the day-to-day scatter."""
    day = SAME_MACHINE.per_component / math.sqrt(2.0)
    weights = [1.0 / (c.se**2 + (day * abs(c.value)) ** 2) for c in jobs]
    total = sum(weights)
    value = sum((w * c.value for w, c in zip(weights, jobs, strict=True)), start=0j) / total
    return _Mean(value, math.sqrt(sum((w * c.se) ** 2 for w, c in zip(weights, jobs, strict=True))) / total)


def _spread(prior: Prior, values: list[complex], mean: complex) -> float:
    """Population sd per component: the prior updated by the deviations from the mean.

    s^2 = (nu0 s0^2 + sum |d|^2) / (nu0 + 2 (n - 1)), REUSE section (b); a pair difference is sqrt2 of it.
    Own errors are not taken off the deviations, so it is rather too large than too small.
    """
    known = prior.dof * prior.per_component**2 / 2.0 * abs(mean) ** 2
    total = known + sum(abs(v - mean) ** 2 for v in values)
    return math.sqrt(total / (prior.dof + 2.0 * (len(values) - 1)))


def _same_machine(own: list[Coefficient]) -> tuple[complex, float, str]:
    mean = _within(own)
    tau = _spread(SAME_MACHINE, [c.value for c in own], mean.value)
    sd = math.hypot(tau * math.sqrt(1.0 + 1.0 / len(own)), mean.se)
    how = "not measured" if len(own) < 2 else f"updated by {len(own)} jobs"
    return mean.value, sd, f"this machine's own history; spread {SAME_MACHINE.words}: prior, {how}"


def _sisters(machines: list[_Mean]) -> tuple[complex, float, str]:
    """Complex mean over machines; sd of one more machine about it."""
    count = len(machines)
    values = [m.value for m in machines]
    value = sum(values, start=0j) / count
    if count >= ENOUGH_MACHINES:
        variance = sum(abs(v - value) ** 2 for v in values) / (2.0 * (count - 1))
        sd = math.sqrt(variance * (1.0 + 1.0 / count))
        return value, sd, f"spread measured over {count} sister machines"
    own = math.sqrt(sum(m.se**2 for m in machines)) / count
    sd = math.hypot(_spread(SISTER, values, value) * math.sqrt(1.0 + 1.0 / count), own)
    how = "not measured" if count == 1 else f"updated by {count} machines"
    return value, sd, f"spread {SISTER.words}: prior, {how}"


def _notes(fitting: dict[tuple[int, str], list[Coefficient]], serial: str) -> tuple[str, ...]:
    found = [c for group in fitting.values() for c in group]
    own = {(c.plane, c.channel) for c in found if c.machine_serial == serial}
    aside = {c.job_number for c in found if (c.plane, c.channel) in own and c.machine_serial != serial}
    if not aside:
        return ()
    return (
        f"This machine's own history is used alone; jobs {', '.join(sorted(aside))} of sisters stay aside.",
    )
