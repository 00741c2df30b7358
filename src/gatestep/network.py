"""Who may connect: CURVE keys, or a list of peers on a private link."""

from __future__ import annotations

from pathlib import Path

import zmq

from .config import LoadedRig, is_local
from .errors import FileError

LOOPBACK = ("127.0.0.1", "::1")
_KEY_SIZE = 40


class Gatekeeper:
    """Guards a server's sockets as the rig file's ``[network]`` says.

    Sockets that only this machine can reach are left alone unless CURVE is asked
    for, which then holds for every socket.

    Raises
    ------
    FileError
        When a certificate is missing or holds no secret key.
    """

    def __init__(self, context: zmq.Context[zmq.Socket[bytes]], rig: LoadedRig) -> None:
        self._rig, self._network = rig, rig.spec.network
        self._authenticator = None
        if not self._network.peers and not self._network.curve_secret:
            return
        from zmq.auth.thread import ThreadAuthenticator

        if self._network.curve_secret:
            # Before the authenticator starts: its sockets would outlive a fault here.
            self._public, self._secret = self._load_keys()
            clients = self._path(self._network.curve_clients)
        self._authenticator = ThreadAuthenticator(context)
        self._authenticator.start()
        if self._network.peers:
            self._authenticator.allow(*LOOPBACK, *self._network.peers)
        else:
            self._authenticator.configure_curve(domain="*", location=str(clients))

    def guard(self, socket: zmq.Socket[bytes], endpoint: str) -> None:
        """Set a socket up before it is bound."""
        if self._authenticator is None:
            return
        if self._network.curve_secret:
            socket.curve_publickey, socket.curve_secretkey = self._public, self._secret
            socket.curve_server = True
        elif not is_local(endpoint):
            socket.setsockopt_string(zmq.ZAP_DOMAIN, "gatestep")

    def loop_peers(self, endpoint: str) -> tuple[str, ...]:
        """Addresses that may connect to the loop socket in the direct lane; empty for any."""
        if is_local(endpoint) or not self._network.peers:
            return ()
        return (*LOOPBACK, *self._network.peers)

    def close(self) -> None:
        """Stop the authenticator."""
        if self._authenticator is not None:
            self._authenticator.stop()

    def _path(self, name: str | None) -> Path:
        path = self._rig.folder / str(name)
        if not path.exists():
            raise FileError(f"{self._rig.path}: [network] names {path}, which does not exist")
        return path

    def _load_keys(self) -> tuple[bytes, bytes]:
        import zmq.auth

        path = self._path(self._network.curve_secret)
        try:
            public, secret = zmq.auth.load_certificate(path)
        except (OSError, ValueError) as fault:
            raise FileError(f"{path}: {fault}") from fault
        if secret is None:
            raise FileError(f"{path}: holds no secret key; give the server's secret certificate")
        if not len(public) == len(secret) == _KEY_SIZE:
            raise FileError(f"{path}: its keys are not the {_KEY_SIZE} characters of CURVE keys")
        return public, secret
