"""One continuous analog task: built, started, read block by block, and always cleared.

Imports the library, so it is imported only when a source is opened.
"""

from __future__ import annotations

import logging
import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from nidaqmx.constants import (
    AccelSensitivityUnits,
    AccelUnits,
    AcquisitionType,
    Coupling,
    ExcitationSource,
    OverwriteMode,
    TerminalConfiguration,
    VoltageUnits,
)
from nidaqmx.errors import DaqError, DaqReadError
from nidaqmx.stream_readers import AnalogMultiChannelReader
from numpy.typing import NDArray

from daq.drivers.ni.options import Input, devices_of
from daq.drivers.ni.session import Session
from daq.drivers.ni.trouble import NOT_YET, is_foreign

BUFFER_S = 10.0
"""What the device side keeps when the reader is late: more than any hiccup of this process."""
READ_LIMIT_S = 1.0
"""How long the library waits for a block; short enough that nobody ever has to interrupt it."""
MV_PER_G = 1000.0
"""Of the library's accelerometer channels, so that its "g" is the volt at the input, whatever is wired."""

TERMINALS = {
    "differential": TerminalConfiguration.DIFF,
    "pseudo-differential": TerminalConfiguration.PSEUDO_DIFF,
    "referenced single-ended": TerminalConfiguration.RSE,
    "non-referenced single-ended": TerminalConfiguration.NRSE,
}
COUPLINGS = {"dc": Coupling.DC, "ac": Coupling.AC}


class Acquisition:
    """A running task. What it tells is settled before it starts."""

    def __init__(
        self, session: Session, inputs: Sequence[Input], rate_hz: float, block_s: float, log: logging.Logger
    ) -> None:
        self._log = log
        self._task = session.task()
        try:
            self._build(session, tuple(inputs), rate_hz, block_s)
        except BaseException:
            self.close()
            raise

    def _build(self, session: Session, inputs: tuple[Input, ...], rate_hz: float, block_s: float) -> None:
        task = self._task
        channels = [self._add(session, item) for item in inputs]
        task.timing.cfg_samp_clk_timing(
            rate_hz, sample_mode=AcquisitionType.CONTINUOUS, samps_per_chan=math.ceil(BUFFER_S * rate_hz)
        )
        self.rate_hz = float(task.timing.samp_clk_rate)
        self.frames = max(1, round(block_s * self.rate_hz))
        self.buffer = math.ceil(BUFFER_S * self.rate_hz / self.frames) * self.frames
        task.in_stream.input_buf_size = self.buffer
        task.in_stream.overwrite = OverwriteMode.DO_NOT_OVERWRITE_UNREAD_SAMPLES
        self.ranges_v = tuple(
            self._range_v(channel, item) for channel, item in zip(channels, inputs, strict=True)
        )
        self.skew_s = self._skews(session, inputs)
        self.stream = task.in_stream
        self._reader = AnalogMultiChannelReader(task.in_stream)
        self.volts: NDArray[np.float64] = np.zeros((len(inputs), self.frames))

    def start(self) -> None:
        self._task.start()

    def waiting(self) -> int:
        """Samples a channel that can be fetched now."""
        return int(self._task.in_stream.avail_samp_per_chan)

    def read(self) -> int:
        """Fetch the next block into ``volts``; how many samples a channel came.

        Fewer than ``frames``: the device was late. What came is fetched and its place in ``volts`` is not
        by row (the library packs it to the front), so it is lost.
        """
        try:
            came = int(self._reader.read_many_sample(self.volts, self.frames, timeout=READ_LIMIT_S))
        except DaqReadError as error:
            if error.error_code != NOT_YET:
                raise
            return int(error.samps_per_chan_read)
        self._reader.verify_array_shape = False  # the shape was right once; looking costs a call each time
        return came

    def close(self) -> bool:
        """Stop and clear, whatever state the task is in: a stop repeats the error that ended the task.

        False when it could not be cleared, so that a server may hold it still.
        """
        try:
            self._task.stop()
        except Exception as error:
            self._ignore(error)
        try:
            self._task.close()
        except Exception as error:
            self._ignore(error)
            return False
        return True

    def _ignore(self, error: Exception) -> None:
        if not is_foreign(error):
            raise error
        self._log.debug("while the task was cleared: %s", error)

    # --- building ------------------------------------------------------------------------------------

    def _add(self, session: Session, item: Input) -> Any:
        """A channel in volts. Kinds that scale by themselves bring a default sensitivity, so none is used."""
        terminal = TERMINALS[item.terminal]
        if not item.excitation_a:
            channel = self._task.ai_channels.add_ai_voltage_chan(
                item.physical,
                terminal_config=terminal,
                min_val=-item.range_v,
                max_val=item.range_v,
                units=VoltageUnits.VOLTS,
            )
        else:
            channel = self._task.ai_channels.add_ai_accel_chan(
                item.physical,
                terminal_config=terminal,
                min_val=-item.range_v,
                max_val=item.range_v,
                units=AccelUnits.G,
                sensitivity=MV_PER_G,
                sensitivity_units=AccelSensitivityUnits.MILLIVOLTS_PER_G,
                current_excit_source=ExcitationSource.INTERNAL,
                current_excit_val=item.excitation_a,
            )
        if self._has_choice(session, item):
            channel.ai_coupling = COUPLINGS[item.coupling]
        return channel

    def _has_choice(self, session: Session, item: Input) -> bool:
        """False when the device couples only as wanted, so that there is nothing to set."""
        try:
            offered = session.device(item.device).ai_couplings
        except DaqError as error:
            self._log.debug("%s does not tell its couplings: %s", item.device, error)
            return True
        return set(offered) != {COUPLINGS[item.coupling]}

    def _range_v(self, channel: Any, item: Input) -> float:
        """The range the device chose, which is the one asked for or a wider one."""
        try:
            return max(abs(float(channel.ai_rng_low)), abs(float(channel.ai_rng_high)))
        except DaqError as error:
            self._log.info(
                "%s does not tell its range, %g V is taken: %s", item.physical, item.range_v, error
            )
            return item.range_v

    def _skews(self, session: Session, inputs: tuple[Input, ...]) -> tuple[float, ...]:
        """How much later than the first column each is converted; empty = all at once.

        A multiplexed device converts its inputs in the order of the task, one per tick of its own clock.
        """
        devices = devices_of(inputs)
        step_s = {name: self._step_s(session, name, alone=len(devices) == 1) for name in devices}
        met = dict.fromkeys(devices, 0)
        skews = []
        for item in inputs:
            skews.append(round(met[item.device] * step_s[item.device], 12))
            met[item.device] += 1
        return tuple(skews) if any(skews) else ()

    def _step_s(self, session: Session, device: str, *, alone: bool) -> float:
        if session.device(device).ai_simultaneous_sampling_supported:
            return 0.0
        timing = self._task.timing if alone else self._task.timing[device]
        return 1.0 / float(timing.ai_conv_rate)
