"""Ports by lasting names, found again after a drop-out, and why one cannot be opened."""

from __future__ import annotations

import errno
import os
import sys

import pytest

from drivers import portfailure
from drivers.clock import SystemClock
from drivers.errors import DeviceGoneError
from drivers.link import open_link
from drivers.portfailure import is_port_failure, owner_of, why_not_opened
from drivers.ports import PortFinder, is_address, named_ports
from drivers.serialport import SerialPort
from simulators.port import VirtualPorts


def port(path, serial=None):
    return SerialPort(path=path, description="USB serial", usb_serial=serial, usb_vendor_product="1209:0001")


def test_ports_have_the_name_that_outlives_a_drop_out(tmp_path):
    by_id = tmp_path / "by-id"
    by_id.mkdir()
    for name in ("ttyUSB0", "ttyUSB1", "ttyUSB2"):
        (tmp_path / name).touch()
    (by_id / "usb-adapter-port0").symlink_to(tmp_path / "ttyUSB1")
    listed = [port(str(tmp_path / "ttyUSB0"), "OL-7"), port(str(tmp_path / "ttyUSB1")), port(str(tmp_path / "ttyUSB2"))]
    found = named_ports(listed, by_id)
    assert [one.stable for one in found] == ["OL-7", str(by_id / "usb-adapter-port0"), str(tmp_path / "ttyUSB2")]


def test_two_adapters_of_one_serial_number_are_named_by_path(tmp_path):
    found = named_ports([port("/dev/ttyUSB0", "0001"), port("/dev/ttyUSB1", "0001")], tmp_path)
    assert [one.stable for one in found] == ["/dev/ttyUSB0", "/dev/ttyUSB1"]


@pytest.mark.parametrize("name", ["/dev/ttyUSB0", "COM3", "socket://host:1", r"\\.\COM12", "memory://x"])
def test_addresses(name):
    assert is_address(name)


@pytest.mark.parametrize("name", ["OL-7", "A50285BI", "0001"])
def test_serial_numbers(name):
    assert not is_address(name)


def test_a_serial_number_is_found_wherever_it_is():
    listed = [port("/dev/ttyUSB0", "OL-7"), port("/dev/ttyUSB1", "OL-9")]
    finder = PortFinder("OL-9", lambda: listed)
    assert finder() == "/dev/ttyUSB1"
    listed[1] = port("/dev/ttyUSB5", "OL-9")
    assert finder() == "/dev/ttyUSB5"
    listed.pop()
    with pytest.raises(OSError, match="no port with USB serial number OL-9"):
        finder()
    listed += [port("/dev/ttyUSB6", "OL-9"), port("/dev/ttyUSB7", "OL-9")]
    with pytest.raises(OSError, match="2 ports with USB serial number OL-9"):
        finder()


def test_a_path_is_found_again_by_the_serial_number_it_had():
    listed = [port("/dev/ttyUSB0", "OL-7")]
    finder = PortFinder("/dev/ttyUSB0", lambda: listed)
    assert finder() == "/dev/ttyUSB0"
    listed[0] = port("/dev/ttyUSB3", "OL-7")
    assert finder() == "/dev/ttyUSB3"
    # another adapter has the old name now: it is not taken for the device
    listed.insert(0, port("/dev/ttyUSB0", "OL-9"))
    assert finder() == "/dev/ttyUSB3"
    listed.clear()
    assert finder() == "/dev/ttyUSB0"  # the system says why it cannot be opened


def test_an_address_is_where_it_was():
    assert PortFinder("socket://127.0.0.1:9", list)() == "socket://127.0.0.1:9"


# why not


def wrapped(number):
    """As pyserial says it: an error of its own with the system's inside."""
    inner = OSError(number, os.strerror(number))
    try:
        raise OSError(f"could not open port: {inner}") from inner
    except OSError as failure:
        return failure


@pytest.mark.skipif(sys.platform == "win32", reason="groups of devices")
def test_a_refused_permission_names_the_group(monkeypatch):
    class Group:
        gr_name = "uucp"

    monkeypatch.setattr("grp.getgrgid", lambda number: Group)
    what, remedy = why_not_opened("/dev/null", wrapped(errno.EACCES))
    assert what == "this account may not use it (permission denied)"
    assert remedy == "Join the group that may use it (sudo usermod -aG uucp $USER) and log in again"
    Group.gr_name = "root"
    assert "udev rule" in why_not_opened("/dev/null", wrapped(errno.EACCES))[1]


def test_a_port_in_use_names_who_uses_it(monkeypatch):
    monkeypatch.setattr(portfailure, "owner_of", lambda path: (4711, "terminal"))
    what, remedy = why_not_opened("/dev/ttyUSB0", OSError(errno.EBUSY, "busy"))
    assert what == "cannot be opened: in use by terminal (process 4711)"
    assert remedy == "Close it there"
    monkeypatch.setattr(portfailure, "owner_of", lambda path: (12, "ModemManager"))
    assert "ID_MM_DEVICE_IGNORE" in why_not_opened("/dev/ttyUSB0", OSError(errno.EBUSY, "busy"))[1]
    monkeypatch.setattr(portfailure, "owner_of", lambda path: None)
    what, _ = why_not_opened("/dev/ttyUSB0", OSError("Could not exclusively lock port /dev/ttyUSB0"))
    assert "another program" in what


def test_the_calling_end_is_named_on_macos(monkeypatch):
    monkeypatch.setattr(sys, "platform", "darwin")
    assert "/dev/cu.usbserial-7" in why_not_opened("/dev/tty.usbserial-7", wrapped(errno.ENOENT))[1]


def test_a_missing_port_points_at_the_list():
    what, remedy = why_not_opened("/dev/ttyUSB0", wrapped(errno.ENOENT))
    assert what == "cannot be opened (no such file or directory)"
    assert "halfdrop bench ports" in remedy


def test_another_program_is_named_only_where_the_port_is_in_use(monkeypatch):
    monkeypatch.setattr(portfailure, "owner_of", lambda path: (4711, "terminal"))
    for number in (errno.ENOENT, errno.ENXIO, errno.ENOTTY, errno.EIO, errno.EACCES):
        told = " ".join(why_not_opened("/dev/null", wrapped(number)))
        assert "terminal" not in told, number
    assert "terminal" in why_not_opened("/dev/null", wrapped(errno.EAGAIN))[0]


@pytest.mark.skipif(sys.platform == "win32", reason="paths of devices")
@pytest.mark.parametrize("what", ["/dev/null", "file", "folder"])
def test_what_is_no_serial_port_is_called_so(tmp_path, what):
    path = tmp_path if what == "folder" else tmp_path / "file" if what == "file" else what
    if what == "file":
        path.touch()
    with pytest.raises(DeviceGoneError, match=r"is no serial port.*bench ports"):
        open_link(str(path), clock=SystemClock(), device="pump")


@pytest.mark.parametrize(
    ("url", "words"),
    [
        ("socket://127.0.0.1", "no port number.*socket://HOST:NUMBER"),
        ("socket://127.0.0.1:1", "nobody listens there.*bench serve"),
        ("apple://x", "no address that can be opened"),
    ],
)
def test_an_address_that_cannot_be_opened_says_what_to_write(url, words):
    with pytest.raises(DeviceGoneError, match=words):
        open_link(url, clock=SystemClock(), device="pump")


def test_the_second_user_of_a_served_port_is_told_of_the_first():
    with VirtualPorts(SystemClock()) as ports:
        port = ports.add("one-user", Answers(), "tcp")
        first = open_link(port.url, clock=SystemClock(), device="pump")
        first.send(b"hello\n")
        assert first.receive(first.line_s() + 2.0) == b"yes"
        second = open_link(port.url, clock=SystemClock(), device="pump")
        with pytest.raises(DeviceGoneError, match=r"hung up.*has one user"):
            second.receive(second.line_s() + 2.0)
        first.send(b"hello\n")
        assert first.receive(first.line_s() + 2.0) == b"yes"
        first.close()
        second.close()


class Answers:
    """Says yes to whatever comes."""

    def feed(self, data, at_s):
        return b"yes\n"

    def advance(self, at_s):
        return b""

    def next_event_s(self):
        return float("inf")


def test_a_url_is_told_as_it_failed():
    assert why_not_opened("socket://host:1", OSError("refused"))[0] == "cannot be opened (refused)"


@pytest.mark.skipif(not os.path.isdir("/proc/self/fd"), reason="needs /proc")  # noqa: PTH112
def test_the_owner_of_a_device_is_found(tmp_path):
    import subprocess

    path = tmp_path / "device"
    path.touch()
    assert owner_of(str(path)) is None
    with path.open() as held:
        child = subprocess.Popen([sys.executable, "-c", "import sys; sys.stdin.read()"], stdin=subprocess.PIPE,
                                 pass_fds=[held.fileno()])  # fmt: skip
    try:
        owner = owner_of(str(path))
        assert owner is not None
        assert owner[0] == child.pid
        assert owner[1]
    finally:
        child.communicate(b"")
    assert owner_of(str(tmp_path / "none")) is None


def test_every_way_in_which_a_port_fails_is_known():
    class Error(Exception):
        pass

    Error.__module__ = "termios"
    for failure in (OSError(errno.EIO, "x"), ValueError("no such URL"), Error("x"), PermissionError("x")):
        assert is_port_failure(failure)
    assert not is_port_failure(KeyError("x"))
