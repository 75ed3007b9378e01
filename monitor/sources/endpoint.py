"""The addresses of ZeroMQ streams: checked before the library sees them, as it is silent on most mistakes."""

import ipaddress
import os
import socket
import stat
from dataclasses import dataclass
from typing import Final, Literal

from monitor.errors import InputError

SCHEMES: Final = ("tcp://", "ipc://")
_LONGEST_IPC: Final = 107  # bytes of sun_path without its closing zero, unix(7)


@dataclass(frozen=True, slots=True)
class Endpoint:
    """A checked address.

    Attributes
    ----------
    uri
        As the library takes it.
    transport
        ``tcp`` or ``ipc``.
    host, port
        Of tcp; the host without brackets, the port 0 for one that the system chooses.
    path
        Of ipc.
    ipv6
        The library must be told to use IPv6.
    """

    uri: str
    transport: Literal["tcp", "ipc"]
    host: str = ""
    port: int = 0
    path: str = ""
    ipv6: bool = False

    @property
    def loopback(self) -> bool:
        """Whether only this machine can reach it."""
        if self.transport == "ipc" or self.host in ("localhost", "lo"):
            return True
        try:
            return ipaddress.ip_address(self.host).is_loopback
        except ValueError:
            return False


def is_stream(uri: str) -> bool:
    """Whether ``uri`` names a ZeroMQ stream rather than a file."""
    return uri.startswith(SCHEMES)


def parse_endpoint(uri: str, *, bind: bool) -> Endpoint:
    """Check an address to connect to or to bind; raise InputError with one line that says what is wrong."""
    if "\0" in uri or any(c.isspace() for c in uri):
        raise InputError(f"{uri}: an address has no blanks or control characters; write tcp://HOST:PORT or ipc://PATH")
    if uri.startswith("tcp://"):
        return _tcp(uri, bind)
    if uri.startswith("ipc://"):
        return _ipc(uri, bind)
    raise InputError(f"{uri}: not a stream's address; write tcp://HOST:PORT or ipc://PATH")


def _tcp(uri: str, bind: bool) -> Endpoint:
    host, colon, port_text = uri.removeprefix("tcp://").rpartition(":")
    if not colon or not host:
        raise InputError(f"{uri}: needs a host and a port, such as tcp://127.0.0.1:5555")
    any_port = bind and port_text in ("*", "0")
    port = int(port_text) if port_text.isascii() and port_text.isdecimal() and len(port_text) < 6 else 0
    if not any_port and not 1 <= port <= 65535:
        raise InputError(f"{uri}: the port must be a number from 1 to 65535")
    bare = host.removeprefix("[").removesuffix("]")
    if (":" in bare) != (host != bare):
        raise InputError(f"{uri}: an IPv6 address stands in brackets, such as tcp://[::1]:5555")
    if any(c in bare for c in "/;@?#"):
        raise InputError(f"{uri}: needs a host and a port only, such as tcp://127.0.0.1:5555")
    if bare == "*":
        if not bind:
            raise InputError(f"{uri}: * can be bound, not connected to; name the sender's host")
        return Endpoint(uri, "tcp", bare, port)
    return Endpoint(uri, "tcp", bare, port, ipv6=_needs_ipv6(uri, bare, port, bind))


def _needs_ipv6(uri: str, host: str, port: int, bind: bool) -> bool:
    if ":" in host:
        return True
    if bind and host in (name for _, name in socket.if_nameindex()):
        return False  # the library binds an interface by its name
    try:
        found = socket.getaddrinfo(host, port, type=socket.SOCK_STREAM)
    except (OSError, UnicodeError) as error:
        reason = getattr(error, "strerror", None) or "not a host name"
        raise InputError(f"{uri}: the host {host} cannot be found ({reason}); check its spelling") from error
    return all(family == socket.AF_INET6 for family, *_ in found)


def _ipc(uri: str, bind: bool) -> Endpoint:
    path = uri.removeprefix("ipc://")
    if not path or path == "*":
        raise InputError(f"{uri}: needs a path, such as ipc:///tmp/samples")
    size = len(os.fsencode(path))
    if size > _LONGEST_IPC:
        raise InputError(f"{uri}: the path has {size} bytes, {_LONGEST_IPC} is the most that a socket's name can have")
    endpoint = Endpoint(uri, "ipc", path=path)
    if not bind or path.startswith("@"):  # @: a name that is no file (Linux)
        return endpoint
    folder = os.path.dirname(path) or "."
    if not os.path.isdir(folder):
        raise InputError(f"{uri}: there is no folder {folder}")
    if not os.access(folder, os.W_OK | os.X_OK):
        raise InputError(f"{uri}: no socket can be made in {folder}: permission denied")
    # the library deletes whatever stands at the path before it binds
    try:
        mode = os.lstat(path).st_mode
    except OSError:
        return endpoint
    if not stat.S_ISSOCK(mode):
        raise InputError(f"{uri}: {path} exists and is not a socket; choose another path")
    if _answers(path):
        raise InputError(f"{uri}: the address is in use; end the other program or choose another path")
    return endpoint


def _answers(path: str) -> bool:
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as probe:
        probe.setblocking(False)
        try:
            probe.connect(path)
        except BlockingIOError:
            return True
        except OSError:
            return False
    return True
