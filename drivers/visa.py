"""The one place that knows VISA: a session over pyvisa and whatever library stands behind it.

VISA errors, and the bare socket errors that pyvisa-py lets through, become ours here and nowhere else; so do
seconds become milliseconds. On sockets and serial lines a reply ends with a terminator, on other interfaces
with the bus's own END. Blocks are read with the termination character switched off, since their
bytes may contain it: with it on, pyvisa-py cuts a 40 kB block at every 256th byte on average and copies the
rest each time.
"""

import contextlib
import functools
import select
import socket
from typing import Any, NoReturn

import pyvisa
from pyvisa import constants, rname
from pyvisa.resources import MessageBasedResource

from drivers.dialect import TERMINATORS, Dialect, Serial
from drivers.errors import Disconnected, Garbled, NoReply

_LOST = {
    constants.StatusCode.error_connection_lost,
    constants.StatusCode.error_resource_not_found,
    constants.StatusCode.error_invalid_object,
    constants.StatusCode.error_io,
}
# What one read may bring: more than a socket's buffer holds at a time, less than what is slow to allocate.
_CHUNK = 1 << 16


@functools.cache
def _manager(library: str) -> pyvisa.ResourceManager:
    return pyvisa.ResourceManager(library)


def open_session(resource: str, dialect: Dialect, timeout: float, *, library: str = "@py") -> "VisaSession":
    """Connects to an instrument.

    Args:
        resource: VISA resource name, such as `TCPIP::192.0.2.10::5025::SOCKET`.
        dialect: for its terminators, its serial settings and its role, which errors name.
        timeout: how long a reply is waited for [s].
        library: which VISA library, as pyvisa names them; "@py" is pyvisa-py.

    Raises:
        Disconnected: nobody answers there, or the name is none.
    """
    return VisaSession(
        resource,
        role=dialect.role,
        timeout=timeout,
        terminator=TERMINATORS[dialect.terminator.reply],
        serial=dialect.serial,
        library=library,
    )


class VisaSession:
    """A `Session` over VISA. See `open_session`."""

    def __init__(
        self,
        resource: str,
        *,
        role: str,
        timeout: float,
        terminator: bytes = b"\n",
        serial: Serial | None = None,
        library: str = "@py",
    ) -> None:
        self.role = role
        self.resource = resource
        self.timeout = timeout
        self._terminator = terminator
        self._serial = serial
        self._library = library
        self._sent = b""
        self._arrived = bytearray()
        self._has_begun = False  # some of the reply to what was sent has come
        self._visa: MessageBasedResource | None = None
        self._connect()

    # ---- Session

    def write(self, message: bytes) -> None:
        visa = self._opened()
        self._sent = message
        self._has_begun = False
        try:
            visa.write_raw(message)
        except (pyvisa.Error, OSError) as why:
            self._fail(why)

    def read_line(self) -> bytes:
        while (end := self._arrived.find(self._terminator)) < 0:
            if self._socket is not None:
                self._take_what_is_there()
            else:
                self._take_message()
                if not self._is_stream and not self._arrived.endswith(self._terminator):
                    end = len(self._arrived)  # the bus said that the message is over
                    break
        return self._cut(end, skip=len(self._terminator))

    def read_exactly(self, count: int) -> bytes:
        while len(self._arrived) < count:
            if self._socket is not None:
                self._take_what_is_there()
            else:
                self._take(count - len(self._arrived))
        return self._cut(count)

    def reopen(self) -> None:
        self.close()
        self._connect()
        if not self._is_stream:
            # A device clear also empties the instrument's own buffers. A fresh stream has nothing to clear.
            try:
                self._opened().clear()
            except (pyvisa.Error, OSError) as why:
                self._fail(why)

    def close(self) -> None:
        visa, self._visa = self._visa, None
        if visa is not None:
            # It is being let go of: a connection that is already gone is just as closed.
            with contextlib.suppress(pyvisa.Error, OSError):
                visa.close()

    # ---- connecting

    def _connect(self) -> None:
        timeout_ms = max(1, round(self.timeout * 1000))
        try:
            name = rname.ResourceName.from_string(self.resource)
            if isinstance(name, rname.TCPIPSocket):
                # pyvisa-py forgets an open socket when this fails in its hands.
                socket.getaddrinfo(name.host_address, name.port)
            visa = _manager(self._library).open_resource(self.resource, open_timeout=timeout_ms)
        except Exception as why:  # what pyvisa-py raises when a connection fails is a bare Exception
            raise self._unreachable(str(why)) from why
        if not isinstance(visa, MessageBasedResource):
            visa.close()
            raise self._unreachable("that is no instrument that takes messages")
        self._visa = visa
        self._arrived.clear()
        kind = visa.interface_type
        is_socket = visa.resource_class == "SOCKET"
        self._is_stream = is_socket or kind == constants.InterfaceType.asrl
        self._stops_at_terminator: bool | None = None
        self._socket = _socket_below(visa) if is_socket else None
        try:
            visa.timeout = timeout_ms
            if self._socket is not None:
                # pyvisa-py knows the VISA attribute for this and refuses to set it.
                self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            elif is_socket:
                visa.set_visa_attribute(constants.ResourceAttribute.tcpip_nodelay, True)
            if kind == constants.InterfaceType.asrl and self._serial is not None:
                _set_serial(visa, self._serial)
            if self._is_stream:
                visa.set_visa_attribute(constants.ResourceAttribute.termchar, self._terminator[-1])
            if self._socket is not None:
                self._socket.getpeername()  # pyvisa-py takes a refused connection for an open one
        except (pyvisa.Error, OSError) as why:
            self.close()
            raise self._unreachable(str(why)) from why

    def _opened(self) -> MessageBasedResource:
        if self._visa is None:
            raise self._unreachable("the session is closed")
        return self._visa

    # ---- taking bytes

    def _take_what_is_there(self) -> None:
        """Waits for bytes on a socket that can be seen, and takes them all.

        Asked for more than there is, pyvisa-py waits for the rest, and takes the end of a stream for "nothing yet": it spins
        until its timeout. Asked for what is there it answers at once, in one read, a closed connection is found when it
        happens, and silence can be told from half a reply.
        """
        assert self._socket is not None
        ready, _, _ = select.select([self._socket], [], [], self.timeout)
        if not ready:
            raise self._half() if self._has_begun else self._no_reply()
        try:
            there = len(self._socket.recv(_CHUNK, socket.MSG_PEEK))
        except OSError as why:
            raise self._lost(str(why)) from why
        if not there:
            raise self._lost("the instrument closed it")
        self._take(there)

    def _take(self, count: int) -> None:
        self._stop_at_terminator(False)
        try:
            self._arrived += self._opened().read_bytes(count, chunk_size=min(count, _CHUNK))
            self._has_begun = True
        except (pyvisa.Error, OSError) as why:
            self._fail(why)

    def _take_message(self) -> None:
        """One message where the bus marks its end; up to the terminator's last byte on a stream."""
        self._stop_at_terminator(self._is_stream)
        try:
            self._arrived += self._opened().read_raw(_CHUNK)
            self._has_begun = True
        except (pyvisa.Error, OSError) as why:
            self._fail(why)

    def _cut(self, count: int, skip: int = 0) -> bytes:
        taken = bytes(self._arrived[:count])
        del self._arrived[: count + skip]
        return taken

    def _stop_at_terminator(self, stop: bool) -> None:
        if self._is_stream and self._stops_at_terminator is not stop:
            self._opened().set_visa_attribute(constants.ResourceAttribute.termchar_enabled, stop)
            self._stops_at_terminator = stop

    # ---- what went wrong

    def _fail(self, why: Exception) -> NoReturn:
        code = why.error_code if isinstance(why, pyvisa.errors.VisaIOError) else None
        if code == constants.StatusCode.error_timeout:
            raise (self._half() if self._has_begun else self._no_reply()) from why
        if isinstance(why, OSError | pyvisa.errors.InvalidSession) or code in _LOST:
            raise self._lost(str(why)) from why
        raise Garbled(
            self.role, self.resource, f"{self._spoken()}: {why}; check the cable and the dialect"
        ) from why

    def _spoken(self) -> str:
        text = self._sent.decode("ascii", "replace").rstrip("\r\n")
        return repr(text if len(text) <= 120 else text[:117] + "...")

    def _no_reply(self) -> NoReply:
        return NoReply(
            self.role,
            self.resource,
            f"no reply to {self._spoken()} in {self.timeout:.3g} s; check that it is on, the cable, "
            "the terminator in the dialect and the bench's 'timeout', then probe the bench",
        )

    def _half(self) -> Garbled:
        return Garbled(
            self.role,
            self.resource,
            f"the reply to {self._spoken()} broke off, and nothing followed for {self.timeout:.3g} s; "
            "check the cable and the terminator in the dialect",
        )

    def _lost(self, what: str) -> Disconnected:
        after = f" after {self._spoken()}" if self._sent else ""
        return Disconnected(
            self.role,
            self.resource,
            f"connection lost{after}: {what}; check the cable, and that no other program holds it",
        )

    def _unreachable(self, what: str) -> Disconnected:
        return Disconnected(
            self.role,
            self.resource,
            f"no connection: {what}; check that it is on, the cable, and the bench's 'resource'",
        )


def _socket_below(visa: MessageBasedResource) -> socket.socket | None:
    """The socket under a pyvisa-py session; None with any other library, which tells by itself."""
    below: Any = getattr(visa.visalib, "sessions", {}).get(visa.session)
    found = getattr(below, "interface", None)
    if not isinstance(found, socket.socket):
        return None
    below.max_recv_size = _CHUNK  # pyvisa-py asks for 4096 bytes at a time unless told otherwise
    return found


def _set_serial(visa: MessageBasedResource, serial: Serial) -> None:
    attribute = constants.ResourceAttribute
    parity = {"none": constants.Parity.none, "even": constants.Parity.even, "odd": constants.Parity.odd}
    visa.set_visa_attribute(attribute.asrl_baud_rate, serial.baud)
    visa.set_visa_attribute(attribute.asrl_data_bits, serial.data_bits)
    visa.set_visa_attribute(attribute.asrl_parity, parity[serial.parity])
    stop = constants.StopBits.one if serial.stop_bits == 1 else constants.StopBits.two
    visa.set_visa_attribute(attribute.asrl_stop_bits, stop)
