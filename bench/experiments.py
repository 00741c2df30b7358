"""The groups of the round-trip benchmark: who is started, and who is compared with whom.

All contestants of a group stay up while rounds go around them in turn, so that a
machine which slows down slows every one of them.
"""

from __future__ import annotations

import socket
import sys
import tempfile
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, ExitStack, contextmanager, nullcontext
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import contestants
import numpy as np
from contestants import Client
from ratios import Cost, Growth, Ratio, Rounds, cost, growth, ratio
from rigs import INTERVAL_US, MODEL, Rig, copies
from swapper import Swapper

from gatestep import library, load_model
from gatestep.burners import Burners, usable_cores
from gatestep.commands.bench import Stepped, alternate
from gatestep.errors import GatestepError
from gatestep.specs import USUAL_PRIORITY

DIRECT, LIBZMQ = "gatestep direct lane", "gatestep libzmq lane"
ECHO, PLAIN = "C libzmq echo", "plain Python server"
LANES = ((DIRECT, ECHO), (LIBZMQ, ECHO), (PLAIN, DIRECT), (PLAIN, LIBZMQ))
QUIET, SWAPPED = "without swaps", "with swaps"
SERVERS = (DIRECT, LIBZMQ, ECHO, PLAIN)
USUAL, REAL_TIME = "as any program", "SCHED_FIFO at both ends"
CLIENTS = ("C", "Python", "compiled", "spinning")
WARM_UP = 500
LONGEST_LOAD_S = 600.0
STEP_ROUNDS = 30


@dataclass
class Bench:
    """What every group needs: programs, voltages, how much to measure, whom to tell."""

    folder: Path
    programs: dict[str, Path]
    v_mv: np.ndarray
    rounds: int
    trips: int
    load: bool
    say: Callable[[str], None]

    def __post_init__(self) -> None:
        self.voltages = self.folder / "voltages"
        self.voltages.write_bytes(self.v_mv.tobytes())

    def of(self, rounds: int, trips: int, load: bool = False) -> Bench:
        """The same with other counts."""
        return Bench(self.folder, self.programs, self.v_mv, rounds, trips, load, self.say)


@dataclass
class Contestant:
    """A client of a running server, and what else goes on during its turns."""

    client: Client
    live: bool = True
    cells: int = 1
    during: Callable[[], AbstractContextManager[Any]] = nullcontext

    def run(self, name: str, trips: int) -> np.ndarray:
        """One turn: round trips in ns."""
        with self.during():
            done = self.client.run(trips)
        contestants.check_answer(name, done, self.live, self.cells)
        return done.nsec


@dataclass(frozen=True)
class Group:
    """What one group of contestants gave."""

    title: str
    transport: str
    client: str
    load: bool
    rounds: int
    trips: int
    costs: dict[str, Cost]
    ratios: dict[str, Ratio]
    growths: dict[str, Growth] = field(default_factory=dict)
    facts: dict[str, Any] = field(default_factory=dict)


def lanes(bench: Bench, transport: str, client: str, servers: tuple[str, ...] = SERVERS) -> Group:
    """Both lanes beside the echo and the plain server; the compiled client's echo has a C one."""
    with ExitStack() as stack:
        running = {}
        for name in servers:
            rig = {DIRECT: Rig(), LIBZMQ: Rig("libzmq")}.get(name)
            # The compiled client reads answers, and an echo's are none.
            kind = "C" if name == ECHO and client != "Python" else client
            running[name] = _start(stack, bench, transport, kind, rig or name)
        title = f"{transport}, {client} client"
        done = _take_turns(bench, running, title)
    return _group(bench, title, transport, client, done, tuple(p for p in LANES if {*p} <= {*done}))


def host(bench: Bench, client: str) -> Group:
    """The direct lane with real-time policy at both ends, beside the same without."""
    with ExitStack() as stack:
        running = {
            name: _start(stack, bench, "tcp", client, Rig(real_time=real_time))
            for name, real_time in ((USUAL, False), (REAL_TIME, True))
        }
        title = f"host set-up, {client} client"
        done = _take_turns(bench, running, title)
    return _group(bench, title, "tcp", client, done, ((REAL_TIME, USUAL),))


def swaps(bench: Bench, client: str, every_ms: float, real_time: bool = False) -> Group:
    """One server of the direct lane, in every second turn with swaps."""
    rig = Rig(real_time=real_time)
    copy = bench.folder / "copy.toml"
    copy.write_bytes((library.shipped_folder() / f"{MODEL}.toml").read_bytes())
    with ExitStack() as stack:
        folder = Path(tempfile.mkdtemp(dir=bench.folder))
        quiet = _start(stack, bench, "tcp", client, rig, folder)
        swapper = Swapper(rig.control_endpoint(folder), (str(copy), MODEL), every_ms)
        stack.callback(swapper.close)
        running = {QUIET: quiet, SWAPPED: Contestant(quiet.client, during=swapper.working)}
        before = swapper.counters()
        title = f"a swap every {every_ms:g} ms, {client} client"
        title += f", {REAL_TIME}" if real_time else ""
        done = _take_turns(bench, running, title)
        counted = {name: n - before[name] for name, n in swapper.counters().items()}
    facts = {**swapper.facts(), "counted": counted}
    return _group(bench, title, "tcp", client, done, ((SWAPPED, QUIET),), facts)


def sizes(bench: Bench, client: str, cells: list[int], conductances: list[int]) -> Group:
    """The direct lane with so many cells of so many conductances, beside the smallest."""
    pairs = sorted((c, g) for c in cells for g in conductances)
    names = {_size_name(*pair): pair for pair in pairs}
    with ExitStack() as stack:
        running = {
            name: _start(stack, bench, "tcp", client, Rig(cells=c, conductances=g))
            for name, (c, g) in names.items()
        }
        title = f"sizes, {client} client"
        done = _take_turns(bench, running, title)
    first, *others = names
    step_us = _step_us(bench, pairs)
    growths = {
        f"{name} - {first}": growth(
            done[name], done[first], step_us[names[name]] - step_us[names[first]]
        )
        for name in others
    }
    ratios = tuple((name, first) for name in others)
    return _group(bench, title, "tcp", client, done, ratios, growths=growths)


def _size_name(cells: int, conductances: int) -> str:
    some = f"{conductances} conductances" if conductances else MODEL
    return f"{cells} cell{'s' if cells > 1 else ''} of {some}"


def _step_us(bench: Bench, pairs: list[tuple[int, int]]) -> dict[tuple[int, int], float]:
    """What a tick of each size costs in the kernel alone, in µs, as ``bench step`` measures."""
    models = {g: copies(g) if g else load_model(MODEL).spec for _, g in pairs}
    runs = {g: Stepped(model, bench.v_mv) for g, model in models.items()}
    costs = alternate(runs, STEP_ROUNDS, len(bench.v_mv) - 1, bench.say)
    return {(c, g): c * float(np.median(costs[g])) / 1e3 for c, g in pairs}


def _start(
    stack: ExitStack,
    bench: Bench,
    transport: str,
    client: str,
    which: Rig | str,
    folder: Path | None = None,
) -> Contestant:
    """A server and its client, warmed up; ``which`` is a rig, the echo or the plain server."""
    bench.say(f"{transport}, {client} client: starting servers")
    here = folder or Path(tempfile.mkdtemp(dir=bench.folder))
    endpoint = f"ipc://{here}/loop" if transport == "ipc" else _free_port()
    rig = which if isinstance(which, Rig) else Rig()
    if isinstance(which, Rig):
        command = rig.command(endpoint, here)
    elif which == ECHO:
        size = contestants.answer_bytes(rig.cells)
        command = [str(bench.programs["echo"]), endpoint, str(size)]
    else:
        command = contestants.plain_command(endpoint)
    stack.enter_context(contestants.server(command, here / "server.log"))
    made = _client(bench, client, endpoint, rig, here / "client.log")
    contestant = Contestant(stack.enter_context(made), which != ECHO, rig.cells)
    contestant.run(str(which), WARM_UP)
    return contestant


def _client(
    bench: Bench, client: str, endpoint: str, rig: Rig, log: Path
) -> AbstractContextManager[Client]:
    priority = USUAL_PRIORITY if rig.real_time else 0
    if client == "Python":
        return contestants.python_client(endpoint, bench.v_mv)
    what = [endpoint, str(bench.voltages), str(rig.cells)]
    if client == "C":
        return contestants.process_client([str(bench.programs["client"]), *what], log, priority)
    command = [sys.executable, str(contestants.FOLDER / "compiled_client.py"), *what]
    command += [str(INTERVAL_US), f"--priority={priority}"]
    command += ["--spin"] if client == "spinning" else []
    return contestants.process_client(command, log)


def _free_port() -> str:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return f"tcp://127.0.0.1:{probe.getsockname()[1]}"


def _take_turns(bench: Bench, running: dict[str, Contestant], title: str) -> dict[str, Rounds]:
    """Round trips in ns of every round; each round begins with another contestant."""
    done: dict[str, Rounds] = {name: [] for name in running}
    names = list(running)
    with _load() if bench.load else nullcontext():
        for k in range(bench.rounds):
            bench.say(f"{title}: round {k + 1} of {bench.rounds}")
            turn = k % len(names)
            for name in names[turn:] + names[:turn]:
                done[name].append(running[name].run(name, bench.trips))
    return done


@contextmanager
def _load() -> Iterator[None]:
    """One busy thread a core, ended with the block.

    Raises
    ------
    GatestepError
        When it ended before what it was to disturb.
    """
    with Burners(usable_cores(), LONGEST_LOAD_S) as burners:
        yield
        if burners.running < usable_cores():
            raise GatestepError(
                f"the load ended after {LONGEST_LOAD_S:g} s, before the rounds did; "
                "give fewer --rounds or --trips"
            )


def _group(
    bench: Bench,
    title: str,
    transport: str,
    client: str,
    done: dict[str, Rounds],
    compared: tuple[tuple[str, str], ...],
    facts: dict[str, Any] | None = None,
    growths: dict[str, Growth] | None = None,
) -> Group:
    return Group(
        title + (", under load" if bench.load else ""),
        transport,
        client,
        bench.load,
        bench.rounds,
        bench.trips,
        {name: cost(rounds) for name, rounds in done.items()},
        {f"{a} / {b}": ratio(done[a], done[b]) for a, b in compared},
        growths or {},
        facts or {},
    )
