"""When a reading counts as steady: limits as plain numbers, and the presets a stand file starts from.

Sources: REUSE.md (a) of the project's research where a value is not marked; [J] = this project's judgement.
Every limit is a setting and is stored with the run.
"""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any


@dataclass(frozen=True, slots=True)
class SteadinessLimits:
    """What a window of samples must keep within to become a reading; defaults are preset ``standard``."""

    window_s: float = 60.0
    """Shortest averaging window."""
    min_revolutions: int = 100
    """Fewest whole turns in the window; the longer of the two rules."""
    blocks: int = 8
    """Equal parts of the window whose vectors give drift, scatter and standard error; 6 or more."""
    speed_band_pct: float = 0.5
    """Largest distance of the mean speed from the speed wanted."""
    speed_sd_pct: float = 0.1
    """Largest standard deviation of the speed within the window, of its mean."""
    speed_drift_pct_per_min: float = 0.1
    """Largest slope of the speed over the window, either sign."""
    change_pct: float = 5.0
    """Largest change of a 1X vector between successive windows, of its amplitude, where the floor below
    and three standard errors are both smaller."""
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
    min_signal_to_noise: float = 3.0
    """1X amplitude over the noise; below it a reading is flagged, not refused."""

    def change_floor(self, kind: str) -> float:
        """The floor of ``displacement`` (um), ``velocity`` (mm/s) or ``acceleration`` (m/s2), 0-peak."""
        return {
            "displacement": self.change_floor_um_pk,
            "velocity": self.change_floor_mm_s_pk,
            "acceleration": self.change_floor_m_s2_pk,
        }[kind]

    def to_dict(self) -> dict[str, Any]:
        return asdict(self)


PRESETS: dict[str, SteadinessLimits] = {
    "standard": SteadinessLimits(),
    # For small rotors and short dwells [J]: no thermal settling is looked for. 2 %/min is 0.1 % over its 3 s.
    "small": SteadinessLimits(
        window_s=3.0, min_revolutions=10, speed_drift_pct_per_min=2.0, lookback_s=0.0, hold_s=0.0
    ),
}
