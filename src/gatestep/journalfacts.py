"""What a journal states once: what ran, on which machine, with which rig file and models.

Both directions of a model stand here, so that what is written is what is read.
"""

from __future__ import annotations

import datetime
import hashlib
import platform
import sys
import time
from dataclasses import asdict, dataclass
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

import numpy as np

from . import __version__
from .config import LoadedRig
from .errors import GatestepError, JournalError
from .files import parse, parse_toml
from .journalbytes import FORMAT, pack_model, unpack_table
from .kernel import BANK
from .library import LoadedModel
from .specs import ModelSpec
from .tables import Break, GateReport, Tables, build_tables

LAYOUT = hashlib.sha256(repr(BANK.descr).encode()).hexdigest()
"""Names this version's layout of a bank."""

_PACKAGES = ("numpy", "numba", "pyzmq")


def header_of(rig: LoadedRig, host: Any = None) -> dict[str, Any]:
    """The header of a journal that starts now, save for the layout of its samples.

    Parameters
    ----------
    rig : LoadedRig
    host : optional
        What was set up on the host for the loop, as plain data.
    """
    return {
        "format": FORMAT,
        "program": {"name": "gatestep", "version": __version__},
        "versions": _versions(),
        "machine": {
            "architecture": platform.machine(),
            "system": f"{platform.system()} {platform.release()}",
            "processor": _processor(),
        },
        "host": host,
        "start": start_now(),
        "rig": {
            "path": str(rig.path),
            "text": rig.text,
            "sha256": hashlib.sha256(rig.text.encode("utf-8")).hexdigest(),
        },
        "rig_spec": rig.spec.model_dump(mode="json"),
        "cells": [cell.name for cell in rig.spec.cell],
    }


def start_now() -> dict[str, Any]:
    """The present moment by both clocks."""
    now = datetime.datetime.now().astimezone()
    return {"time": now.isoformat(), "monotonic_nsec": time.monotonic_ns()}


def _versions() -> dict[str, str]:
    import zmq

    found = {"python": platform.python_version(), "libzmq": zmq.zmq_version()}
    for package in _PACKAGES:
        try:
            found[package] = version(package)
        except PackageNotFoundError:
            found[package] = "unknown"
    return found


def _processor() -> str:
    """The processor's name for people."""
    if sys.platform == "linux":
        try:
            lines = Path("/proc/cpuinfo").read_text("utf-8", "replace").splitlines()
        except OSError:
            lines = []
        for line in lines:
            key, _, value = line.partition(":")
            if key.strip() in {"model name", "Model"}:
                return value.strip()
    return platform.processor() or "unknown"


def model_payload(number: int, model: LoadedModel, tables: Tables, with_table: bool) -> bytes:
    """The payload of a model's MODEL block."""
    bank = tables.bank
    rows = int(bank["rows"])
    info = {
        "id": number,
        "name": model.name,
        "path": str(model.path),
        "text": model.text,
        "sha256": model.sha256,
        "table_sha256": tables.sha256,
        "rows": rows,
        "columns": tables.table.size // rows,
        "step_mv": tables.step_mv,
        "conductances": [c.name for c in tables.spec.conductance],
        "gates": list(tables.gates),
        "reports": [asdict(report) for report in tables.reports],
        "bank": {name: _trimmed(bank[name]) for name in BANK.names or ()},
        "layout": LAYOUT,
    }
    return pack_model(info, tables.table.astype("<f8").tobytes() if with_table else None)


def _trimmed(value: Any) -> Any:
    """A bank's field as plain data, without the zeros that it ends with."""
    return np.trim_zeros(value, "b").tolist() if np.ndim(value) else value.tolist()


@dataclass(frozen=True)
class JournalModel:
    """A model as a journal has it.

    ``conductances`` names them in order; ``gmax_ns`` and ``reversal_mv`` are those of the
    model's file.
    """

    id: int
    name: str
    path: str
    text: str
    sha256: str
    table_sha256: str
    info: dict[str, Any]
    packed: bytes

    @property
    def conductances(self) -> tuple[str, ...]:
        """Names of the conductances, in the order of the bank."""
        return tuple(self.info["conductances"])

    @property
    def gmax_ns(self) -> tuple[float, ...]:
        """Each conductance's maximum, nS, as in the model's file."""
        return self._of_bank("gmax_ns")

    @property
    def reversal_mv(self) -> tuple[float, ...]:
        """Each conductance's reversal, mV, as in the model's file."""
        return self._of_bank("reversal_mv")

    def spec(self) -> ModelSpec:
        """What the model file says.

        Raises
        ------
        JournalError
            If this version cannot read it.
        """
        try:
            return parse(ModelSpec, parse_toml(self.text.encode("utf-8"), self._path), self._path)
        except GatestepError as fault:
            raise JournalError(f"model {self.name} in the journal: {fault}") from None

    def loaded(self) -> LoadedModel:
        """The model file, as :func:`gatestep.library.load_model` would give it."""
        return LoadedModel(self.name, self._path, self.text, self.sha256, self.spec())

    def tables(self) -> Tables:
        """The tables that the loop followed; built from the text where none are recorded.

        Raises
        ------
        JournalError
            If they are not those that the recorded hash names.
        """
        try:
            found = self._recorded() if self.packed else build_tables(self.spec())
        except (GatestepError, LookupError, TypeError, ValueError) as fault:
            raise JournalError(f"model {self.name} in the journal: {fault}") from None
        if self.info["layout"] == LAYOUT and found.sha256 != self.table_sha256:
            raise JournalError(
                f"model {self.name} in the journal: its tables have the hash {found.sha256[:12]} "
                f"and those that ran had {self.table_sha256[:12]}; another version of gatestep "
                "may have built them"
            )
        return found

    @property
    def _path(self) -> Path:
        return Path(self.path)

    def _of_bank(self, field: str) -> tuple[float, ...]:
        """One number a conductance; zeros at the end are not written."""
        values, count = self.info["bank"][field], len(self.conductances)
        return tuple(float(v) for v in (*values, *[0.0] * count)[:count])

    def _recorded(self) -> Tables:
        info = self.info
        table = unpack_table(self.packed, max(int(info["rows"]) * int(info["columns"]), 0))
        table = table.astype(np.float64)
        table.flags.writeable = False
        bank = np.zeros(1, BANK)[0]
        for name, value in info["bank"].items():
            if isinstance(value, list):
                bank[name][: len(value)] = value
            else:
                bank[name] = value
        digest = hashlib.sha256(repr(BANK.descr).encode() + bank.tobytes())
        digest.update(table.data)
        sha256 = digest.hexdigest() if info["layout"] == LAYOUT else self.table_sha256
        reports = tuple(_report(report) for report in info["reports"])
        names = tuple(info["gates"])
        return Tables(self.spec(), names, reports, bank, table, float(info["step_mv"]), sha256)


def _report(data: dict[str, Any]) -> GateReport:
    breaks = tuple(Break(**found) for found in data["breaks"])
    return GateReport(**{**data, "breaks": breaks})


def model_of(info: dict[str, Any], packed: bytes) -> JournalModel:
    """A model from what its MODEL block says.

    Raises
    ------
    JournalError
        If it lacks what every model has.
    """
    texts = ("name", "path", "text", "sha256", "table_sha256", "layout")
    lists = ("conductances", "gates", "reports")
    try:
        whole = (
            all(isinstance(info[key], str) for key in texts)
            and all(isinstance(info[key], list) for key in lists)
            and isinstance(info["bank"]["gmax_ns"], list)
            and isinstance(info["bank"]["reversal_mv"], list)
        )
        number = int(info["id"])
    except (LookupError, TypeError, ValueError):
        whole = False
    if not whole:
        raise JournalError("a MODEL block lacks what describes a model")
    named = {key: info[key] for key in texts if key != "layout"}
    return JournalModel(id=number, info=info, packed=packed, **named)
