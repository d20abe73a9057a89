"""When a reading counts as steady: limits as plain numbers, and the presets a stand file starts from.

Sources: REUSE.md (a) of the project's research where a value is not marked; [J] = this project's judgement.
Every limit is a setting and is stored with the run.
"""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any

TARGET_FLOOR_SHARE = 0.1


@dataclass(frozen=True, slots=True)
class SteadinessLimits:
    """What a window of samples must keep within to become a reading; defaults are preset ``standard``."""

    window_s: float = 60.0
    """Shortest averaging window."""
    longest_window_s: float = 600.0
    """Longest one: it grows block by block until the targets below are reached. As much as the raw samples
    of one reading may take (raw.per_reading_mib) bounds it too. Ten shortest windows. [J]"""
    min_revolutions: int = 100
    """Fewest whole turns in the window; the longer of the two rules."""
    blocks: int = 8
    """Equal parts of the window whose vectors give drift, scatter and standard error; 6 or more."""
    amplitude_target_pct: float = 0.5
    """Standard error at which averaging ends, of the 1X amplitude, where :meth:`target_floor` is smaller."""
    phase_target_deg: float = 0.3
    """The same of the phase."""
    speed_band_pct: float = 0.5
    """Largest distance from the speed at which hold began; the store asks a mark's reading for the same
    distance from the job's speed, and for 0.2 % within 10 % of the model's first critical speed."""
    speed_sd_pct: float = 0.1
    """Largest standard deviation of the speed within the window, of its mean."""
    speed_drift_pct_per_min: float = 0.1
    """Largest slope of the speed over the window, either sign."""
    change_pct: float = 5.0
    """Largest change of a 1X vector between successive windows, of its amplitude, where the floor below
    and its own uncertainty are both smaller; also the largest depth of a beat. Custom warns from 5 to 10 %
    and refuses above; here 5 % refuses: set 10 % for the custom."""
    change_floor_um_pk: float = 0.5
    """The same change in displacement that always passes (1 um pk-pk)."""
    change_floor_mm_s_pk: float = 0.0707
    """The same in velocity (0.05 mm/s rms)."""
    change_floor_m_s2_pk: float = 0.02
    """The same in acceleration: what 0.05 mm/s rms is at 45 Hz. [J]"""
    scatter_pct: float = 5.0
    """Largest standard deviation of the blocks' 1X vectors about their mean, per component, of its
    amplitude; the floors above apply. [J]"""
    lookback_s: float = 300.0
    """How far back the window lies with which the vectors are compared; 0 = within the window itself."""
    hold_s: float = 300.0
    """Time at speed before a reading may count; 0 = at once."""
    thermal_time_constant_s: float = 1800.0
    """Of the slowest part that bends the rotor; 0 = nothing warms up. A stretch quieter than the change
    allowed proves little while shorter than 0.7 of it, and the reading then says so. [J]"""
    min_signal_to_noise: float = 3.0
    """1X amplitude over the noise; below it a reading is flagged, not refused."""

    def change_floor(self, kind: str) -> float:
        """The floor of ``displacement`` (um), ``velocity`` (mm/s) or ``acceleration`` (m/s2), 0-peak."""
        return {
            "displacement": self.change_floor_um_pk,
            "velocity": self.change_floor_mm_s_pk,
            "acceleration": self.change_floor_m_s2_pk,
        }[kind]

    def target_floor(self, kind: str) -> float:
        """Standard error that always ends averaging: a tenth of the change that always passes. Else the
        vector of a rotor balanced well would never be a reading. [J]"""
        return TARGET_FLOOR_SHARE * self.change_floor(kind)

    def to_dict(self) -> dict[str, Any]:
        return asdict(self)


PRESETS: dict[str, SteadinessLimits] = {
    "standard": SteadinessLimits(),
    # For small rotors and short dwells [J]: no thermal settling is looked for. 2 %/min is 0.1 % over its 3 s.
    "small": SteadinessLimits(
        window_s=3.0,
        longest_window_s=30.0,
        min_revolutions=10,
        speed_drift_pct_per_min=2.0,
        lookback_s=0.0,
        hold_s=0.0,
        thermal_time_constant_s=0.0,
    ),
}
