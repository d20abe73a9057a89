"""Records as JSON: the keys that ``--json`` prints and the control channel carries, units in their names.

``*_pk`` amplitudes are 0-peak in the unit beside them; ``lag_deg`` counts against rotation from the
once-per-rev edge and is null where the amplitude is below its noise floor (it would mean nothing).
Times are ISO 8601 UTC. UUIDs appear here and nowhere else.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Iterable, Mapping
from datetime import UTC, datetime
from typing import Any
from uuid import UUID

from store.balance.orbit import SURE, Orbit
from store.listings import RunLine
from store.records import (
    Coefficient,
    Job,
    Level,
    Machine,
    Mark,
    Measured,
    Mount,
    Reading,
    Run,
    Vector,
    WeightEvent,
    WeightPlane,
    flags_of,
)

Json = dict[str, Any]


def utc(at_us: int | None) -> str | None:
    """``2026-12-01T09:30:00.000000Z`` of microseconds UTC."""
    if at_us is None:
        return None
    return datetime.fromtimestamp(at_us / 1e6, UTC).isoformat(timespec="microseconds").replace("+00:00", "Z")


def polar(value: complex) -> tuple[float, float]:
    """Amplitude and angle in degrees, 0 <= angle < 360."""
    return abs(value), math.degrees(cmath.phase(value)) % 360.0


def plus_minus(vector: Vector) -> tuple[float, float | None]:
    """What holds 95 %: of the amplitude (base unit), and of the lag in degrees; None for the lag of a vector
    below its noise floor. Along the vector and across it, by its covariance."""
    size = abs(vector.value)
    along = vector.value / size if size else 1.0 + 0j
    c, s = along.real, along.imag
    radial = c * c * vector.var_re + s * s * vector.var_im + 2 * c * s * vector.cov
    across = s * s * vector.var_re + c * c * vector.var_im - 2 * c * s * vector.cov
    amplitude, sideways = (SURE * math.sqrt(max(0.0, v)) for v in (radial, across))
    if not size > vector.noise_floor:
        return amplitude, None
    return amplitude, math.degrees(math.asin(min(1.0, sideways / size)))


def vector_json(vector: Vector, flags: Iterable[str] = ()) -> Json:
    """``flags`` are those of its reading; it keeps those that concern its channel."""
    amplitude, lag = polar(vector.value)
    amplitude_pm, lag_pm = plus_minus(vector)
    return {
        "channel": vector.channel,
        "order": vector.order,
        "unit": vector.unit,
        "amplitude_pk": amplitude,
        "lag_deg": lag if lag_pm is not None else None,
        "plus_minus_95_pk": amplitude_pm,
        "lag_plus_minus_95_deg": lag_pm,
        "se_pk": math.sqrt(max(vector.var_re, vector.var_im)),
        "noise_floor_pk": vector.noise_floor,
        "flags": list(flags_of(flags, vector.channel)),
    }


def level_json(level: Level) -> Json:
    return {
        "channel": level.channel,
        "unit": level.unit,
        "overall_pp": level.peak_to_peak,
        "residual_rms": level.residual_sd,
        "ac_rms": level.ac_rms,
        "gap_v": level.gap_v,
    }


def version_json(made: Measured) -> Json:
    """How a version of a reading's arithmetic came about."""
    return {
        "version": made.version,
        "why": made.why,
        "who": made.who,
        "at_utc": utc(made.at_us),
        "software": made.software,
        "numpy": made.numpy,
        "processor": made.processor,
    }


def orbit_json(orbit: Orbit) -> Json:
    """``forward`` and ``backward`` are vectors on the stand as the once-per-rev edge passes: where they point
    is a stand angle, as ``tilt_deg`` is. With no rotation known forward is clockwise seen from ``seen_from``.
    """
    return {
        "pair": orbit.pair,
        "order": orbit.order,
        "x": orbit.channels[0],
        "y": orbit.channels[1],
        "unit": orbit.unit,
        "seen_from": orbit.seen_from,
        "rotation": None if orbit.rotation is None else str(orbit.rotation),
        "forward": {"amplitude_pk": orbit.forward_pk, "at_stand_deg": orbit.forward_deg},
        "backward": {"amplitude_pk": orbit.backward_pk, "at_stand_deg": orbit.backward_deg},
        "forward_plus_minus_95_pk": SURE * orbit.forward_sd,
        "backward_plus_minus_95_pk": SURE * orbit.backward_sd,
        "major_axis_pk": orbit.major_pk,
        "major_axis_plus_minus_95_pk": SURE * orbit.major_sd,
        "minor_axis_pk": orbit.minor_pk,
        "tilt_deg": orbit.tilt_deg,
        "tilt_plus_minus_95_deg": None if orbit.tilt_sd_deg is None else SURE * orbit.tilt_sd_deg,
        "whirl": orbit.whirl,
        "precession": orbit.precession,
    }


def reading_json(reading: Reading, derived: Iterable[str] = (), orbits: Iterable[Orbit] = ()) -> Json:
    """``derived`` are the flags that the job's records add to its own (``store.standing_flags``)."""
    added = tuple(derived)
    flags = (*reading.flags, *added)
    return {
        "id": str(reading.id),
        "number": reading.number,
        "label": reading.label,
        "labelled_by": reading.labelled_by,
        "at_utc": utc(reading.at_us),
        "duration_s": reading.duration_s,
        "speed_rpm": reading.speed_hz * 60,
        "revolutions": reading.revolutions,
        "flags": list(reading.flags),
        "derived_flags": list(added),
        "steadiness": dict(reading.steadiness),
        "vectors": [vector_json(v, flags) for v in reading.vectors],
        "levels": [level_json(v) for v in reading.levels],
        "figures": dict(reading.figures),
        "orbits": [orbit_json(o) for o in orbits],
        "version": reading.version,
    }


def run_json(
    run: Run,
    derived: Mapping[UUID, tuple[str, ...]] | None = None,
    orbits: Mapping[UUID, tuple[Orbit, ...]] | None = None,
) -> Json:
    """``derived`` flags and ``orbits`` by reading; None where they were not asked for."""
    added, seen = derived or {}, orbits or {}
    return {
        "id": str(run.id),
        "run": run.name,
        "job": run.job_number,
        "unassigned": f"U/{run.unassigned_number}" if run.unassigned_number is not None else None,
        "origin": run.origin,
        "operator": run.operator,
        "state": run.state,
        "reason": run.reason,
        "void": run.void,
        "started_utc": utc(run.started_us),
        "ended_utc": utc(run.ended_us),
        "condition": dict(run.condition),
        "software": run.software,
        "readings": [reading_json(r, added.get(r.id, ()), seen.get(r.id, ())) for r in run.readings],
    }


def plane_json(plane: WeightPlane) -> Json:
    return {
        "plane": plane.number,
        "radius_mm": plane.radius_mm,
        "holes": plane.holes,
        "numbered": str(plane.numbering),
        "position_mm": plane.position_mm,
    }


def machine_json(machine: Machine) -> Json:
    first = machine.model.first_critical_hz
    return {
        "id": str(machine.id),
        "machine": machine.serial,
        "revision": machine.revision,
        "model": machine.model.code,
        "model_revision": machine.model.revision,
        "rotor_mass_kg": machine.rotor_mass_kg,
        "service_rpm": machine.service_hz * 60,
        "grade_mm_s": machine.grade_mm_s,
        "permissible_gmm": machine.permissible_gmm,
        "bearing_loads_kg": list(machine.bearing_loads_kg),
        "vibration_limit_um_pk": machine.vibration_limit_um_pk,
        "first_critical_rpm": first * 60 if first is not None else None,
        "planes": [plane_json(p) for p in machine.model.planes],
    }


def mount_json(mount: Mount, job_number: str | None = None) -> Json:
    return {
        "id": str(mount.id),
        "job": job_number,
        "machine": mount.machine.serial,
        "model": mount.machine.model.code,
        "rotation": str(mount.rotation),
        "marks": [{"plane": m.plane, "from_hole1_deg": m.from_hole1_deg} for m in mount.marks],
        "mark_how": mount.mark_how,
        "mark_width_deg": mount.mark_width_deg,
        "support": mount.support,
        "coupling": mount.coupling,
        "at_utc": utc(mount.at_us),
        "ended_utc": utc(mount.ended_us),
        "who": mount.who,
    }


def weight_json(event: WeightEvent) -> Json:
    return {
        "id": str(event.id),
        "number": event.seq,
        "act": event.act,
        "plane": event.plane,
        "mass_g": event.mass_g,
        "radius_mm": event.radius_mm,
        "hole": event.hole,
        "angle_deg": event.angle_deg,
        "at_mount": event.at_mount,
        "removes": str(event.removes_id) if event.removes_id else None,
        "at_utc": utc(event.at_us),
        "who": event.who,
        "void": event.void,
    }


def mark_json(mark: Mark) -> Json:
    return {
        "key": mark.key,
        "label": mark.label,
        "job": mark.job_number,
        "state": mark.state,
        "asked_utc": utc(mark.asked_us),
        "who": mark.who,
        "run": mark.run_name,
        "reading": mark.reading_number,
        "detail": mark.detail,
    }


def job_json(job: Job) -> Json:
    return {
        "id": str(job.id),
        "job": job.number,
        "machine": job.machine_serial,
        "speeds_rpm": [s * 60 for s in job.speeds_hz],
        "opened_utc": utc(job.opened_us),
    }


def coefficient_json(coefficient: Coefficient) -> Json:
    amplitude, lag = polar(coefficient.value)
    return {
        "job": coefficient.job_number,
        "machine": coefficient.machine_serial,
        "model": coefficient.model_code,
        "plane": coefficient.plane,
        "channel": coefficient.channel,
        "speed_rpm": coefficient.speed_hz * 60,
        "amplitude_pk_per_gmm": amplitude,
        "lag_deg": lag,
        "se_pk_per_gmm": coefficient.se,
        "runs": list(coefficient.run_names),
        "origin": coefficient.origin,
        "effect_ratio": coefficient.largest_effect_ratio,
        "at_utc": utc(coefficient.at_us),
    }


def run_line_json(line: RunLine) -> Json:
    return {
        "run": line.name,
        "also": line.other_name,
        "job": line.job_number,
        "machine": line.machine_serial,
        "origin": line.origin,
        "state": line.state,
        "reason": line.reason,
        "void": line.void,
        "operator": line.operator,
        "started_utc": utc(line.started_us),
        "ended_utc": utc(line.ended_us),
        "readings": line.readings,
        "labels": list(line.labels),
        "speed_rpm": line.speed_hz * 60 if line.speed_hz is not None else None,
    }
