"""Round trips of gatestep beside a C libzmq echo and a plain Python server, in one run.

    python bench/roundtrip.py [--rounds N] [--trips N] [--out FILE.json] [--figure FILE.png]
    python bench/roundtrip.py --suite

Every server and its client stay up for a whole group; rounds alternate between the
contestants, and ratios are taken between the same rounds. See README.md beside this file.
"""

from __future__ import annotations

import argparse
import json
import signal
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import contestants
import experiments
import suite
from experiments import CLIENTS, Bench, Group
from report import as_json, as_text, draw
from rigs import MODEL

from gatestep import load_model
from gatestep.commands.bench import host, spike_train
from gatestep.errors import GatestepError
from gatestep.specs import MAX_CELLS, MAX_CONDUCTANCES

TRANSPORTS = ("tcp", "ipc")
RESULTS = contestants.FOLDER / "results"
VOLTAGES = 20_000
MOST_ROUNDS, MOST_TRIPS = 1000, 100_000
LEAST_SWAP_MS, MOST_SWAP_MS = 1.0, 60_000.0


class Progress:
    """A line on stderr for each thing begun, at most two a second."""

    def __init__(self) -> None:
        self._next_s = 0.0

    def __call__(self, what: str) -> None:
        """Say what is being done."""
        if time.monotonic() >= self._next_s:
            self._next_s = time.monotonic() + 0.5
            print(f"roundtrip: {what}", file=sys.stderr, flush=True)


def measure(given: argparse.Namespace, libzmq: Path) -> list[Group]:
    """Measure every group asked for, one after the other."""
    v_mv = spike_train(load_model(MODEL).spec, VOLTAGES)
    with tempfile.TemporaryDirectory(prefix="gatestep-bench-") as name:
        folder = Path(name)
        programs = {p: contestants.build_c(p, folder, libzmq) for p in ("client", "echo")}
        bench = Bench(folder, programs, v_mv, given.rounds, given.trips, given.load, Progress())
        return list(suite.run(bench) if given.suite else _groups(bench, given))


def _groups(bench: Bench, given: argparse.Namespace) -> Iterator[Group]:
    """The groups that the options name: the lanes where they name no others."""
    sized = given.cells or given.conductances
    if not (sized or given.swap_every or given.host):
        for transport in given.transport or TRANSPORTS:
            for client in given.client or ("C", "Python", "compiled"):
                yield experiments.lanes(bench, transport, client)
    for client in given.client or ("C", "compiled"):
        if given.host and not given.swap_every:
            yield experiments.host(bench, client)
        if given.swap_every:
            yield experiments.swaps(bench, client, given.swap_every, given.host)
        if sized:
            yield experiments.sizes(bench, client, given.cells or [1], given.conductances or [0])


def _check(given: argparse.Namespace) -> None:
    """Refuse what cannot be measured before anything is started."""
    for name, count, most in (
        ("--rounds", given.rounds, MOST_ROUNDS),
        ("--trips", given.trips, MOST_TRIPS),
        *(("--cells", n, MAX_CELLS) for n in given.cells),
        *(("--conductances", n, MAX_CONDUCTANCES) for n in given.conductances),
    ):
        if not 1 <= count <= most:
            raise GatestepError(f"{name} {count}: give 1 to {most}")
    every_ms = given.swap_every
    if every_ms is not None and not LEAST_SWAP_MS <= every_ms <= MOST_SWAP_MS:
        raise GatestepError(
            f"--swap-every {every_ms:g}: give {LEAST_SWAP_MS:g} to {MOST_SWAP_MS:g} ms"
        )
    if (given.cells or given.conductances or every_ms or given.host) and (
        "Python" in (given.client or ()) or "ipc" in (given.transport or ())
    ):
        raise GatestepError(
            "--client Python and --transport ipc go with the lanes only, not with --cells, "
            "--conductances, --swap-every or --host"
        )


def _counts(text: str) -> list[int]:
    return [int(part) for part in text.split(",")]


def _arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=(__doc__ or "").partition("\n")[0])
    add = parser.add_argument
    add("--rounds", type=int, default=100, help="alternating rounds (100)")
    add("--trips", type=int, default=300, help="round trips in each (300)")
    add("--transport", choices=TRANSPORTS, action="append", help="default both")
    add("--client", choices=CLIENTS, action="append", help="default all but spinning")
    add("--load", action="store_true", help="one busy thread a core while rounds run")
    add("--cells", type=_counts, default=[], help="compare servers of so many cells: 1,8")
    add("--conductances", type=_counts, default=[], help="of so many in a cell: 2,16,64")
    add("--swap-every", type=float, metavar="MS", help="swap models during every other turn")
    add("--host", action="store_true", help="SCHED_FIFO at both ends, compared with none")
    add("--suite", action="store_true", help="the selection in README.md, to bench/results")
    add("--libzmq", type=Path, help="for the C programs; default pyzmq's own")
    add("--json", action="store_true", help="print JSON instead of text")
    add("--out", type=Path, help="write JSON to this file")
    add("--figure", type=Path, help="draw to this PNG file")
    return parser.parse_args()


def _write(given: argparse.Namespace, result: dict[str, Any], groups: list[Group]) -> None:
    out = given.out or (RESULTS / "suite.json" if given.suite else None)
    figure = given.figure or (RESULTS / "suite.png" if given.suite else None)
    if out:
        out.write_text(json.dumps(result, indent=1, ensure_ascii=False) + "\n")
    if figure:
        draw(groups, figure, f"{result['host']['cpu']}; {result['host']['date'][:10]}")


def main() -> int:
    """Run the benchmark; the exit status is 0 also when a target is missed."""
    given = _arguments()
    signal.signal(signal.SIGTERM, lambda *_: sys.exit(143))
    try:
        _check(given)
        libzmq = contestants.find_libzmq(given.libzmq)
        before = host()  # the load of others, not of the benchmark itself
        groups = measure(given, libzmq)
    except GatestepError as fault:
        print(f"roundtrip: {fault}", file=sys.stderr)
        return 1
    result = as_json(groups, {**before, "libzmq": libzmq.name})
    _write(given, result, groups)
    print(json.dumps(result, ensure_ascii=False) if given.json else as_text(result, groups))
    return 0


if __name__ == "__main__":
    sys.exit(main())
