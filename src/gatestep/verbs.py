"""The server's side of the control socket: what each verb does.

A verb either answers at once or waits: for the loop to confirm an order, or for a
model's tables to be built. Nothing here touches a socket, so each verb can be tested
by itself; the server carries requests in and answers out.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from concurrent.futures import Executor, Future
from dataclasses import replace
from pathlib import Path
from reprlib import repr as show
from typing import Any

import numpy as np

from .answers import Answer, Built, Confirmed, Waiting, safely
from .arithmetic import Floats
from .choosing import Choice, advice, choose
from .config import LoadedRig
from .errors import ControlError
from .judging import Judge
from .library import LoadedModel, load_model
from .orderline import NoRecord, Record, model_meaning
from .orders import Order, Outcome
from .playing import Player
from .shelf import Ready, Shelf, parameters_of, with_parameters
from .specs import MAX_GMAX_NS, MAX_REVERSAL_MV
from .states import State
from .sweepsettings import Prepared, prepare_plan
from .tables import Tables, build_tables
from .watch import LoopEvent, Watch

BuiltModel = tuple[LoadedModel, Tables, Choice]
SendOrder = Callable[..., int]

_PARAMETERS = {
    "gmax_ns": (Order.SET_GMAX, MAX_GMAX_NS),
    "reversal_mv": (Order.SET_REVERSAL, MAX_REVERSAL_MV),
}
_MAX_TEXT = 1000


def build_model(name: str, rig: LoadedRig, cell: int) -> BuiltModel:
    """Read a model, build its tables and choose how the cell anticipates with it.

    ``name`` as in a rig file; ``cell`` is the cell's place in it.
    """
    model = load_model(name, relative_to=rig.folder)
    tables = build_tables(model.spec)
    return model, tables, choose(rig.spec.cell[cell], tables, rig.spec.loop)


class Verbs:
    """The verbs of one server.

    Parameters
    ----------
    rig : LoadedRig
    shelf : Shelf
    watch : Watch
    send_order : callable
        As :meth:`gatestep.orderline.OrderLine.send`.
    builder : Executor
        Where tables are built, off every other thread.
    facts : dict
        Constant entries of the status: version, lane, endpoints.
    record : Record, optional
    slots : ndarray (2, ticks), optional
        Where the loop reads the stimuli of sweeps.

    Attributes
    ----------
    player : Player
    """

    def __init__(
        self,
        rig: LoadedRig,
        shelf: Shelf,
        watch: Watch,
        send_order: SendOrder,
        builder: Executor,
        facts: Answer,
        record: Record | None = None,
        slots: Floats | None = None,
    ) -> None:
        self._rig, self._shelf, self._watch = rig, shelf, watch
        self._record: Record = record or NoRecord()
        self._send_order, self._builder, self._facts = send_order, builder, facts
        self._names = [cell.name for cell in rig.spec.cell]
        slots = np.empty((2, 0)) if slots is None else slots
        self.player = Player(
            rig, shelf, slots, watch, send_order, builder, self._record, self._take_parameters
        )
        self._busy: dict[int, str] = {}
        self._given_up = False  # the plan that is being prepared
        self._judge = Judge(rig, shelf, watch, send_order, builder)
        # As the loop has confirmed them, and as it will have them once all orders are done.
        self._parameters: list[dict[str, float]] = [{} for _ in self._names]
        self._ordered_parameters: list[dict[str, float]] = [{} for _ in self._names]
        self._verbs: dict[str, tuple[Callable[..., Answer | Waiting], set[str]]] = {
            "status": (self.status, set()),
            "arm": (self.arm, {"force"}),
            "disarm": (self.disarm, set()),
            "reset": (self.reset, set()),
            "load": (self.load, {"model", "cell"}),
            "swap": (self.swap, {"cell", "force"}),
            "set": (self.set, {"key", "value", "cell"}),
            "mark": (self.mark, {"text"}),
            "run": (self.run, {"text", "path", "seed", "force"}),
            "halt": (self.halt, set()),
            "sweeps": (self.sweeps, {"since"}),
            "stop": (self.stop, set()),
        }

    def handle(self, request: Any) -> Answer | Waiting:
        """Carry out a request; errors come back as answers, never as exceptions."""
        return safely(lambda: self._dispatch(request))

    def _dispatch(self, request: Any) -> Answer | Waiting:
        if not isinstance(request, dict) or not isinstance(request.get("verb"), str):
            raise ControlError('request: not a map with a verb; send {"verb": "status"}')
        arguments = {k: v for k, v in request.items() if k != "verb"}
        name = request["verb"]
        if name not in self._verbs:
            raise ControlError(
                f"verb {show(name)} is not known; known are {', '.join(self._verbs)}"
            )
        verb, allowed = self._verbs[name]
        unknown = sorted(str(k) for k in arguments if k not in allowed)
        if unknown:
            known = ", ".join(sorted(allowed)) or "no arguments"
            raise ControlError(f"{name}: {show(unknown)} not known; it takes {known}")
        return verb(**arguments)

    def status(self) -> Answer:
        """State, counters, percentiles and cells."""
        anticipate = any(ready.choice.on for ready in self._ready())
        return {
            "ok": True,
            **self._watch.summary(),
            **self._facts,
            "anticipate": anticipate,
            "recording": self._record.status(),
            "plan": self._plan_told(),
            "cells": self._cells(),
        }

    def _plan_told(self) -> Answer | None:
        """The plan for the status, without its sweeps."""
        told = self.player.status()
        return {k: v for k, v in told.items() if k != "done"} if told else None

    def arm(self, force: bool = False) -> Waiting:
        """Let the model's current flow."""
        _check_force("arm", force)
        self.player.refuse_if_busy("arm")
        self.refuse_to_ring("arm", force)
        return self._ordered(Order.ARM, after=lambda e: self._armed(e, force), forced=force)

    def disarm(self) -> Waiting:
        """Go to 0 pA; a plan under way or being prepared ends."""
        self._end_plan("the loop was disarmed")
        return self._ordered(Order.DISARM)

    def reset(self) -> Waiting:
        """Clear a trip; a plan under way or being prepared ends."""
        self._end_plan("the loop was reset")
        return self._ordered(Order.RESET)

    def stop(self) -> Waiting:
        """Stop the server, with 0 pA as its last answer."""
        self._end_plan("the server was stopped")
        return self._ordered(Order.STOP)

    def _end_plan(self, why: str) -> bool:
        """End a plan; whether there was one that had begun."""
        self._given_up = True
        if not self.player.busy:
            return False
        self.player.halt(why)
        return True

    def mark(self, text: str | None = None) -> Waiting:
        """Put a note at the present sample."""
        if not isinstance(text, str) or not 0 < len(text) <= _MAX_TEXT:
            raise ControlError(f"mark: text is missing or not 1 to {_MAX_TEXT} characters long")
        return self._ordered(Order.MARK, after=lambda _: {"text": text}, text=text)

    def run(
        self,
        text: str | None = None,
        path: str | None = None,
        seed: int | None = None,
        force: bool = False,
    ) -> Waiting:
        """Play a plan: its text, and the whole path of its file, for what it names beside it."""
        _check_force("run", force)
        self.player.refuse_if_busy("run")
        if self._busy or self._parameters != self._ordered_parameters:
            raise ControlError("run: a load, swap or set is under way; wait for its answer")
        if not isinstance(text, str) or not isinstance(path, str) or not Path(path).is_absolute():
            raise ControlError("run: give the plan's text, and the whole path of its file")
        if seed is not None and (type(seed) is not int or not 0 <= seed < 2**63):
            raise ControlError(f"run: seed is {show(seed)}; it is a whole number from 0")
        in_force = [self._as_set(k) for k in range(len(self._names))]
        self._claim_all("run")
        self._given_up, session = False, self._watch.session
        try:
            future = self._builder.submit(prepare_plan, text, Path(path), seed, self._rig, in_force)
        except BaseException:
            self._busy.clear()
            raise
        return Built(future, lambda built: self._play(built, force, session))

    def halt(self) -> Answer:
        """End the plan under way, at 0 pA."""
        being_prepared = "run" in self._busy.values()
        if not self._end_plan("halted") and not being_prepared:
            raise ControlError("halt: no plan is running")
        return {"ok": True, "plan": None if being_prepared else self.player.status()}

    def sweeps(self, since: int = 0) -> Answer:
        """The plan under way or the last one, and its sweeps from one of them on."""
        if type(since) is not int or since < 0:
            raise ControlError(f"sweeps: since is {show(since)}; it is a whole number from 0")
        return {"ok": True, "plan": self.player.status(since), "state": self._state()}

    def load(self, model: str | None = None, cell: str | None = None) -> Waiting:
        """Prepare a model in the cell's spare bank."""
        k = self._cell("load", cell)
        self.player.refuse_if_busy("load")
        if not isinstance(model, str) or not model:
            raise ControlError("load: model is missing; give a shipped model's name or a file")
        self._claim("load", k)
        try:
            future = self._builder.submit(build_model, model, self._rig, k)
        except BaseException:
            self._busy.pop(k)
            raise
        return Built(future, lambda built: self._loaded(k, built))

    def swap(self, cell: str | None = None, force: bool = False) -> Waiting:
        """Put the prepared model in force; while armed not one that would ring, unless forced."""
        k = self._cell("swap", cell)
        _check_force("swap", force)
        self.player.refuse_if_busy("swap")
        ready = self._shelf.prepared[k]
        if ready is None:
            raise ControlError(
                f"swap: no model is prepared for cell {self._names[k]}; load one first"
            )
        against = advice([ready.choice]) if self._watch.state == State.ARMED else None
        if against and not force:
            raise ControlError(f"swap: {against}")
        self._claim("swap", k)
        try:
            return self._ordered(
                Order.SWAP,
                k,
                ready.bank,
                after=lambda e: self._swapped(k, ready),
                choice=ready.choice,
                forced=force,
                **self._meaning(ready),
            )
        except BaseException:
            self._busy.pop(k)
            raise

    def set(
        self, key: str | None = None, value: float | None = None, cell: str | None = None
    ) -> Waiting:
        """Change gmax or reversal of a conductance in force."""
        k = self._cell("set", cell)
        self.player.refuse_if_busy("set")
        if self._busy.get(k) in {"swap", "run"}:
            raise ControlError(
                f"set: cell {self._names[k]} has a {self._busy[k]} under way; wait for its "
                "answer, since the order would meet another model"
            )
        index, parameter = self._parameter(k, key)
        order, limit = _PARAMETERS[parameter]
        number = isinstance(value, int | float) and not isinstance(value, bool)
        # Not "> limit": NaN compares false with everything.
        if value is None or not number or not abs(value) <= limit:
            raise ControlError(
                f"set: {key} = {show(value)}; it is a number from {-limit:g} to {limit:g}"
            )
        new = float(value)

        def after(_: LoopEvent) -> Answer:
            self._parameters[k][str(key)] = new
            return {"cell": self._names[k], "key": key, "value": new}

        waiting = self._ordered(order, k, index, new, after, event="set", key=key)
        self._ordered_parameters[k][str(key)] = new
        self._judge.note_set(k)
        return waiting

    def put_in_force(self, cell: int, model: LoadedModel, tables: Tables) -> Ready:
        """Prepare a model before the loop runs and count it as in force."""
        choice = choose(self._rig.spec.cell[cell], tables, self._rig.spec.loop)
        ready = self._shelf.prepare(cell, model, tables, choice)
        self._shelf.put_in_force(cell)
        self._take_parameters(cell, ready)
        self._record.note("in_force", cell=cell, bank=ready.bank, **self._meaning(ready))
        return ready

    def _meaning(self, ready: Ready) -> Mapping[str, Any]:
        return model_meaning(ready, self._record)

    def refuse_to_ring(self, verb: str, force: bool, more: Iterable[Choice] = ()) -> None:
        """Refuse to arm a loop that carries less than its model opens, unless forced.

        During a swap not even then: the order would meet a model that was not judged.
        ``more`` are settings that will be in force while the loop is armed.
        """
        for k, busy in self._busy.items():
            if busy == "swap":
                raise ControlError(
                    f"{verb}: cell {self._names[k]} has a swap under way; wait for its answer"
                )
        self._judge.settle(self._ordered_parameters)
        against = self._judge.against(more)
        if against and not force:
            raise ControlError(f"{verb}: {against}")

    def _ready(self) -> list[Ready]:
        """The models in force; every cell has one."""
        return [ready for ready in self._shelf.in_force if ready is not None]

    def catch_up(self) -> list[str]:
        """Warnings of a loop that carries less since a parameter was set."""
        if self.player.busy:
            return []
        busy = [k for k, verb in self._busy.items() if verb in {"swap", "run"}]
        return self._judge.catch_up(self._ordered_parameters, busy)

    def _ordered(
        self,
        order: Order,
        cell: int = 0,
        index: int = 0,
        value: float = 0.0,
        after: Callable[[LoopEvent], Answer] = lambda _: {},
        choice: Choice | None = None,
        **meaning: Any,
    ) -> Confirmed:
        number = self._send_order(order, cell, index, value, choice, **meaning)

        def finish(event: LoopEvent) -> Answer:
            return {"ok": True, "state": self._state(), "seq": event.seq, **after(event)}

        return Confirmed(number, finish)

    def _state(self) -> str:
        return self._watch.state.name.lower()

    def _as_set(self, k: int) -> Ready:
        """The model in force with the parameters that were set, kept so on the shelf."""
        ready = self._ready()[k]
        if parameters_of(ready.tables) != self._parameters[k]:
            ready = replace(ready, tables=with_parameters(ready.tables, self._parameters[k]))
            self._shelf.in_force[k] = ready
        return ready

    def _claim_all(self, verb: str) -> None:
        for k in range(len(self._names)):
            self._claim(verb, k)

    def _play(self, built: Future[Prepared], force: bool, session: int) -> Answer:
        """Begin a plan that is prepared, unless a sweep of it would ring."""
        self._busy.clear()
        plan, sweeps = built.result()
        if self._given_up:
            raise ControlError("run: halted while it was prepared; nothing was played")
        choices = {id(one.setting): one.setting.choice for one in sweeps}
        self.refuse_to_ring("run", force, choices.values())
        return {"ok": True, **self.player.begin(plan, sweeps, force, session)}

    def _armed(self, event: LoopEvent, force: bool) -> Answer:
        if event.outcome == Outcome.TRIPPED:
            reason = self._watch.summary()["fault"]
            raise ControlError(f"arm: the loop has tripped ({reason}); mend that, then reset")
        if event.outcome == Outcome.DROPPED:
            raise ControlError("arm: the loop's log overflowed; see in the status what came of it")
        if event.outcome == Outcome.STOPPING:
            raise ControlError("arm: the server is stopping; start it again")
        if event.outcome == Outcome.WRONG_TICK:
            tick = self._watch.summary()["tick_us"]
            raise ControlError(
                f"arm: the rig's clock shows a tick of {tick:.6g} µs and loop.interval_us is "
                f"{self._rig.spec.loop.interval_us:g}; make them agree"
            )
        return {"forced": force}

    def _loaded(self, k: int, built: Future[BuiltModel]) -> Answer:
        self._busy.pop(k)
        model, tables, choice = built.result()
        ready = self._shelf.prepare(k, model, tables, choice)
        self._record.note("load", cell=k, **self._meaning(ready))
        return {"ok": True, "cell": self._names[k], "model": model.name, **_table_facts(ready)}

    def _swapped(self, k: int, ready: Ready) -> Answer:
        self._busy.pop(k)
        self._shelf.put_in_force(k)
        self._take_parameters(k, ready)
        return {"cell": self._names[k], "model": ready.model.name}

    def _take_parameters(self, k: int, ready: Ready) -> None:
        """A model that has just come into force has its file's parameters."""
        self._parameters[k] = parameters_of(ready.tables)
        self._ordered_parameters[k] = parameters_of(ready.tables)
        self._judge.note_swap(k)

    def _claim(self, verb: str, k: int) -> None:
        """One load or swap a cell at a time: both concern its spare bank."""
        if k in self._busy:
            raise ControlError(
                f"{verb}: cell {self._names[k]} has a {self._busy[k]} under way; "
                "wait for its answer"
            )
        self._busy[k] = verb

    def _cell(self, verb: str, name: str | None) -> int:
        if name is None and len(self._names) == 1:
            return 0
        if name in self._names:
            return self._names.index(name)
        found = "cell is missing" if name is None else f"cell {show(name)} is not on this rig"
        raise ControlError(f"{verb}: {found}; its cells are {', '.join(self._names)}")

    def _parameter(self, k: int, key: str | None) -> tuple[int, str]:
        ready = self._shelf.in_force[k]
        assert ready is not None, "every cell has a model in force"
        names = [c.name for c in ready.model.spec.conductance]
        conductance, _, parameter = key.partition(".") if isinstance(key, str) else ("", "", "")
        if conductance not in names or parameter not in _PARAMETERS:
            known = ", ".join(f"{n}.{p}" for n in names for p in _PARAMETERS)
            raise ControlError(
                f"set: {show(key)} is no parameter of {ready.model.name}; it has {known}"
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
                    "anticipation": in_force.choice.plain_data(),
                    **_table_facts(in_force),
                }
            )
        return cells


def _check_force(verb: str, force: Any) -> None:
    if not isinstance(force, bool):
        raise ControlError(f"{verb}: force is {show(force)}; it is true or false")


def _table_facts(ready: Ready) -> Answer:
    reports = ready.tables.reports
    return {
        "gates": len(reports),
        "table_error": max((max(r.inf_error, r.rate_error) for r in reports), default=0.0),
        "table_sha256": ready.tables.sha256,
    }
