"""The serial link: how ports are opened, deadlines kept, and every way in which a port fails."""

from __future__ import annotations

import threading
from collections import deque

import pytest
import serial

from drivers.clock import ManualClock, SystemClock
from drivers.errors import DeviceGarbledError, DeviceGoneError, DeviceSilentError, StoppedError
from drivers.link import LinkSettings, TrafficLog, open_link
from drivers.scpi_probe import ScpiProbe
from drivers.transport import register_scheme


class ScriptedPort:
    """Gives out bytes as the script says: each read takes one item; an exception in the script is raised."""

    def __init__(self, script=(), *, stale=b"", write_fails=None):
        self.script, self.stale, self.write_fails = deque(script), stale, write_fails
        self.asked, self.closed = False, False

    @property
    def in_waiting(self):
        if not self.asked:
            return len(self.stale)
        return len(self.script[0]) if self.script and isinstance(self.script[0], bytes) else 0

    def read(self, size=1):
        if not self.asked:
            data, self.stale = self.stale[:size], self.stale[size:]
            return data
        item = self.script.popleft() if self.script else b""
        if isinstance(item, Exception):
            raise item
        self.asked = not item.endswith(b"\n")
        return item

    def write(self, data):
        if self.write_fails is not None:
            raise self.write_fails
        self.asked = True
        return len(data)

    def close(self):
        self.closed = True


@pytest.fixture
def link_to():
    """Opens a link to a scripted port, in real time with short deadlines."""
    links = []

    def opener(port, **kwargs):
        register_scheme("scripted", lambda url, settings: port)
        settings = LinkSettings(reply_deadline_s=0.02)
        links.append(open_link("scripted://port", settings, clock=SystemClock(), device="probe", **kwargs))
        return links[-1]

    yield opener
    for link in links:
        link.close()


def ask(link, stop=None, deadline_s=0.02):
    link.send(b"?\n")
    return link.receive(link.line_s() + deadline_s, stop)


def test_a_line_that_comes_in_pieces_is_one_frame(link_to):
    assert ask(link_to(ScriptedPort([b"12", b"", b".5\r", b"\nnext\n"]))) == b"12.5"


def test_frames_that_came_together_are_given_one_by_one(link_to):
    link = link_to(ScriptedPort([b"one\ntwo\n"]))
    assert ask(link) == b"one"
    assert link.receive(link.line_s() + 0.02) == b"two"


def test_what_came_before_the_question_is_thrown_away(link_to):
    port = ScriptedPort([b"new\n"], stale=b"old\nhalf")
    assert ask(link_to(port)) == b"new"


def test_nothing_at_all_is_silence(link_to):
    with pytest.raises(
        DeviceSilentError, match=r"^probe on scripted://port: no answer within 0\.02 s\. Check that it is"
    ):
        ask(link_to(ScriptedPort()))


@pytest.mark.parametrize("script", [[b"half a li"], [b"x" * 5000 + b"\n"]], ids=["no end", "too long"])
def test_a_line_without_end_is_garbled(link_to, script):
    with pytest.raises(DeviceGarbledError, match="end"):
        ask(link_to(ScriptedPort(script)))


def test_noise_that_never_ends_is_garbled_at_the_deadline(link_to):
    with pytest.raises(DeviceGarbledError):
        ask(link_to(ScriptedPort([b"~"] * 1_000_000)))


def test_empty_lines_that_never_end_are_garbled_at_the_deadline(link_to):
    class Babbling(ScriptedPort):
        in_waiting = 1

        def read(self, size=1):
            return b"\n"

    with pytest.raises(DeviceGarbledError):
        ScpiProbe(link_to(Babbling()), SystemClock()).read()


def test_a_stop_cuts_the_waiting_but_not_an_answer_that_is_there(link_to):
    stop = threading.Event()
    stop.set()
    assert ask(link_to(ScriptedPort([b"there\n"])), stop, 60.0) == b"there"
    with pytest.raises(StoppedError):
        ask(link_to(ScriptedPort()), stop, 60.0)


TermiosError = type("error", (Exception,), {"__module__": "termios"})  # stands in for it where there is no termios


@pytest.mark.parametrize(
    "failure",
    [
        serial.SerialException("device reports readiness to read but returned no data"),
        OSError(5, "Input/output error"),
        TermiosError(5, "Input/output error"),
        serial.PortNotOpenError(),
    ],
    ids=["pyserial", "system", "termios", "closed"],
)
def test_every_way_a_port_fails_is_a_device_gone(link_to, failure):
    with pytest.raises(DeviceGoneError, match=r"the port failed .*Check the cable") as caught:
        ask(link_to(ScriptedPort([failure])))
    assert caught.value.__cause__ is failure
    with pytest.raises(DeviceGoneError):
        ask(link_to(ScriptedPort(write_fails=failure)))


def test_a_port_that_takes_no_bytes_is_silent(link_to):
    with pytest.raises(DeviceSilentError, match="takes no bytes"):
        ask(link_to(ScriptedPort(write_fails=serial.SerialTimeoutException("Write timeout"))))


def test_our_own_mistakes_are_not_taken_for_failures_of_the_port(link_to):
    with pytest.raises(ZeroDivisionError):
        ask(link_to(ScriptedPort([ZeroDivisionError()])))


def test_a_closed_link_says_so_and_can_be_opened_again(link_to):
    port = ScriptedPort([b"back\n"])
    link = link_to(port)
    link.close()
    link.close()
    assert port.closed
    with pytest.raises(DeviceGoneError, match="not open"):
        link.send(b"?\n")
    link.open()
    assert ask(link) == b"back"


def test_the_traffic_log_keeps_the_last_messages(link_to):
    log = TrafficLog(entries=3)
    link = link_to(ScriptedPort([b"one\n", b"two\n"]), traffic=log)
    ask(link)
    ask(link)
    assert [entry[1:] for entry in log.entries] == [("received", b"one\n"), ("sent", b"?\n"), ("received", b"two\n")]


def test_lines_are_set_before_the_port_is_opened(monkeypatch):
    """Many boards restart when DTR changes, so both lines must be right from the first instant."""
    steps = []

    class Port:
        dtr = property(fset=lambda self, value: steps.append(("dtr", value)))
        rts = property(fset=lambda self, value: steps.append(("rts", value)))

        def open(self):
            steps.append("open")

        def close(self):
            steps.append("close")

    def made(url, **settings):
        steps.append((url, settings))
        return Port()

    monkeypatch.setattr(serial, "serial_for_url", made)
    settings = LinkSettings(baud_rate=9600, data_bits=7, parity="even", stop_bits=2, dtr=True, rts=False)
    open_link("/dev/ttyUSB0", settings, clock=SystemClock()).close()
    (url, given), *rest = steps
    assert url == "/dev/ttyUSB0"
    assert rest == [("dtr", True), ("rts", False), "open", "close"]
    assert given["do_not_open"]
    assert given["exclusive"]
    assert (given["baudrate"], given["bytesize"], given["parity"], given["stopbits"]) == (9600, 7, "E", 2)
    assert given["timeout"] > 0
    assert given["write_timeout"] > 0


def test_a_manual_clock_has_no_real_ports():
    with pytest.raises(DeviceGoneError, match="no virtual port"):
        open_link("/dev/ttyUSB0", clock=ManualClock(), device="pump")
