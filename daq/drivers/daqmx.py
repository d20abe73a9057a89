"""Devices behind the DAQmx driver, on this PC or in another box through its device server.

One analog task holds the once-per-rev signal and all probes: one clock, one start, one filter delay. The
library's own threads and callbacks are not used; every call is made by whoever calls this driver.
"""

from __future__ import annotations

import logging
from collections import deque
from datetime import UTC, datetime
from typing import TYPE_CHECKING, ClassVar
from uuid import uuid4

from config.errors import DriverError
from daq.drivers.base import Chunk, Driver, DriverOptions, EndOfSource, SourceInfo
from daq.drivers.ni.counts import FULL_SCALE_COUNTS, Scale
from daq.drivers.ni.options import DaqmxOptions, Input, devices_of, inputs_of, settling_s
from daq.drivers.ni.trouble import Where, border, is_foreign
from daq.drivers.ni.watch import Watch

if TYPE_CHECKING:
    from daq.drivers.ni.session import Session
    from daq.drivers.ni.task import Acquisition

RATE_TOLERANCE = 0.01
"""A device's own rate further than this from the one asked for is refused, unless ``coerce``."""
SILENCE_S = 2.0
"""No sample for so long: the source is lost."""
SHORT_READS = 3
"""So many blocks in a row that come short: the source is lost."""
OVERRUNS, OVERRUNS_WITHIN_S = 3, 600.0
"""So many losses within so long: starting again does not help."""
HALF_BACK_S = 2.0
"""A device that is listed again but does not answer for so long will not before this process restarts."""


class DaqmxDriver(Driver[DaqmxOptions]):
    """Samples from ``open`` on. A read may take longer than asked while a device is late: up to a second.

    After a fault the task is built anew in a new segment; samples are never joined across it.
    """

    name = "daqmx"
    Options: ClassVar[type[DriverOptions]] = DaqmxOptions

    def _prepare(self) -> None:
        self._session: Session | None = None
        self._running: Acquisition | None = None
        self._overruns: deque[float] = deque(maxlen=OVERRUNS)
        self._devices: tuple[str, ...] = ()
        self._worked = self._vanished = self._left_behind = False
        self._name = f"revmark-{uuid4().hex[:12]}"
        self._half_back_s: float | None = None
        self._came_s = self.clock.monotonic()

    @classmethod
    def _connected(cls) -> list[tuple[str, str]]:
        """Devices of this PC; what hangs on a server is that server's to tell."""
        with border(lambda: Where("The device"), logging.getLogger(f"revmark.drivers.{cls.name}")):
            from daq.drivers.ni.identity import listed
            from daq.drivers.ni.session import Session

            return listed(Session(None, ""))

    # --- source --------------------------------------------------------------------------------------

    def _open(self) -> SourceInfo:
        inputs = inputs_of(self.options, self.channels)
        self._devices = devices_of(inputs)
        self._came_s = self.clock.monotonic()
        try:
            with border(self._where, self.log):
                found = self._find_devices()
                info = self._start(inputs, found)
        except DriverError as error:
            if self._worked and error.kind == "config":
                error.retryable = True  # it has worked: another device in its place, or one half plugged in
            raise
        self._worked, self._vanished = True, False
        return info

    def _find_devices(self) -> str:
        """Connect, and what stands behind the device names, in words."""
        from daq.drivers.ni.identity import identify, require_present
        from daq.drivers.ni.session import Session

        self._session = Session(self.options.server, self._name)
        if self._left_behind and self.options.server is not None:
            self._session.clear_left_behind()
        try:
            require_present(self._session, self._devices, self.options)
        except DriverError:
            self._vanished = self._worked
            self._half_back_s = None
            raise
        try:
            found = identify(self._session, self._devices, self.options, self.log)
        except Exception as error:
            self._give_up_half_back(error)
            raise
        self._half_back_s = None
        return found

    def _start(self, inputs: tuple[Input, ...], found: str) -> SourceInfo:
        from daq.drivers.ni.task import Acquisition

        assert self._session is not None, "the session is opened first"
        asked_hz = self.options.rate_hz
        running = Acquisition(self._session, inputs, asked_hz, self.options.block_s, self.log)
        self._running = running
        self._check_rate(running.rate_hz)
        self._scale = Scale(running.ranges_v, [item.divider for item in inputs])
        powered = any(item.excitation_a for item in inputs)
        self._watch_stream = Watch(
            running.stream, running.rate_hz, running.buffer, powered=powered, log=self.log
        )
        self._settling = round(settling_s(self.options, inputs) * running.rate_hz)
        self._fetched = self._lost = self._shorts = 0
        running.start()
        self._came_s = self.clock.monotonic()
        self.log.info(
            "%s: asked for %g samples/s, runs at %.10g, buffer %d",
            found,
            asked_hz,
            running.rate_hz,
            running.buffer,
        )
        return SourceInfo(
            rate_hz=running.rate_hz,
            dtype="int32",
            volts_per_count=self._scale.volts_per_count,
            full_scale_counts=FULL_SCALE_COUNTS,
            origin="live",
            description=f"daqmx, {found}, {len(inputs)} inputs",
            skew_s=running.skew_s,
        )

    def _read(self, timeout_s: float) -> Chunk | EndOfSource | None:
        running = self._running
        assert running is not None, "the base reads an open source only"
        try:
            with border(self._where, self.log):
                if timeout_s < self.options.block_s and running.waiting() < running.frames:
                    self._pause(timeout_s)
                    return None
                came = running.read()
                self._fetched += came
                self._watch_stream.look(self.clock.monotonic(), self._fetched)
        except DriverError as error:
            raise self._counted(error) from error.__cause__
        return self._taken(running, came)

    def _close(self) -> None:
        running, self._running = self._running, None
        session, self._session = self._session, None
        try:
            if running is not None:
                self._left_behind = not running.close()
        finally:
            if session is not None:
                session.close()

    # --- what came -----------------------------------------------------------------------------------

    def _taken(self, running: Acquisition, came: int) -> Chunk | None:
        if came < running.frames:
            self._short(came, running.frames)
            return None
        self._came_s = self.clock.monotonic()
        self._shorts = 0
        if self._settling > 0:
            self._settling -= came
            return None
        lost, self._lost = self._lost, 0
        return Chunk(self._scale.counts(running.volts), lost_before=lost)

    def _short(self, came: int, wanted: int) -> None:
        """A block that is not whole is a loss, counted exactly; none at all is a silence."""
        silent_s = self.clock.monotonic() - self._came_s
        if came:
            self._lost += came
            self._shorts += 1
        if self._shorts >= SHORT_READS or silent_s > SILENCE_S:
            raise DriverError(
                f"No whole block came from {self._where().link} for {silent_s:.1f} s: {came} of {wanted} "
                "samples.",
                "Its clock or trigger may be missing, or its link is stuck. It is started again by itself.",
                kind="timeout",
            )

    def _counted(self, error: DriverError) -> DriverError:
        """After a few overruns it is no use to start again."""
        if error.kind != "lost_data":
            return error
        now_s = self.clock.monotonic()
        self._overruns.append(now_s)
        if len(self._overruns) < OVERRUNS or now_s - self._overruns[0] > OVERRUNS_WITHIN_S:
            return error
        return DriverError(
            f"{error.cause} That was loss number {OVERRUNS} within {OVERRUNS_WITHIN_S / 60:g} minutes.",
            "Lower rate_hz, end other programs or use a faster link; then start revmark serve again.",
            kind="lost_data",
            retryable=False,
        )

    # --- what is found -------------------------------------------------------------------------------

    def _check_rate(self, true_hz: float) -> None:
        asked_hz = self.options.rate_hz
        if abs(true_hz - asked_hz) <= RATE_TOLERANCE * asked_hz or self.options.coerce:
            return
        raise DriverError(
            f"Asked for {asked_hz:g} samples a second, {self._where().devices} runs at {true_hz:.10g}.",
            f"Write rate_hz = {true_hz:.10g}, or coerce = true to take whatever rate the device has.",
            kind="config",
            retryable=False,
        )

    def _give_up_half_back(self, error: Exception) -> None:
        """Plugged in again, the library may know a device no more until the process restarts."""
        if not (self._vanished and is_foreign(error)) or self.options.server is not None:
            return
        now_s = self.clock.monotonic()
        self._half_back_s = now_s if self._half_back_s is None else self._half_back_s
        if now_s - self._half_back_s >= HALF_BACK_S:
            raise DriverError(
                f"{self._where().devices} is plugged in again, but does not answer this process.",
                "revmark serve ends so that the service manager starts it anew; without one, start it again.",
                kind="gone",
                retryable=False,
            ) from error

    def _where(self) -> Where:
        at = datetime.fromtimestamp(self.clock.now_us() / 1e6, UTC).astimezone()
        return Where(
            " and ".join(self._devices),
            self.options.server,
            at.strftime("%H:%M:%S"),
            self.clock.monotonic() - self._came_s,
        )
