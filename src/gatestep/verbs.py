"""The server's side of the control socket: what each verb does.

A verb either answers at once or waits: for the loop to confirm an order, or for a
model's tables to be built. Nothing here touches a socket, so each verb can be tested
by itself; the server carries requests in and answers out.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from concurrent.futures import Executor, Future
from dataclasses import dataclass
from typing import Any

from .config import LoadedRig
from .errors import ControlError, GatestepError
from .library import LoadedModel, load_model
from .loop import Order, Outcome
from .shelf import Ready, Shelf
from .specs import MAX_GMAX_NS, MAX_REVERSAL_MV
from .tables import Tables, build_tables
from .watch import LoopEvent, Watch

Answer = dict[str, Any]
SendOrder = Callable[[Order, int, int, float], int]

_PARAMETERS = {
    "gmax_ns": (Order.SET_GMAX, MAX_GMAX_NS),
    "reversal_mv": (Order.SET_REVERSAL, MAX_REVERSAL_MV),
}
_MAX_TEXT = 1000


@dataclass(frozen=True)
class Confirmed:
    """An answer that waits until the loop has carried out an order."""

    number: int
    finish: Callable[[LoopEvent], Answer]


@dataclass(frozen=True)
class Built:
    """An answer that waits until tables are built."""

    future: Future[tuple[LoadedModel, Tables]]
    finish: Callable[[Future[tuple[LoadedModel, Tables]]], Answer]


Waiting = Confirmed | Built


def build_model(name: str, rig: LoadedRig) -> tuple[LoadedModel, Tables]:
    """Read a model and build its tables; ``name`` as in a rig file."""
    model = load_model(name, relative_to=rig.folder)
    return model, build_tables(model.spec)


class Verbs:
    """The verbs of one server.

    Parameters
    ----------
    rig : LoadedRig
    shelf : Shelf
    watch : Watch
    send_order : callable
        Sends an order (kind, cell, index, value) to the loop; returns its number.
    builder : Executor
        Where tables are built, off every other thread.
    facts : dict
        Constant entries of the status: version, lane, endpoints.
    """

    def __init__(
        self,
        rig: LoadedRig,
        shelf: Shelf,
        watch: Watch,
        send_order: SendOrder,
        builder: Executor,
        facts: Answer,
    ) -> None:
        self._rig, self._shelf, self._watch = rig, shelf, watch
        self._send_order, self._builder, self._facts = send_order, builder, facts
        self._names = [cell.name for cell in rig.spec.cell]
        self._busy: set[int] = set()
        self._parameters: list[dict[str, float]] = [{} for _ in self._names]
        self._verbs: dict[str, tuple[Callable[..., Answer | Waiting], set[str]]] = {
            "status": (self.status, set()),
            "arm": (self.arm, {"force"}),
            "disarm": (self.disarm, set()),
            "reset": (self.reset, set()),
            "load": (self.load, {"model", "cell"}),
            "swap": (self.swap, {"cell"}),
            "set": (self.set, {"key", "value", "cell"}),
            "mark": (self.mark, {"text"}),
            "stop": (self.stop, set()),
        }

    def handle(self, request: Any) -> Answer | Waiting:
        """Carry out a request; errors come back as answers, never as exceptions."""
        try:
            return self._dispatch(request)
        except GatestepError as fault:
            return refusal(str(fault))

    def _dispatch(self, request: Any) -> Answer | Waiting:
        if not isinstance(request, dict) or not isinstance(request.get("verb"), str):
            raise ControlError('request: not a map with a verb; send {"verb": "status"}')
        arguments = {k: v for k, v in request.items() if k != "verb"}
        name = request["verb"]
        if name not in self._verbs:
            raise ControlError(f"verb {name!r} is not known; known are {', '.join(self._verbs)}")
        verb, allowed = self._verbs[name]
        unknown = sorted(str(k) for k in arguments if k not in allowed)
        if unknown:
            known = ", ".join(sorted(allowed)) or "no arguments"
            raise ControlError(f"{name}: {', '.join(unknown)} not known; it takes {known}")
        return verb(**arguments)

    def status(self) -> Answer:
        """State, counters, percentiles and cells."""
        return {"ok": True, **self._watch.summary(), **self._facts, "cells": self._cells()}

    def arm(self, force: bool = False) -> Waiting:
        """Let the model's current flow."""
        if not isinstance(force, bool):
            raise ControlError(f"arm: force is {force!r}; it is true or false")
        return self._ordered(Order.ARM, after=lambda e: self._armed(e, force))

    def disarm(self) -> Waiting:
        """Go to 0 pA."""
        return self._ordered(Order.DISARM)

    def reset(self) -> Waiting:
        """Clear a trip."""
        return self._ordered(Order.RESET)

    def stop(self) -> Waiting:
        """Stop the server, with 0 pA as its last answer."""
        return self._ordered(Order.STOP)

    def mark(self, text: str | None = None) -> Waiting:
        """Put a note at the present sample."""
        if not isinstance(text, str) or not 0 < len(text) <= _MAX_TEXT:
            raise ControlError(f"mark: text is missing or not 1 to {_MAX_TEXT} characters long")
        return self._ordered(Order.MARK, after=lambda _: {"text": text})

    def load(self, model: str | None = None, cell: str | None = None) -> Waiting:
        """Prepare a model in the cell's spare bank."""
        k = self._cell("load", cell)
        if not isinstance(model, str) or not model:
            raise ControlError("load: model is missing; give a shipped model's name or a file")
        self._claim("load", k)
        try:
            future = self._builder.submit(build_model, model, self._rig)
        except BaseException:
            self._busy.discard(k)
            raise
        return Built(future, lambda built: self._loaded(k, built))

    def swap(self, cell: str | None = None) -> Waiting:
        """Put the prepared model in force."""
        k = self._cell("swap", cell)
        ready = self._shelf.prepared[k]
        if ready is None:
            raise ControlError(
                f"swap: no model is prepared for cell {self._names[k]}; load one first"
            )
        self._claim("swap", k)
        return self._ordered(Order.SWAP, k, ready.bank, after=lambda e: self._swapped(k, ready))

    def set(
        self, key: str | None = None, value: float | None = None, cell: str | None = None
    ) -> Waiting:
        """Change gmax or reversal of a conductance in force."""
        k = self._cell("set", cell)
        index, parameter = self._parameter(k, key)
        order, limit = _PARAMETERS[parameter]
        number = isinstance(value, int | float) and not isinstance(value, bool)
        if not number or not math.isfinite(float(value or 0)) or abs(float(value or 0)) > limit:
            raise ControlError(
                f"set: {key} = {value!r}; it is a number from {-limit:g} to {limit:g}"
            )
        new = float(value or 0)

        def after(_: LoopEvent) -> Answer:
            self._parameters[k][str(key)] = new
            return {"cell": self._names[k], "key": key, "value": new}

        return self._ordered(order, k, index, new, after)

    def put_in_force(self, cell: int, model: LoadedModel, tables: Tables) -> Ready:
        """Prepare a model before the loop runs and count it as in force."""
        ready = self._shelf.prepare(cell, model, tables)
        self._shelf.put_in_force(cell)
        self._parameters[cell] = _file_parameters(ready)
        return ready

    def _ordered(
        self,
        order: Order,
        cell: int = 0,
        index: int = 0,
        value: float = 0.0,
        after: Callable[[LoopEvent], Answer] = lambda _: {},
    ) -> Confirmed:
        number = self._send_order(order, cell, index, value)
        return Confirmed(
            number,
            lambda e: {
                "ok": True,
                "state": self._watch.state.name.lower(),
                "seq": e.seq,
                **after(e),
            },
        )

    def _armed(self, event: LoopEvent, force: bool) -> Answer:
        if event.outcome == Outcome.TRIPPED:
            reason = self._watch.summary()["fault"]
            raise ControlError(f"arm: the loop has tripped ({reason}); mend that, then reset")
        if event.outcome == Outcome.STOPPING:
            raise ControlError("arm: the server is stopping; start it again")
        if event.outcome == Outcome.WRONG_TICK:
            tick = self._watch.summary()["tick_us"]
            raise ControlError(
                f"arm: the rig's clock shows a tick of {tick:.6g} us and loop.interval_us is "
                f"{self._rig.spec.loop.interval_us:g}; make them agree"
            )
        return {"forced": force}

    def _loaded(self, k: int, built: Future[tuple[LoadedModel, Tables]]) -> Answer:
        self._busy.discard(k)
        model, tables = built.result()
        ready = self._shelf.prepare(k, model, tables)
        return {"ok": True, "cell": self._names[k], "model": model.name, **_table_facts(ready)}

    def _swapped(self, k: int, ready: Ready) -> Answer:
        self._busy.discard(k)
        self._shelf.put_in_force(k)
        self._parameters[k] = _file_parameters(ready)
        return {"cell": self._names[k], "model": ready.model.name}

    def _claim(self, verb: str, k: int) -> None:
        """One load or swap a cell at a time: both concern its spare bank."""
        if k in self._busy:
            raise ControlError(
                f"{verb}: cell {self._names[k]} has a load or swap under way; wait for its answer"
            )
        self._busy.add(k)

    def _cell(self, verb: str, name: str | None) -> int:
        if name is None and len(self._names) == 1:
            return 0
        if name in self._names:
            return self._names.index(name)
        found = "cell is missing" if name is None else f"cell {name!r} is not on this rig"
        raise ControlError(f"{verb}: {found}; its cells are {', '.join(self._names)}")

    def _parameter(self, k: int, key: str | None) -> tuple[int, str]:
        ready = self._shelf.in_force[k]
        assert ready is not None, "every cell has a model in force"
        names = [c.name for c in ready.model.spec.conductance]
        conductance, _, parameter = str(key).partition(".")
        if conductance not in names or parameter not in _PARAMETERS:
            known = ", ".join(f"{n}.{p}" for n in names for p in _PARAMETERS)
            raise ControlError(
                f"set: {key!r} is no parameter of {ready.model.name}; it has {known}"
            )
        return names.index(conductance), parameter

    def _cells(self) -> list[Answer]:
        cells = []
        for k, spec in enumerate(self._rig.spec.cell):
            in_force, prepared = self._shelf.in_force[k], self._shelf.prepared[k]
            assert in_force is not None, "every cell has a model in force"
            cells.append(
                {
                    "name": spec.name,
                    "model": in_force.model.name,
                    "title": in_force.model.spec.title,
                    "prepared": prepared.model.name if prepared else None,
                    **self._watch.cell(k),
                    "parameters": dict(self._parameters[k]),
                    "limits": spec.limits.model_dump(),
                    **_table_facts(in_force),
                }
            )
        return cells


def refusal(text: str) -> Answer:
    """The answer that says why not."""
    return {"ok": False, "error": text}


def _table_facts(ready: Ready) -> Answer:
    reports = ready.tables.reports
    return {
        "gates": len(reports),
        "table_error": max((max(r.inf_error, r.rate_error) for r in reports), default=0.0),
        "table_sha256": ready.tables.sha256,
    }


def _file_parameters(ready: Ready) -> dict[str, float]:
    spec = ready.model.spec
    found: dict[str, float] = {}
    for c in spec.conductance:
        found[f"{c.name}.gmax_ns"] = c.gmax_ns
        found[f"{c.name}.reversal_mv"] = c.reversal_at(spec.temperature_c)
    return found
