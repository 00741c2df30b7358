"""Rig files: read, check, and find the models they name."""

from __future__ import annotations

import ipaddress
from dataclasses import dataclass
from pathlib import Path

from .errors import FileError
from .files import parse, read_toml
from .library import LoadedModel, load_model
from .specs import RigSpec


@dataclass(frozen=True)
class LoadedRig:
    """A rig file and what it says."""

    path: Path
    text: str
    spec: RigSpec

    @property
    def folder(self) -> Path:
        """The folder that relative paths in the file start from."""
        return self.path.parent


def load_rig(path: str | Path) -> LoadedRig:
    """Read a rig file.

    Raises
    ------
    FileError
        Naming every fault: the file, the key, what was found and what is allowed.
    """
    path = Path(path)
    data = read_toml(path)
    spec = parse(RigSpec, data, path)
    _check_exposure(spec, path)
    return LoadedRig(path.resolve(), path.read_text(encoding="utf-8"), spec)


def load_rig_models(rig: LoadedRig) -> list[LoadedModel]:
    """The model of each cell, in the order of the cells.

    Raises
    ------
    FileError
        Naming the cell and what is wrong with its model.
    """
    models = []
    for cell in rig.spec.cell:
        try:
            models.append(load_model(cell.model, relative_to=rig.folder))
        except FileError as fault:
            raise FileError(f"{rig.path}: cell {cell.name!r}: {fault}") from fault
    return models


def is_local(endpoint: str) -> bool:
    """Whether only this machine can reach an endpoint."""
    if endpoint.startswith("ipc://"):
        return True
    host = endpoint.removeprefix("tcp://").rpartition(":")[0].strip("[]")
    try:
        return host == "localhost" or ipaddress.ip_address(host).is_loopback
    except ValueError:
        return False  # a name, or an interface: whoever it resolves to


def _check_exposure(spec: RigSpec, path: Path) -> None:
    """Refuse a socket that others could reach without keys or a list of peers."""
    if spec.network.peers or spec.network.curve_secret:
        return
    named = {
        "loop": spec.loop.endpoint,
        "control": spec.control.endpoint,
        "feed": spec.feed.endpoint,
    }
    open_ones = [f"{k}.endpoint = {e}" for k, e in named.items() if not is_local(e)]
    if open_ones:
        raise FileError(
            f"{path}: {', '.join(open_ones)}: other machines could connect. Bind 127.0.0.1 or "
            "ipc, or give [network] CURVE keys (curve_secret, curve_clients) or, for a private "
            "link, the addresses of the allowed peers"
        )
