"""Whether the loop carries what its models open: judged again when a parameter is set."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from concurrent.futures import Executor, Future
from dataclasses import replace

from .choosing import Choice, advice, choose
from .config import LoadedRig
from .orders import Order
from .shelf import Ready, Shelf, with_parameters
from .states import State
from .watch import Watch

Parameters = Sequence[dict[str, float]]
"""Those of each cell, by names as ``K.gmax_ns``."""


class Judge:
    """Knows of each cell how it anticipates and with which margin, as its parameters now are.

    Parameters
    ----------
    rig : LoadedRig
    shelf : Shelf
    watch : Watch
    send : callable
        As :meth:`gatestep.orderline.OrderLine.send`.
    builder : Executor
        Where cells are judged while the loop runs.
    """

    def __init__(
        self,
        rig: LoadedRig,
        shelf: Shelf,
        watch: Watch,
        send: Callable[..., int],
        builder: Executor,
    ) -> None:
        self._rig, self._shelf, self._watch = rig, shelf, watch
        self._send, self._builder = send, builder
        self._changed: set[int] = set()
        self._judging: dict[int, tuple[dict[str, float], Future[Choice]]] = {}

    def note_set(self, cell: int) -> None:
        """A parameter of a cell was set: its margin is not known any more."""
        self._changed.add(cell)

    def note_swap(self, cell: int) -> None:
        """A model came into force that was judged as it is."""
        self._changed.discard(cell)

    def settle(self, parameters: Parameters) -> None:
        """Judge at once what was changed."""
        for k in sorted(self._changed):
            self._take(k, self._judged(k, dict(parameters[k])))

    def against(self, more: Iterable[Choice] = ()) -> str | None:
        """Why the loop should not be armed with what is in force, and with ``more``; or None."""
        choices = [*(ready.choice for ready in self._ready()), *more]
        if self._watch.rig_reports_nothing():
            # Then every tick falls back to the plain loop.
            choices = [replace(choice, on=False) for choice in choices]
        return advice(choices)

    def catch_up(self, parameters: Parameters, busy: Iterable[int]) -> list[str]:
        """Have changed cells judged off every other thread, but for those that are ``busy``.

        Called every so often by the attending thread. Returns what to warn of: a loop
        that is armed and now carries less than its model opens.
        """
        warnings = []
        for k in sorted(self._changed.difference(busy)):
            if k not in self._judging:
                given = dict(parameters[k])
                self._judging[k] = given, self._builder.submit(self._judged, k, given)
            given, future = self._judging[k]
            if future.done():
                del self._judging[k]
                if given == parameters[k]:
                    self._take(k, future.result())
                    warnings.append(advice([self._ready()[k].choice]))
        armed = self._watch.state == State.ARMED
        return [warning for warning in warnings if warning and armed]

    def _ready(self) -> list[Ready]:
        return [ready for ready in self._shelf.in_force if ready is not None]

    def _judged(self, k: int, parameters: dict[str, float]) -> Choice:
        tables = with_parameters(self._ready()[k].tables, parameters)
        return choose(self._rig.spec.cell[k], tables, self._rig.spec.loop)

    def _take(self, k: int, choice: Choice) -> None:
        """Let a cell anticipate as judged from now on."""
        self._shelf.in_force[k] = replace(self._ready()[k], choice=choice)
        self._send(Order.FORESEE, k, choice=choice)
        self._changed.discard(k)
