"""Round trips of gatestep beside a C libzmq echo and a plain Python server, in one run.

    python bench/roundtrip.py [--rounds N] [--trips N] [--out FILE.json] [--figure FILE.png]

Every server and its client stay up for a whole group (one transport, one kind of
client); rounds alternate between the servers, and ratios are taken between medians of
the same round. See README.md beside this file.
"""

from __future__ import annotations

import argparse
import json
import signal
import sys
import tempfile
import time
from collections.abc import Callable
from contextlib import ExitStack
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import contestants
import numpy as np
from contestants import ANSWER_BYTES, INTERVAL_US, MODEL, Client

from gatestep.commands.bench import Spread, host, spike_train
from gatestep.errors import GatestepError
from gatestep.library import load_model
from gatestep.wire import unpack_answer

DIRECT, LIBZMQ = "gatestep direct lane", "gatestep libzmq lane"
ECHO, PLAIN = "C libzmq echo", "plain Python server"
SERVERS = (DIRECT, LIBZMQ, ECHO, PLAIN)
TRANSPORTS, CLIENTS = ("tcp", "ipc"), ("C", "Python")
MOST_OF_ECHO, LEAST_OVER_PLAIN = 1.15, 1.5
RATIOS = ((DIRECT, ECHO), (LIBZMQ, ECHO), (PLAIN, DIRECT), (PLAIN, LIBZMQ))
WARM_UP = 500
VOLTAGES = 20_000
MOST_ROUNDS, MOST_TRIPS = 1000, 100_000


@dataclass(frozen=True)
class Cost:
    """One server's round trips in µs: of each round's median, and over all trips."""

    round_median: Spread
    p99: float
    largest: float


@dataclass(frozen=True)
class Group:
    """All servers over one transport with one kind of client."""

    transport: str
    client: str
    costs: dict[str, Cost]
    ratios: dict[str, Spread]


def measure(
    rounds: int,
    trips: int,
    transports: list[str],
    clients: list[str],
    libzmq: Path,
    say: Callable[[str], None],
) -> list[Group]:
    """Measure every group, one after the other."""
    v_mv = spike_train(load_model(MODEL).spec, VOLTAGES)
    groups = []
    with tempfile.TemporaryDirectory(prefix="gatestep-bench-") as name:
        folder = Path(name)
        voltages = folder / "voltages"
        voltages.write_bytes(v_mv.tobytes())
        programs = {p: contestants.build_c(p, folder, libzmq) for p in ("client", "echo")}
        for transport in transports:
            for client in clients:
                say(f"{transport}, {client} client: starting servers")
                with ExitStack() as stack:
                    running = _start(stack, transport, client, folder, programs, v_mv, voltages)
                    costs = _alternate(running, rounds, trips, f"{transport}, {client} client", say)
                groups.append(_group(transport, client, costs))
    return groups


def _start(
    stack: ExitStack,
    transport: str,
    client: str,
    folder: Path,
    programs: dict[str, Path],
    v_mv: np.ndarray,
    voltages: Path,
) -> dict[str, Client]:
    """Every server with its client, warmed up."""
    here = Path(tempfile.mkdtemp(dir=folder))
    running: dict[str, Client] = {}
    for number, name in enumerate(SERVERS):
        endpoint = f"ipc://{here}/{number}" if transport == "ipc" else _free_port()
        commands = {
            DIRECT: lambda at: contestants.gatestep_command("direct", at, here),
            LIBZMQ: lambda at: contestants.gatestep_command("libzmq", at, here),
            ECHO: lambda at: [str(programs["echo"]), at, str(ANSWER_BYTES)],
            PLAIN: contestants.plain_command,
        }
        stack.enter_context(contestants.server(commands[name](endpoint), here / f"{number}.log"))
        if client == "C":
            log = here / f"{number}-client.log"
            made = contestants.c_client(programs["client"], endpoint, voltages, log)
            running[name] = stack.enter_context(made)
        else:
            running[name] = stack.enter_context(contestants.python_client(endpoint, v_mv))
        first = running[name].run(WARM_UP)
        contestants.check_answer(name, first, name != ECHO, unpack_answer)
    return running


def _free_port() -> str:
    import socket

    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return f"tcp://127.0.0.1:{probe.getsockname()[1]}"


def _alternate(
    running: dict[str, Client], rounds: int, trips: int, what: str, say: Callable[[str], None]
) -> dict[str, list[np.ndarray]]:
    """Round trips in ns of every round; each round begins with another server."""
    costs: dict[str, list[np.ndarray]] = {name: [] for name in running}
    names = list(running)
    for k in range(rounds):
        say(f"{what}: round {k + 1} of {rounds}")
        turn = k % len(names)
        for name in names[turn:] + names[:turn]:
            done = running[name].run(trips)
            contestants.check_answer(name, done, name != ECHO, unpack_answer)
            costs[name].append(done.nsec)
    return costs


def _group(transport: str, client: str, costs: dict[str, list[np.ndarray]]) -> Group:
    medians = {n: [float(np.median(r)) / 1e3 for r in rounds] for n, rounds in costs.items()}
    every = {n: np.concatenate(rounds) / 1e3 for n, rounds in costs.items()}
    summary = {
        n: Cost(Spread.over(medians[n]), float(np.percentile(t, 99)), float(t.max()))
        for n, t in every.items()
    }
    ratios = {
        f"{a} / {b}": Spread.over([x / y for x, y in zip(medians[a], medians[b], strict=True)])
        for a, b in RATIOS
    }
    return Group(transport, client, summary, ratios)


def within_targets(groups: list[Group]) -> dict[str, bool]:
    """Whether each target is met in every group measured."""
    targets = {
        f"{lane} at most {MOST_OF_ECHO} of the {ECHO}": all(
            g.ratios[f"{lane} / {ECHO}"].median <= MOST_OF_ECHO for g in groups
        )
        for lane in (DIRECT, LIBZMQ)
    }
    slow = [g.ratios[f"{PLAIN} / {DIRECT}"].median for g in groups]
    name = f"{PLAIN} at least {LEAST_OVER_PLAIN} times the {DIRECT}"
    return {**targets, name: min(slow) >= LEAST_OVER_PLAIN}


def as_json(groups: list[Group], rounds: int, trips: int, at: dict[str, str]) -> dict[str, Any]:
    """The result for programs; round trips in µs."""
    return {
        "host": at,
        "rounds": rounds,
        "trips": trips,
        "model": MODEL,
        "interval_us": INTERVAL_US,
        "groups": [asdict(group) for group in groups],
        "targets": within_targets(groups),
    }


def as_text(result: dict[str, Any], groups: list[Group]) -> str:
    """The result for a person."""
    h = result["host"]
    lines = [
        f"gatestep {h['gatestep']}, numba {h['numba']}, {h['libzmq']}; {h['cpu']}, "
        f"load {h['load']}; {h['date']}",
        f"round trips in µs: median over {result['rounds']} alternating rounds of "
        f"{result['trips']} trips [10 %, 90 %]",
    ]
    for group in groups:
        lines += ["", f"{group.transport}, {group.client} client"]
        for name, cost in group.costs.items():
            lines.append(f"  {name:<24}{cost.round_median:.1f}  p99 {cost.p99:.0f}")
        lines += [f"  {name}: {ratio:.2f}" for name, ratio in group.ratios.items()]
    lines.append("")
    lines += [f"{'met' if met else 'NOT met'}: {t}" for t, met in result["targets"].items()]
    return "\n".join(lines)


def draw(groups: list[Group], path: Path, title: str) -> None:
    """Draw every group's medians and spreads as bars."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(10, 1.2 + 1.6 * ((len(groups) + 1) // 2)), layout="constrained")
    panels = figure.subplots((len(groups) + 1) // 2, 2, squeeze=False, sharex=True).ravel()
    for axes in panels[len(groups) :]:
        axes.set_visible(False)
    colours = ("#1b6ca8", "#6aa5d0", "#8a8a8a", "#c8553d")
    for axes, group in zip(panels, groups, strict=False):
        names = list(group.costs)
        spreads = [group.costs[name].round_median for name in names]
        sides = [[s.median - s.low for s in spreads], [s.high - s.median for s in spreads]]
        middle = [s.median for s in spreads]
        axes.barh(names, middle, xerr=sides, color=colours, height=0.7, capsize=3)
        axes.invert_yaxis()
        axes.set_title(f"{group.transport}, {group.client} client", fontsize=10)
        axes.spines[["top", "right"]].set_visible(False)
        axes.set_xlabel("round trip, median (µs)")
    figure.suptitle(title, fontsize=10.5)
    figure.savefig(path, dpi=150)


class Progress:
    """A line on stderr for each thing begun, at most two a second."""

    def __init__(self) -> None:
        self._next_s = 0.0

    def __call__(self, what: str) -> None:
        """Say what is being done."""
        if time.monotonic() >= self._next_s:
            self._next_s = time.monotonic() + 0.5
            print(f"roundtrip: {what}", file=sys.stderr, flush=True)


def _arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=(__doc__ or "").partition("\n")[0])
    parser.add_argument("--rounds", type=int, default=100, help="alternating rounds (100)")
    parser.add_argument("--trips", type=int, default=300, help="round trips in each (300)")
    parser.add_argument("--transport", choices=TRANSPORTS, action="append", help="default both")
    parser.add_argument("--client", choices=CLIENTS, action="append", help="default both")
    parser.add_argument("--libzmq", type=Path, help="for the C programs; default pyzmq's own")
    parser.add_argument("--json", action="store_true", help="print JSON instead of text")
    parser.add_argument("--out", type=Path, help="write JSON to this file")
    parser.add_argument("--figure", type=Path, help="draw to this PNG file")
    return parser.parse_args()


def main() -> int:
    """Run the benchmark; the exit status is 0 also when a target is missed."""
    given = _arguments()
    signal.signal(signal.SIGTERM, lambda *_: sys.exit(143))
    try:
        for name, count, most in (
            ("--rounds", given.rounds, MOST_ROUNDS),
            ("--trips", given.trips, MOST_TRIPS),
        ):
            if not 1 <= count <= most:
                raise GatestepError(f"{name} {count}: give 1 to {most}")
        libzmq = contestants.find_libzmq(given.libzmq)
        before = host()  # the load of others, not of the benchmark itself
        groups = measure(
            given.rounds,
            given.trips,
            given.transport or list(TRANSPORTS),
            given.client or list(CLIENTS),
            libzmq,
            Progress(),
        )
    except GatestepError as fault:
        print(f"roundtrip: {fault}", file=sys.stderr)
        return 1
    result = as_json(groups, given.rounds, given.trips, {**before, "libzmq": libzmq.name})
    if given.out:
        given.out.write_text(json.dumps(result, indent=1, ensure_ascii=False) + "\n")
    if given.figure:
        draw(groups, given.figure, f"{result['host']['cpu']}; {result['host']['date'][:10]}")
    print(json.dumps(result, ensure_ascii=False) if given.json else as_text(result, groups))
    return 0


if __name__ == "__main__":
    sys.exit(main())
