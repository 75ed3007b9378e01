"""Keys for encrypted streams (CurveZMQ): made, read, and put on a socket.

Who binds is the server and shows its public key to be known by; who connects is the client. Each has a pair of files,
``NAME.key`` (public, to be given to the other side) and ``NAME.key_secret`` (stays where it is).
"""

import os
import tempfile
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from monitor.errors import InputError

if TYPE_CHECKING:
    import zmq
    from zmq.auth.thread import ThreadAuthenticator


@dataclass(frozen=True, slots=True)
class Curve:
    """The key files of one side.

    Attributes
    ----------
    secret
        Own ``NAME.key_secret``.
    server
        The server's ``NAME.key``; needed to connect.
    clients
        Folder of the ``NAME.key`` files of the clients that may connect; where None, a server lets in whoever knows its
        public key.
    """

    secret: Path
    server: Path | None = None
    clients: Path | None = None


def make_keys(folder: Path, name: str) -> tuple[Path, Path]:
    """Make ``NAME.key`` and ``NAME.key_secret`` (readable by the owner only) in ``folder``; return both paths.

    Raises InputError for an unusable name or folder, and where a file of either name exists: keys are never replaced.
    """
    import zmq.auth

    if not name or name.startswith(".") or not all(c.isalnum() or c in "-_." for c in name) or len(name) > 100:
        raise InputError(f"'{name}': a key's name is made of letters, digits, - _ and . only")
    public, secret = folder / f"{name}.key", folder / f"{name}.key_secret"
    for path in (public, secret):
        if os.path.lexists(path):
            raise InputError(f"{path}: exists already; choose another name, or remove it if nobody uses it")
    try:
        folder.mkdir(parents=True, exist_ok=True)
        # a folder for the owner alone, so that the secret is at no moment readable by others
        with tempfile.TemporaryDirectory(dir=folder, prefix=".new-") as private:
            made_public, made_secret = (Path(path) for path in zmq.auth.create_certificates(private, name))
            made_secret.chmod(0o600)
            # a link, unlike a move, never replaces a file that came to be meanwhile
            os.link(made_secret, secret)
            os.link(made_public, public)
    except OSError as error:
        raise InputError(f"{folder}: no keys can be made there: {error.strerror or error}") from error
    return public, secret


def read_keys(path: Path, *, secret: bool) -> tuple[bytes, bytes | None]:
    """Public and secret key (Z85) of a key file; raise InputError if it has not what is asked for."""
    import zmq.auth

    try:
        public, private = zmq.auth.load_certificate(path)
    except OSError as error:
        raise InputError(f"{path}: the key file cannot be read: {error.strerror or error}") from error
    except (ValueError, UnicodeError) as error:
        raise InputError(f"{path}: is not a key file; make one with make_keys") from error
    if secret and private is None:
        raise InputError(f"{path}: holds no secret key; name the file that ends in .key_secret")
    if len(public) != 40 or (private is not None and len(private) != 40):
        raise InputError(f"{path}: its key is damaged; a key has 40 characters")
    return public, private


def secure(
    context: "zmq.Context[zmq.Socket[bytes]]", sock: "zmq.Socket[bytes]", curve: Curve, *, bind: bool
) -> "ThreadAuthenticator | None":
    """Put the keys on a socket that is not bound or connected yet; raise InputError.

    Returns
    -------
    The running authenticator of ``context`` where ``bind``: to be stopped after the socket is closed.
    """
    public, private = read_keys(curve.secret, secret=True)
    if not bind:
        if curve.server is None:
            raise InputError(f"{curve.secret}: connecting with keys needs the server's public key file too")
        sock.curve_serverkey = read_keys(curve.server, secret=False)[0]
        sock.curve_publickey, sock.curve_secretkey = public, private
        return None
    import zmq.auth
    from zmq.auth.thread import ThreadAuthenticator

    location = zmq.auth.CURVE_ALLOW_ANY
    if curve.clients is not None:
        if not curve.clients.is_dir():
            raise InputError(f"{curve.clients}: is no folder; it should hold the clients' .key files")
        if not any(curve.clients.glob("*.key")):
            raise InputError(f"{curve.clients}: holds no .key file, so that nobody could connect")
        for path in curve.clients.glob("*.key"):
            read_keys(path, secret=False)
        location = str(curve.clients)
    authenticator = ThreadAuthenticator(context)
    authenticator.start()
    try:
        authenticator.configure_curve(domain="*", location=location)
        sock.curve_server = True
        sock.curve_publickey, sock.curve_secretkey = public, private
    except BaseException:
        authenticator.stop()
        raise
    return authenticator
