"""The way orders go to the loop: each with a number, and the record told what it means."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Protocol

import zmq

from .choosing import Choice
from .errors import ControlError
from .kernel import records
from .library import LoadedModel
from .orders import ORDER, Order
from .shelf import Ready
from .tables import Tables, as_in_file
from .wire import NIL


class Record(Protocol):
    """What the server needs of a journal."""

    def add_model(self, model: LoadedModel, tables: Tables) -> int:
        """Take a model in, once; its number in the record."""

    def expect(self, number: int, kind: str, **fields: Any) -> None:
        """Know what an order means before the loop tells its outcome."""

    def take(self, block: bytes) -> None:
        """Take in a block of the loop's log."""

    def note(self, kind: str, **fields: Any) -> None:
        """Take in an event of a control thread."""

    def status(self) -> dict[str, Any]:
        """State, path, sizes."""

    def close(self) -> dict[str, Any]:
        """Write what waits, and end."""


class NoRecord:
    """The record of a server that keeps none."""

    def add_model(self, model: LoadedModel, tables: Tables) -> int:
        """Nothing is taken in."""
        return 0

    def expect(self, number: int, kind: str, **fields: Any) -> None:
        """Nothing is expected."""

    def take(self, block: bytes) -> None:
        """Nothing is taken in."""

    def note(self, kind: str, **fields: Any) -> None:
        """Nothing is noted."""

    def status(self) -> dict[str, Any]:
        """Off."""
        return {"state": "off", "path": None, "reason": None}

    def close(self) -> dict[str, Any]:
        """Off."""
        return self.status()


class OrderLine:
    """Orders to the loop of one server.

    Parameters
    ----------
    socket : PUSH socket
        The loop pulls from its other end.
    record : Record
    """

    def __init__(self, socket: zmq.Socket[bytes], record: Record) -> None:
        self._socket, self._record = socket, record
        self._sent = 0

    def send(
        self,
        kind: Order,
        cell: int = 0,
        index: int = 0,
        value: float = 0.0,
        choice: Choice | None = None,
        at: int = int(NIL),
        ramp: tuple[int, bool] = (0, False),
        **meaning: Any,
    ) -> int:
        """Send an order; returns its number.

        Parameters
        ----------
        kind, cell, index, value
            As in :data:`gatestep.orders.ORDER`.
        choice : Choice, optional
            How the cell anticipates from then on.
        at : int
            The sample before whose step it acts; at once when left out.
        ramp : (int, bool)
            Of a ``SWAP``: over how many ticks gmax changes, and whether from 0 nS.
        **meaning
            What the record is to say of it beyond that; ``event`` in it renames the event.

        Raises
        ------
        ControlError
            When the loop takes no orders.
        """
        self._sent += 1
        order = records(ORDER)
        order[0].number, order[0].kind, order[0].at = self._sent, kind, at
        order[0].cell, order[0].index, order[0].value = cell, index, value
        if kind == Order.SWAP:
            order[0].ramp_ticks, order[0].from_zero = ramp
            meaning["ramp_ticks"], meaning["from_zero"] = ramp
        if choice is not None:
            order[0].on, order[0].substeps = choice.on, choice.substeps
            order[0].alpha, order[0].beta = choice.alpha, choice.beta
            meaning["anticipation"] = settings_of(choice)
        self._record.expect(self._sent, meaning.pop("event", kind.name.lower()), **meaning)
        try:
            self._socket.send(order.tobytes(), zmq.DONTWAIT)
        except zmq.Again:
            raise ControlError(
                "the loop takes no orders; stop the server with SIGKILL if it does not answer"
            ) from None
        return self._sent


def settings_of(choice: Choice) -> dict[str, Any]:
    """How a cell anticipates, as an order and the record have it."""
    return {
        "on": bool(choice.on),
        "substeps": int(choice.substeps),
        "alpha": float(choice.alpha),
        "beta": float(choice.beta),
    }


def model_meaning(ready: Ready, record: Record) -> Mapping[str, Any]:
    """What the record says of a model that comes into force; the model itself goes there too."""
    count = len(ready.tables.spec.conductance)
    return {
        "model": record.add_model(ready.model, as_in_file(ready.tables)),
        "name": ready.model.name,
        "gmax_ns": ready.tables.bank["gmax_ns"].reshape(-1)[:count].tolist(),
        "reversal_mv": ready.tables.bank["reversal_mv"].reshape(-1)[:count].tolist(),
    }
