"""Verbs on a desk: orders are kept in a list, and carried out when a test says so."""

from __future__ import annotations

from concurrent.futures import Executor, Future

import numpy as np
from conftest import make_rig

from gatestep.answers import Built, Confirmed, safely
from gatestep.kernel import BANK, records
from gatestep.library import load_model
from gatestep.orders import Outcome
from gatestep.shelf import Shelf
from gatestep.tables import build_tables
from gatestep.verbs import Verbs
from gatestep.watch import LoopEvent, Watch

LIMITS = {"current_pa": 1000.0}


class AtOnce(Executor):
    """Carries work out when it is submitted."""

    def submit(self, work, /, *args, **kwargs):
        future: Future = Future()
        try:
            future.set_result(work(*args, **kwargs))
        except Exception as fault:
            future.set_exception(fault)
        return future


class Desk:
    """Verbs with their orders kept in a list, and a loop that carries them out when told to."""

    def __init__(self, folder, cells=("a",)):
        self.rig = make_rig(
            folder, cell=[{"name": c, "model": "squid-axon", "limits": LIMITS} for c in cells]
        )
        self.orders: list[tuple] = []
        self.sent = 0
        self.watch = Watch(list(cells))
        self.shelf = Shelf(records(BANK, 2 * len(cells)), np.empty(1 << 20))
        self.verbs = Verbs(self.rig, self.shelf, self.watch, self.send, AtOnce(), {"lane": "none"})
        model = load_model("squid-axon")
        for k in range(len(cells)):
            self.verbs.put_in_force(k, model, build_tables(model.spec))

    def send(self, kind, cell=0, index=0, value=0.0, *_, **_meaning):
        self.orders.append((kind, cell, index, value))
        return len(self.orders)

    def ask(self, verb, /, **arguments):
        """Handle a request as far as it goes without the loop."""
        return self.verbs.handle({"verb": verb, **arguments})

    def confirm(self, waiting, outcome=Outcome.DONE, seq=7):
        """The answer once the loop has carried the order out."""
        assert isinstance(waiting, Confirmed)
        event = LoopEvent("order", seq, "", waiting.number, int(outcome))
        return safely(lambda: waiting.finish(event))

    def do(self, verb, outcome=Outcome.DONE, **arguments):
        """The answer to a request, built and carried out at once."""
        found = self.ask(verb, **arguments)
        if isinstance(found, Confirmed):
            return self.confirm(found, outcome)
        if isinstance(found, Built):
            return safely(lambda: found.finish(found.future))
        return found


def refused(answer, *words):
    """The text of a refusal, which holds the words."""
    assert answer["ok"] is False
    assert set(answer) == {"ok", "error"}
    for word in words:
        assert word in answer["error"], answer["error"]
    return answer["error"]
