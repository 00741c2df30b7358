"""The server: sockets, threads and the order of starting and stopping.

Two threads matter. The hot thread runs :func:`gatestep.loop.run_loop` and nothing
else. The attending thread, the one that calls :meth:`Server.attend`, carries control
requests in and answers out, reads the loop's log and feeds the watchers. They share
no state: orders go one way, log blocks the other. Tables are built on a third.
"""

from __future__ import annotations

import contextlib
import os
import sys
import threading
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import zmq
from numba import typeof

from . import __version__
from .answers import Answer, Built, Confirmed, Waiting, refusal, safely
from .config import LoadedRig, load_rig_models
from .errors import ControlError, LinkError
from .hosttune import HostTuning
from .journal import Journal
from .journalfacts import header_of
from .loop import make_memory, run_loop
from .loopport import LoopPort, bound_endpoint, bound_socket, choose_lane
from .network import Gatekeeper
from .orderline import NoRecord, OrderLine, Record
from .orders import Order, Outcome
from .shelf import Shelf, make_room, make_slots
from .states import State
from .tables import build_tables
from .verbs import Verbs
from .watch import LoopEvent, Watch
from .zmqlane import load_libzmq

Say = Callable[[str], None]

_LOG_BLOCKS = 2000
_ORDER_WAIT_S = 3.0
_QUIET_S = 1.0
_POLL_MS = 20
_STATUS_S = 1.0
_ATTENDING_NICE = 5
_BLOCKS_A_TURN = 200
_REQUESTS_A_TURN = 100
_MOST_WAITING = 64
_NEVER_PUT_OFF = ("status", "disarm", "halt", "stop")


@dataclass
class _Caller:
    """Where an answer goes, until when it may take, and whether it was told that it took longer."""

    envelope: list[bytes]
    deadline: float
    told: bool = False

    def is_overdue(self) -> bool:
        """Whether it has waited too long and does not know yet."""
        return not self.told and time.monotonic() > self.deadline


class Server:
    """One gatestep server.

    Parameters
    ----------
    rig : LoadedRig
    say : callable
        Takes a line of text for the user; events and warnings.

    Raises
    ------
    GatestepError
        From :meth:`start`: a model that cannot be used, an endpoint that cannot be
        bound, a libzmq that cannot be found.
    """

    def __init__(self, rig: LoadedRig, say: Say = lambda _: None) -> None:
        self.rig, self._say = rig, say
        self.watch = Watch([c.name for c in rig.spec.cell])
        self._context = zmq.Context()
        self._host = HostTuning(rig.spec.host, say)
        if choose_lane(rig) == "libzmq":
            self._host.set_up_io(self._context)
        self._builder = ThreadPoolExecutor(1, thread_name_prefix="tables")
        self._waiting: list[tuple[Waiting, _Caller]] = []
        self._result: list[int] = []
        self._gatekeeper = Gatekeeper(self._context, rig)
        self._status_due = 0.0
        self._stopping = False

    def start(self) -> None:
        """Prepare everything, compile, bind, and start the hot thread; idle."""
        models = load_rig_models(self.rig)
        load_libzmq()
        self._port = LoopPort(self.rig, self._context, self._gatekeeper)
        self._orders_out, self._orders_in = self._pipe("orders")
        self._log_out, self._log_in = self._pipe("log")
        table, slots = make_room(), make_slots()
        self._memory = make_memory(
            self.rig.spec,
            self._port.lane,
            self._orders_in.underlying,
            self._log_out.underlying,
            table,
            slots,
        )
        self._compile()
        self._bind()
        self._record = self._open_record()
        self._line = OrderLine(self._orders_out, self._record)
        self._verbs = Verbs(
            self.rig,
            Shelf(self._memory.banks, table),
            self.watch,
            self._line.send,
            self._builder,
            self._facts(),
            self._record,
            slots,
        )
        for k, model in enumerate(models):
            ready = self._verbs.put_in_force(k, model, build_tables(model.spec))
            self._line.send(Order.FORESEE, k, choice=ready.choice)
        self._thread = threading.Thread(target=self._run, name="hot loop", daemon=True)
        self._thread.start()
        self._host.confirm()

    def attend(self, until: Callable[[], bool] = lambda: False) -> int:
        """Carry requests and log until the loop ends; returns its result, 0 when orderly.

        When ``until`` turns true the loop is ordered to stop.
        """
        _stand_back()
        poller = zmq.Poller()
        poller.register(self._control, zmq.POLLIN)
        poller.register(self._log_in, zmq.POLLIN)
        while self._thread.is_alive():
            if until() and not self._stopping:
                self.order_stop()
            ready = dict(poller.poll(_POLL_MS))
            if self._log_in in ready:
                self._read_log()
            if self._control in ready:
                self._take_requests()
            self._answer_built()
            self._quietly(self._verbs.player.follow)
            self._quietly(lambda: self._warn(self._verbs.catch_up()))
            self._publish_status()
            self._host.follow(self.watch.state == State.ARMED)
        self._drain()
        return self._result[0] if self._result else 1

    def _quietly(self, work: Callable[[], None]) -> None:
        """Work that may fail, and then ends a plan; the thread that carries disarm goes on."""
        try:
            work()
        except Exception as fault:
            self._say(f"a fault in the server, {type(fault).__name__}: {fault}; a plan ends")
            with contextlib.suppress(Exception):
                self._verbs.player.halt(f"a fault in the server: {fault}")

    def _drain(self) -> None:
        """Take in what is left of the log, once the loop has ended; the record ends with it."""
        while self._log_in.poll(0):
            self._read_log()
        self._quietly(lambda: self._verbs.player.halt("the server was stopped"))
        self._record.close()

    def arm(self, force: bool = False) -> None:
        """Order the loop to arm, as ``gatestep arm`` does.

        Raises
        ------
        ControlError
            When the loop would carry less than the model opens, unless forced.
        """
        self._verbs.refuse_to_ring("arm", force)
        self._line.send(Order.ARM, forced=force)

    def order_stop(self) -> None:
        """Order the loop to answer 0 pA once more and end."""
        self._stopping = True
        self._line.send(Order.STOP)

    def close(self) -> None:
        """Stop what still runs and give every socket back."""
        if hasattr(self, "_thread") and self._thread.is_alive():
            with contextlib.suppress(ControlError):
                self.order_stop()
            self._thread.join(2 * _QUIET_S)
            if self._thread.is_alive():
                return  # nothing is taken from under a loop that still runs
            self._drain()
        self._builder.shutdown(wait=False, cancel_futures=True)
        if hasattr(self, "_port"):
            self._port.close()
        if hasattr(self, "_record"):
            self._record.close()
        self._gatekeeper.close()
        self._host.release()
        self._context.destroy(linger=200)

    def endpoints(self) -> dict[str, str]:
        """The endpoints as bound."""
        return dict(self._endpoints)

    def recording(self) -> dict[str, Any]:
        """State of the record: its path, its size, and what went wrong."""
        return self._record.status()

    def _bind(self) -> None:
        spec, keeper = self.rig.spec, self._gatekeeper
        name = "loop"
        try:
            self._port.bind()
            name = "control"
            endpoint = spec.control.endpoint
            self._control = bound_socket(self._context, zmq.ROUTER, endpoint, keeper)
            name = "feed"
            self._feed = bound_socket(self._context, zmq.PUB, spec.feed.endpoint, keeper)
        except LinkError as fault:
            raise LinkError(
                f"{self.rig.path}: {name}.endpoint = {fault}; is another server running there?"
            ) from fault
        # Kept: any thread may ask, and only the attending one may touch these sockets.
        self._endpoints = {
            "loop": self._port.endpoint,
            "control": bound_endpoint(self._control),
            "feed": bound_endpoint(self._feed),
        }

    def _pipe(self, name: str) -> tuple[zmq.Socket[bytes], zmq.Socket[bytes]]:
        """The two ends, sending and receiving, of a one-way line between threads."""
        out: zmq.Socket[bytes] = self._context.socket(zmq.PUSH)
        into: zmq.Socket[bytes] = self._context.socket(zmq.PULL)
        for socket in (out, into):
            socket.setsockopt(zmq.LINGER, 0)
            socket.set_hwm(_LOG_BLOCKS)
        into.bind(f"inproc://{name}")
        out.connect(f"inproc://{name}")
        return out, into

    def _facts(self) -> Answer:
        spec = self.rig.spec
        return {
            "version": __version__,
            "pid": os.getpid(),
            "rig_file": str(self.rig.path),
            "lane": self._port.kind,
            "interval_us": spec.loop.interval_us,
            "budget_us": spec.loop.budget,
            "endpoints": self.endpoints(),
            "host": self._host.report,
        }

    def _open_record(self) -> Record:
        record = self.rig.spec.record
        if not record.on:
            return NoRecord()
        return Journal(
            record,
            self.rig.folder / Path(record.folder).expanduser(),
            header_of(self.rig, self._host.report),
            len(self.rig.spec.cell),
            self._say,
            self.rig.path.stem,
        )

    def _compile(self) -> None:
        """Have the loop ready; a start that must compile says so."""
        notice = threading.Timer(
            _QUIET_S,
            self._say,
            ["compiling the loop, as the first start of an installation does"],
        )
        notice.start()
        try:
            run_loop.compile((typeof(self._memory),))
        finally:
            notice.cancel()

    def _run(self) -> None:
        self._host.tune_thread()
        self._result.append(int(run_loop(self._memory)))

    def _read_log(self) -> None:
        """Read on in the loop's log, but not so long that a request or a signal has to wait."""
        for _ in range(_BLOCKS_A_TURN):
            if not self._log_in.poll(0):
                return
            block = self._log_in.recv()
            self._record.take(block)
            events, samples = self.watch.take(block)
            for event in events:
                if event.kind == "order":
                    self._confirm(event)
                    self._quietly(partial(self._verbs.player.confirm, event))
                else:
                    self._say(event.text)
                self._publish("event", {"kind": event.kind, "seq": event.seq, "text": event.text})
            self._quietly(partial(self._verbs.player.observe, samples))
            self._publish_samples(samples)

    def _warn(self, warnings: list[str]) -> None:
        for text in warnings:
            self._say(f"armed against advice: {text}")
            self._record.note("advice", text=text)
            self._publish("event", {"kind": "advice", "seq": None, "text": text})

    def _take_requests(self) -> None:
        for _ in range(_REQUESTS_A_TURN):
            if not self._control.poll(0):
                return
            *envelope, body = self._control.recv_multipart()
            caller = _Caller(envelope, time.monotonic() + _ORDER_WAIT_S)
            answer = self._handle(body)
            if isinstance(answer, dict):
                self._reply(caller, answer)
            else:
                self._waiting.append((answer, caller))

    def _handle(self, body: bytes) -> Answer | Waiting:
        """Carry out a request's bytes; a crowd of others never stands before a disarm."""
        try:
            request = msgpack.unpackb(body)
        except Exception as fault:
            reason = str(fault) or type(fault).__name__
            return refusal(f"request: not a MessagePack map with text for keys ({reason})")
        urgent = isinstance(request, dict) and request.get("verb") in _NEVER_PUT_OFF
        if len(self._waiting) >= _MOST_WAITING and not urgent:
            return refusal(f"{_MOST_WAITING} requests are waiting already; ask again later")
        return self._verbs.handle(request)

    def _confirm(self, event: LoopEvent) -> None:
        """Answer the caller whose order the loop has carried out.

        The loop carries orders out in turn. One from before this has been carried out as
        well, even where its entry, and with it its outcome, was lost because the log had
        overflowed.
        """
        for waiting, caller in list(self._waiting):
            if isinstance(waiting, Confirmed) and waiting.number <= event.number:
                mine = waiting.number == event.number
                lost = replace(event, outcome=int(Outcome.DROPPED), seq=None)
                known = event if mine else lost
                self._finish(waiting, caller, known)

    def _answer_built(self) -> None:
        """Answer callers whose tables are built, and those who have waited too long."""
        for waiting, caller in list(self._waiting):
            if isinstance(waiting, Built) and waiting.future.done():
                self._finish(waiting, caller, waiting.future)
            elif isinstance(waiting, Confirmed) and caller.is_overdue():
                # It stays among those waiting: the loop may yet carry the order out.
                caller.told = True
                late = "the loop has not confirmed the order in time; look at the status"
                self._reply(caller, refusal(late))

    def _finish(self, waiting: Waiting, caller: _Caller, result: Any) -> None:
        self._waiting.remove((waiting, caller))
        answer = safely(lambda: waiting.finish(result))
        if not caller.told:
            self._reply(caller, answer)

    def _reply(self, caller: _Caller, answer: Answer) -> None:
        try:
            self._control.send_multipart([*caller.envelope, msgpack.packb(answer)], zmq.DONTWAIT)
        except zmq.ZMQError:
            self._say("a control client left before its answer")

    def _publish(self, topic: str, content: Any) -> None:
        self._feed.send_multipart([topic.encode(), msgpack.packb(content)], zmq.DONTWAIT)

    def _publish_samples(self, samples: np.ndarray) -> None:
        thinned = samples[samples["seq"] % self.rig.spec.feed.every == 0]
        if not len(thinned):
            return
        cells = len(self.rig.spec.cell)
        content = {k: thinned[k].tolist() for k in ("seq", "t_us", "flags", "service_nsec")}
        content["v_mv"] = thinned["v_mv"][:, :cells].tolist()
        content["i_pa"] = thinned["i_pa"][:, :cells].tolist()
        self._publish("sample", content)

    def _publish_status(self) -> None:
        if time.monotonic() >= self._status_due:
            self._status_due = time.monotonic() + _STATUS_S
            self._publish("status", self._verbs.status())


def _stand_back() -> None:
    """Let the hot thread and its rig go before this thread where processors are short."""
    if sys.platform == "linux":
        with contextlib.suppress(OSError):
            os.setpriority(os.PRIO_PROCESS, threading.get_native_id(), _ATTENDING_NICE)
