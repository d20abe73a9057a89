"""The border to pyserial: which of its exceptions says what to the operator, and what it leaves open."""

import errno
import getpass
import grp
import logging
import os
import re
import socket
import subprocess
import sys
import termios
import threading
import time
from pathlib import Path

import pytest
import serial
import serial.rfc2217
from digitizer_kit import Digitizer, PtyWire, checked_line, plan

from config.errors import DriverError
from daq.clock import SystemClock
from daq.drivers import registry, serial_link
from daq.drivers.registry import driver_class, make_driver, options_problems
from daq.drivers.serial_link import Link, cannot_open, holders

LOG = logging.getLogger("test")


@pytest.fixture
def wire(tmp_path):
    made = PtyWire(tmp_path / "port")
    yield made
    made.close()


def opened(port, **more):
    with pytest.raises(DriverError) as caught:
        Link(port, 115_200, LOG, **more)
    return caught.value


# --- what cannot be opened -------------------------------------------------------------------------------


def test_a_port_that_is_not_there(tmp_path):
    error = opened(str(tmp_path / "nothing"))
    assert (error.kind, error.retryable) == ("gone", True)
    assert error.cause == f"There is no serial port {tmp_path / 'nothing'}."
    assert "erial port" in error.remedy  # those there are, or that there is none
    assert isinstance(error.__cause__, serial.SerialException)


def test_a_port_whose_device_has_gone(wire):
    """The name is left over and leads nowhere."""
    os.close(wire._master)
    os.close(wire._slave)
    wire._master = wire._slave = None
    assert opened(wire.url).kind == "gone"


def test_a_file_is_no_port(tmp_path):
    (tmp_path / "file").write_text("x")
    error = opened(str(tmp_path / "file"))
    assert error.kind == "config"
    assert "is no serial port" in error.cause


def test_no_right_to_open_names_the_command(wire, monkeypatch):
    """Errno 13, as the kernel gives it to users outside the port's group; root is never refused."""

    def denied(*_args):
        raise PermissionError(errno.EACCES, "Permission denied", wire.url)

    monkeypatch.setattr(serial.serialposix.os, "open", denied)
    monkeypatch.setattr(serial_link, "_group_of", lambda port: "dialout")
    error = opened(wire.url)
    user = getpass.getuser()
    assert error.cause == f"The user {user} has no right to open {wire.url}."
    assert f"sudo usermod -aG dialout {user}" in error.remedy
    assert (error.kind, error.retryable) == ("config", True)


def test_the_group_is_that_of_the_port(tmp_path):
    port = tmp_path / "port"
    port.write_text("")
    group = next((g for g in grp.getgrall() if g.gr_gid not in (0, port.stat().st_gid)), None)
    if group is None or os.getuid() != 0:
        pytest.skip("allowed: only root can give a file to any group")
    os.chown(port, -1, group.gr_gid)
    port.chmod(0o660)
    assert serial_link._group_of(str(port)) == group.gr_name
    port.chmod(0o600)
    assert serial_link._group_of(str(port)) is None


HOLD = """
import fcntl, os, sys
fd = os.open(sys.argv[1], os.O_RDWR | os.O_NOCTTY)
if sys.argv[2] == "lock":
    fcntl.flock(fd, fcntl.LOCK_EX)
print("held", flush=True)
sys.stdin.read()
"""


@pytest.fixture
def hold(wire):
    """Another program that has the port open, locked or not."""
    started = []

    def start(how):
        process = subprocess.Popen(
            [sys.executable, "-c", HOLD, wire.url, how], stdin=subprocess.PIPE, stdout=subprocess.PIPE
        )
        started.append(process)
        assert process.stdout.readline() == b"held\n"
        return process.pid

    yield start
    for process in started:
        process.communicate(timeout=5)


def test_a_port_in_use_names_who_has_it(wire, hold):
    pid = hold("lock")
    error = opened(wire.url)
    assert (error.kind, error.retryable) == ("busy", True)
    assert re.fullmatch(rf"{re.escape(wire.url)} is in use by PID {pid} \(python.*\)\.", error.cause)


def test_a_port_that_somebody_else_has_open_without_a_lock_is_warned_of(wire, hold, caplog):
    pid = hold("plain")
    with caplog.at_level(logging.WARNING):
        link = Link(wire.url, 115_200, LOG)
    link.close()
    assert f"is also open in PID {pid} (python" in caplog.text
    assert holders(wire.url).startswith(f"PID {pid} ")


@pytest.mark.parametrize("number", [errno.EBUSY, errno.EAGAIN])
def test_busy_by_number(number):
    error = cannot_open("/dev/nowhere", serial.SerialException(number, "whatever it says"))
    assert (error.kind, error.cause) == ("busy", "/dev/nowhere is in use by another program.")


@pytest.mark.parametrize(
    ("text", "kind"),
    [
        ("could not open port 'COM3': PermissionError(13, 'Access is denied.', None, 5)", "busy"),
        ("could not open port 'COM9': FileNotFoundError(2, 'The system cannot find it.', None, 2)", "gone"),
        ("something new", "gone"),
    ],
)
def test_on_windows_only_the_text_is_left(text, kind):
    """Texts from issue threads of pyserial; not seen on a Windows PC."""
    assert cannot_open("COM3", serial.SerialException(text)).kind == kind


def test_an_unknown_scheme_is_a_mistake_in_the_stand_file():
    error = opened("gopher://nowhere")
    assert (error.kind, error.retryable) == ("config", False)
    assert "socket://" in error.remedy


def test_a_server_that_refuses(tmp_path):
    with socket.create_server(("127.0.0.1", 0)) as server:
        port = server.getsockname()[1]
    error = opened(f"socket://127.0.0.1:{port}")
    assert error.kind == "gone"
    assert "refuses the connection" in error.cause


def test_an_address_that_is_none():
    assert opened("socket://127.0.0.1").kind in ("gone", "config")


def test_a_pattern_that_fits_no_port():
    error = opened("hwgrep://no such digitizer anywhere")
    assert error.kind == "gone"
    assert "no ports found matching" in error.cause


# --- what breaks while it is read ------------------------------------------------------------------------

BREAKS = [
    serial.SerialException("device reports readiness to read but returned no data"),
    OSError(errno.EIO, "Input/output error"),
    termios.error(5, "Input/output error"),
    TypeError("'NoneType' object cannot be interpreted as an integer"),
]


@pytest.mark.parametrize("error", BREAKS, ids=lambda error: type(error).__name__)
@pytest.mark.parametrize("where", ["in_waiting", "read", "timeout"])
def test_whatever_pyserial_raises_is_a_port_that_is_gone(wire, error, where):
    link = Link(wire.url, 115_200, LOG)
    real = link._port

    class Broken:
        timeout = 0.0

        def read(self, n):
            raise error

        @property
        def in_waiting(self):
            if where == "in_waiting":
                raise error
            return 0

        def __setattr__(self, name, value):
            if where == "timeout":
                raise error

    link._port = Broken()
    try:
        with pytest.raises(DriverError) as caught:
            link.receive(0.1)
    finally:
        link._port = real
        link.close()
    assert caught.value.kind == "gone"
    assert caught.value.__cause__ is error


def test_what_cannot_be_sent_is_told(wire):
    link = Link(wire.url, 115_200, LOG)
    wire.unplug()
    try:
        with pytest.raises(DriverError, match="Nothing can be sent"):
            link.send(b"x" * 20_000)
    finally:
        link.close()


def test_a_socket_whose_peer_has_gone_leaves_nothing_open(recwarn):
    """pyserial would leave the socket to the garbage collector, which warns; warnings are errors here."""
    with socket.create_server(("127.0.0.1", 0)) as server:
        link = Link(f"socket://127.0.0.1:{server.getsockname()[1]}", 115_200, LOG)
        peer, _ = server.accept()
        peer.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, b"\1\0\0\0\0\0\0\0")
        peer.close()  # with a reset
        with pytest.raises(DriverError):
            link.receive(0.2)
        left = link._port._socket
        link.close()
        assert left.fileno() == -1


def test_buffers_are_set_after_opening_where_there_are_any(monkeypatch):
    """Windows forgets a buffer set before; Linux has none to set, a pseudo-terminal no latency either."""
    done = []

    class Port:
        def open(self):
            done.append("open")

        def close(self):
            done.append("close")

        def set_buffer_size(self, size):
            done.append(size)

        def set_low_latency_mode(self, on):
            raise ValueError("Failed to update ASYNC_LOW_LATENCY flag")

    monkeypatch.setattr(serial_link.serial, "serial_for_url", lambda *_, **__: Port())
    Link("COM3", 115_200, LOG).close()
    assert done == ["open", 262_144, "close"]


# --- other ways to a digitizer ---------------------------------------------------------------------------


def test_a_loop_needs_no_hardware_at_all():
    """What is sent as greeting comes back: the whole driver on pyserial's own loop."""
    told = checked_line("D,1,1000,3,16,none,loop,1,1,1", 2)
    scans = [checked_line(f"S,{i},{i},{-i},7", 2) for i in range(5)]
    greeting = (b"\n" + told + b"".join(scans)).decode()
    options = {"port": "loop://", "codec": "lines", "channels": 3, "greeting": greeting}
    source = make_driver("serial", options, plan(), clock=SystemClock())
    assert source.open().description == "digitizer loop on loop://"
    got = []
    for _ in range(20):
        block = source.read(0.05)
        got += block.counts.tolist() if block else []
    source.close()
    assert got == [[i, -i, 7] for i in range(5)]


def test_a_trace_holds_every_byte_in_hex_one_file_for_each_opening(send, driver, tmp_path):
    source = driver(send(), trace="bytes.txt")
    for _ in range(2):
        source.open()
        for _ in range(5):
            source.read(0.2)
        source.close()
    for n in (1, 2):
        text = (tmp_path / f"bytes.txt.{n}").read_text()
        assert "RX" in text
        assert "04 01 02" in text.lower()  # the head of a frame of samples, stuffed
    assert not (tmp_path / "bytes.txt").exists()


def test_a_trace_that_cannot_be_written_is_refused(send, driver):
    source = driver(send(), trace="no such folder/bytes.txt")
    with pytest.raises(DriverError, match=r"The trace .* cannot be written"):
        source.open()


class ModemLines(serial.Serial):
    """A pseudo-terminal has no modem lines, and the server asks for them."""

    cts = dsr = ri = cd = property(lambda self: False)

    def _update_dtr_state(self):
        pass

    _update_rts_state = _update_break_state = _update_dtr_state


@pytest.mark.filterwarnings("ignore:set(Daemon|Name)..:DeprecationWarning")  # pyserial 3.5
def test_rfc2217_with_pyserial_s_own_server(wire):
    """A serial server with control of the port, as pyserial's PortManager gives it."""
    digitizer = Digitizer()
    port = ModemLines(str(wire.name), 115_200, timeout=0)
    done = threading.Event()

    class Client:
        def __init__(self, peer):
            self.write = peer.sendall

    def serve(server):
        peer, _ = server.accept()
        with peer:
            peer.settimeout(0.005)
            manager = serial.rfc2217.PortManager(port, Client(peer))
            while not done.is_set():
                wire.write(b"".join(digitizer.frames(1)))
                data = port.read(port.in_waiting or 1)
                peer.sendall(b"".join(manager.escape(data)))
                try:
                    for _ in manager.filter(peer.recv(1024)):
                        pass
                except TimeoutError:
                    pass

    with socket.create_server(("127.0.0.1", 0)) as server:
        thread = threading.Thread(target=serve, args=(server,))
        thread.start()
        url = f"rfc2217://127.0.0.1:{server.getsockname()[1]}"
        source = make_driver("serial", {"port": url, "channels": 3}, plan(), clock=SystemClock())
        try:
            source.open()
            blocks, until_s = 0, time.monotonic() + 5
            while blocks < 3 and time.monotonic() < until_s:
                blocks += source.read(0.2) is not None
        finally:
            done.set()
            thread.join(5)
            source.close()
            port.close()
    assert blocks == 3


def test_the_ports_here_are_listed_without_opening_one(monkeypatch):
    from serial.tools import list_ports, list_ports_common

    port = list_ports_common.ListPortInfo("/dev/ttyUSB0", skip_link_detection=True)
    port.description, port.manufacturer, port.serial_number = "bench digitizer", "works", "0042"
    bare = list_ports_common.ListPortInfo("/dev/ttyS0", skip_link_detection=True)
    monkeypatch.setattr(list_ports, "comports", lambda: [port, bare])
    monkeypatch.setattr(serial, "serial_for_url", None)
    assert serial_link.ports_here() == [
        ("/dev/ttyS0", ""),
        ("/dev/ttyUSB0", "bench digitizer works serial 0042"),
    ]
    assert "Serial ports here: /dev/ttyS0, /dev/ttyUSB0." in opened_remedy()


def test_a_name_that_stays_with_the_device_is_offered(wire, tmp_path, monkeypatch):
    """As udev's by-id does it: a link per device."""
    from serial.tools import list_ports, list_ports_common

    device = os.path.realpath(wire.url)
    found = [list_ports_common.ListPortInfo(device, skip_link_detection=True)]
    monkeypatch.setattr(list_ports, "comports", lambda: found)
    monkeypatch.setattr(serial_link, "BY_ID", tmp_path)
    assert [name for name, _ in serial_link.ports_here()] == [wire.url]
    assert [name for name, _ in driver_class("serial").connected()] == [wire.url]


def opened_remedy():
    return cannot_open("/dev/nowhere", FileNotFoundError(errno.ENOENT, "No such file")).remedy


# --- the stand file --------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("options", "key", "words"),
    [
        ({"channels": 3}, "source.options.port", "missing"),
        ({"port": "", "channels": 3}, "source.options.port", ""),
        ({"port": "COM3"}, "source.options.channels", "missing"),
        ({"port": "COM3", "channels": 0}, "source.options.channels", ""),
        ({"port": "COM3", "channels": 65}, "source.options.channels", ""),
        ({"port": "COM3", "channels": 3, "baud": 0}, "source.options.baud", ""),
        ({"port": "COM3", "channels": 3, "bauds": 9600}, "source.options.bauds", "mean 'baud'"),
        ({"port": "COM3", "channels": 3, "codec": "csv"}, "source.options.codec", ""),
        ({"port": "COM3", "channels": 3, "rate_hz": 0}, "source.options.rate_hz", ""),
        ({"port": "COM3", "channels": 3, "rate_hz": float("inf")}, "source.options.rate_hz", ""),
        ({"port": "hwgrep://(", "channels": 3}, "source.options.port", "pattern"),
        ({"port": "COM3", "channels": 3, "inputs": {"2": {"divider": 0}}}, "source.options.inputs.2", ""),
        ({"port": "COM3", "channels": 3, "inputs": {"2": {"div": 3}}}, "source.options.inputs.2.div", ""),
        ({"port": "socket://a:1", "channels": 3, "trace": "x"}, "source.options.trace", "only"),
    ],
)
def test_one_wrong_option_at_a_time(options, key, words):
    problems = options_problems("serial", options)
    assert len(problems) == 1
    assert problems[0][0].startswith(key)
    assert words in problems[0][1]


def test_without_pyserial_the_hint_names_the_right_package(monkeypatch):
    """The library's import name is another package's name in the registry."""
    for name in [m for m in sys.modules if m.startswith(("daq.drivers.serial_", "serial"))]:
        monkeypatch.delitem(sys.modules, name)
    monkeypatch.setitem(sys.modules, "serial", None)
    with pytest.raises(DriverError) as caught:
        driver_class("serial")
    assert caught.value.kind == "no_driver"
    assert "python -m pip install pyserial" in caught.value.remedy
    assert registry.BUILT_IN["serial"].startswith("daq.drivers.")


def test_nothing_of_pyserial_is_loaded_before_the_driver_is_used():
    code = (
        "import sys; from cli.main import main\n"
        "from daq.drivers import registry; registry.driver_names()\n"
        "try: main(['--help'])\n"
        "except SystemExit: pass\n"
        "print([m for m in ('serial', 'cobs') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "[]"
    assert Path(serial_link.__file__).name == "serial_link.py"
