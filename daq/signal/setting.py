"""All that a measurement hangs on beside its counts, so that it can be done again from what is stored."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

from numpy.typing import NDArray

from daq.signal.measure import measure
from daq.signal.shapes import NOWHERE, ChannelParams, Measurement, PulseParams, Surroundings

ORDERS = (1, 2, 3)


@dataclass(frozen=True, slots=True)
class Setting:
    """Scales, trigger, orders and surroundings of one window of counts."""

    pulse: PulseParams
    channels: tuple[ChannelParams, ...]
    rate_hz: float
    orders: tuple[int, ...] = ORDERS
    min_signal_to_noise: float = 3.0
    surroundings: Surroundings = NOWHERE
    breaks: tuple[int, ...] = ()

    def measured(self, counts: NDArray[Any]) -> Measurement:
        """``daq.signal.measure.measure`` of (frames, 1 + probes) counts with this setting."""
        return measure(
            counts,
            self.pulse,
            self.channels,
            self.rate_hz,
            orders=self.orders,
            min_signal_to_noise=self.min_signal_to_noise,
            surroundings=self.surroundings,
            breaks=self.breaks,
        )

    def to_json(self) -> dict[str, Any]:
        """Plain JSON; floats survive it to the last bit."""
        return asdict(self)

    @classmethod
    def from_json(cls, told: Mapping[str, Any]) -> Setting:
        """What ``to_json`` gave, also after its lists came back from JSON. Raises TypeError or KeyError for
        keys this version does not know."""
        pulse, near = dict(told["pulse"]), dict(told["surroundings"])
        return cls(
            **{k: v for k, v in told.items() if k not in _PARTS},
            pulse=PulseParams(
                **{
                    **pulse,
                    "full_scale_counts": _pair(pulse["full_scale_counts"]),
                    "spacing_deg": tuple(pulse.get("spacing_deg", ())),
                }
            ),
            channels=tuple(
                ChannelParams(**{**c, "full_scale_counts": _pair(c["full_scale_counts"])})
                for c in told["channels"]
            ),
            orders=tuple(told["orders"]),
            surroundings=Surroundings(near["mains_hz"], tuple(near["neighbours_hz"])),
            breaks=tuple(told["breaks"]),
        )


_PARTS = frozenset({"pulse", "channels", "orders", "surroundings", "breaks"})


def _pair(values: Any) -> tuple[int, int]:
    low, high = values
    return int(low), int(high)
