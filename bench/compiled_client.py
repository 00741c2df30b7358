"""A rig in compiled code: gatestep's own measuring client, in a process of its own.

    python compiled_client.py ENDPOINT VOLTAGES CELLS INTERVAL_US [--spin] [--priority N]

Takes counts on stdin and writes to stdout what ``c/client.c`` writes: one int64 a round
trip, in ns; then the size of the last answer three times (only the last is kept), and
that answer in 128 bytes. Flat out no answer is in force anywhere, so a sample is four
bytes shorter than the C client's. ``--spin`` asks the socket again and again instead of
sleeping; ``--priority`` runs it under SCHED_FIFO.
"""

from __future__ import annotations

import argparse
import os
import sys

import numpy as np

from gatestep.dealer import connect
from gatestep.errors import GatestepError, LinkError
from gatestep.probe import Memory, Status, make_columns, make_memory, run_flat
from gatestep.wire import LIVE, NIL

FIRST_SEQ = 100_000
LONGEST = 128
PATIENCE_NSEC = 5_000_000_000
_NEVER = 2**62


def prepare(given: argparse.Namespace) -> Memory:
    """The client's memory, with all that a run is told."""
    v_mv = np.fromfile(given.voltages, np.float64)
    memory = make_memory(np.ascontiguousarray(np.repeat(v_mv[:, None], given.cells, axis=1)))
    probe = memory.probe[0]
    probe.interval_nsec = given.interval_us * 1e3
    probe.spin, probe.may_be_live = given.spin, 1
    probe.patience_nsec = PATIENCE_NSEC
    probe.first = FIRST_SEQ
    return memory


def run(memory: Memory, count: int) -> bytes:
    """Time ``count`` round trips; what goes to stdout.

    Raises
    ------
    LinkError
        When an answer is missing or is not plainly live.
    """
    probe, peer = memory.probe[0], memory.peer[0]
    columns = make_columns(count)
    probe.row = probe.outstanding = probe.settled = probe.start_nsec = 0
    probe.in_force = probe.coming = NIL
    status = Status(run_flat(memory, columns, _NEVER))
    probe.first += count
    if status != Status.DONE:
        raise LinkError(f"the run ended with {status.name}; see whether the server still runs")
    if not (columns.flags == LIVE).all():
        raise LinkError("not every answer is plainly live")
    size = int(peer.message_size)
    answer = peer.message[:size].tobytes().ljust(LONGEST, b"\0")
    nsec = columns.arrived_nsec - columns.sent_nsec
    return nsec.tobytes() + np.full(3, size, np.int64).tobytes() + answer


def main() -> int:
    """Measure as often as stdin asks."""
    parser = argparse.ArgumentParser()
    parser.add_argument("endpoint")
    parser.add_argument("voltages")
    parser.add_argument("cells", type=int)
    parser.add_argument("interval_us", type=float)
    parser.add_argument("--spin", action="store_true")
    parser.add_argument("--priority", type=int, default=0)
    given = parser.parse_args()
    memory = prepare(given)
    try:
        with connect(given.endpoint) as link:
            memory.probe[0].fd = link.fileno()
            run_flat(memory, make_columns(0), 0)
            if given.priority:
                # Not before: compiling under it would take a core from all else.
                os.sched_setscheduler(0, os.SCHED_FIFO, os.sched_param(given.priority))
            for line in sys.stdin.buffer:
                sys.stdout.buffer.write(run(memory, int(line)))
                sys.stdout.buffer.flush()
    except (GatestepError, OSError) as fault:
        print(f"compiled client: {fault}", file=sys.stderr)
        return 1
    return 0


if __name__ == "__main__":
    sys.exit(main())
