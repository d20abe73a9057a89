"""Records as JSON: the keys that ``--json`` prints and the control channel carries, units in their names.

``*_pk`` amplitudes are 0-peak in the unit beside them; ``lag_deg`` counts against rotation from the
once-per-rev edge and is null where the amplitude is below its noise floor (it would mean nothing).
Times are ISO 8601 UTC. UUIDs appear here and nowhere else.
"""

from __future__ import annotations

import cmath
import math
from datetime import UTC, datetime
from typing import Any

from store.records import (
    Coefficient,
    Job,
    Machine,
    Mark,
    Mount,
    Reading,
    Run,
    RunLine,
    Vector,
    WeightEvent,
    WeightPlane,
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


def vector_json(vector: Vector) -> Json:
    amplitude, lag = polar(vector.value)
    return {
        "channel": vector.channel,
        "order": vector.order,
        "unit": vector.unit,
        "amplitude_pk": amplitude,
        "lag_deg": lag if amplitude > vector.noise_floor else None,
        "se_pk": math.sqrt(max(vector.var_re, vector.var_im)),
        "noise_floor_pk": vector.noise_floor,
    }


def reading_json(reading: Reading) -> Json:
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
        "steadiness": dict(reading.steadiness),
        "vectors": [vector_json(v) for v in reading.vectors],
    }


def run_json(run: Run) -> Json:
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
        "readings": [reading_json(r) for r in run.readings],
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
