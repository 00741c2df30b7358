"""A server of the loop socket in plain pyzmq and msgpack, for tests of its clients."""

from __future__ import annotations

import socket
import threading
from contextlib import contextmanager

import msgpack
import zmq

from gatestep.simrig import SimRig
from gatestep.specs import CellSpec, LoopSpec, RigSpec, SimCellSpec, SimulatedSpec

TICK_US = 20.0
LIVE, REPEAT, MALFORMED = 1, 32, 128


def ohmic(g_ns, reversal_mv):
    """Currents of a virtual leak for a sample."""
    return lambda _, voltages: [-g_ns * (v - reversal_mv) for v in voltages]


class PlainServer(threading.Thread):
    """A ROUTER in plain pyzmq and msgpack; ``behave`` may replace what it sends."""

    def __init__(self, currents, behave=None, curve_keys=None):
        super().__init__(daemon=True)
        self.currents, self.behave = currents, behave
        self.samples, self.answers = [], {}
        self.context = zmq.Context()
        self.socket = self.context.socket(zmq.ROUTER)
        if curve_keys is not None:
            self.socket.curve_publickey, self.socket.curve_secretkey = curve_keys
            self.socket.curve_server = True
        port = self.socket.bind_to_random_port("tcp://127.0.0.1")
        self.endpoint = f"tcp://127.0.0.1:{port}"
        self.over = threading.Event()

    def run(self):
        while not self.over.is_set():
            if self.socket.poll(20):
                peer, body = self.socket.recv_multipart()
                for answer in self.answer(msgpack.unpackb(body)):
                    self.socket.send_multipart([peer, answer])
        self.socket.close(0)
        self.context.term()

    def answer(self, sample):
        self.samples.append(sample)
        seq = sample[0]
        flags = LIVE | (REPEAT if seq in self.answers else 0)
        if seq not in self.answers:
            self.answers[seq] = self.currents(seq, sample[4:])
        plain = msgpack.packb([seq, flags, 1000, *self.answers[seq]])
        return [plain] if self.behave is None else self.behave(self, sample, plain)


@contextmanager
def server(currents, behave=None, curve_keys=None):
    thread = PlainServer(currents, behave, curve_keys)
    thread.start()
    try:
        yield thread
    finally:
        thread.over.set()
        thread.join()


def rig_spec(endpoint, cells=1, apply="next-tick", interval_us=TICK_US, cell=None, **simulated):
    return RigSpec(
        loop=LoopSpec(endpoint=endpoint, interval_us=interval_us, apply=apply),
        cell=tuple(CellSpec(name=f"c{k}", model="none", capacitance_pf=30) for k in range(cells)),
        simulated=SimulatedSpec(cell=(cell or SimCellSpec(),) * cells, **simulated),
    )


def exchange(spec, currents, seconds, behave=None, **options):
    """Run once against a fresh server; the trace, the server, the rig's counters."""
    with server(currents, behave) as there, SimRig(spec, endpoint=there.endpoint, **options) as rig:
        trace = rig.run(seconds)
        return trace, there, rig.counters


ANYWHERE = "tcp://127.0.0.1:5790"


@contextmanager
def socket_nobody_has():
    """An endpoint that is bound but does not listen."""
    with socket.socket() as held:
        held.bind(("127.0.0.1", 0))
        yield f"tcp://127.0.0.1:{held.getsockname()[1]}"
