"""A model server as one would first write it in Python: pyzmq, msgpack, the same kernel.

    python bench/plain_server.py ENDPOINT MODEL INTERVAL_US

It answers the same samples with the same currents as ``gatestep serve`` and does
nothing else: no limits, no lateness, no gaps, no record. Prints a line when it is
bound, and runs until it is killed.
"""

from __future__ import annotations

import sys
import time

import msgpack
import numpy as np
import zmq

from gatestep import load_model
from gatestep.kernel import BANK, STATES, current, records, settle, step
from gatestep.tables import build_tables
from gatestep.wire import LIVE


def serve(endpoint: str, model: str, interval_us: float) -> None:
    """Answer samples of one cell until killed."""
    tables = build_tables(load_model(model).spec)
    banks = records(BANK)
    banks[0] = tables.bank
    bank, table, x = banks[0], tables.table.copy(), np.zeros(STATES)
    settle(bank, table, x, -65.0)
    step(bank, table, x, -65.0, -65.0, interval_us * 1e-3)
    current(bank, x, -65.0)
    socket = zmq.Context().socket(zmq.ROUTER)
    socket.bind(endpoint)
    print("ready", flush=True)
    last_seq, last_mv = -1, 0.0
    while True:
        peer, message = socket.recv_multipart()
        received = time.perf_counter_ns()
        seq, _t_us, _in_force, _lag_us, v_mv = msgpack.unpackb(message)
        if last_seq < 0:
            settle(bank, table, x, v_mv)
            i_pa = current(bank, x, v_mv)
        else:
            dt_ms = (seq - last_seq) * interval_us * 1e-3
            i_pa = step(bank, table, x, last_mv, v_mv, dt_ms)
        last_seq, last_mv = seq, v_mv
        service_nsec = time.perf_counter_ns() - received
        socket.send_multipart([peer, msgpack.packb([seq, LIVE, service_nsec, i_pa])])


if __name__ == "__main__":
    if len(sys.argv) != 4:
        sys.exit("usage: plain_server.py ENDPOINT MODEL INTERVAL_US")
    serve(sys.argv[1], sys.argv[2], float(sys.argv[3]))
