"""What `gatestep bridge` adds to a round trip, beside the same device straight at the server.

    python bench/serial_bridge.py [--rounds N] [--trips N] [--transport tcp|ipc] [--json]

Two rigs on the device library in C, each with a server of its own that serves a squid axon:
one speaks ZMTP to it, the other serial frames over a pty to a bridge. All stay up while
rounds alternate between them; differences are taken within rounds.
"""

from __future__ import annotations

import argparse
import json
import signal
import subprocess
import sys
import tempfile
import time
from contextlib import ExitStack
from dataclasses import asdict
from pathlib import Path
from typing import Any

import contestants
import experiments
import numpy as np
from device_roundtrip import VOLTAGES, build_device
from experiments import WARM_UP, Bench, Contestant
from ratios import cost, ratio
from rigs import MODEL, Rig

from gatestep import load_model
from gatestep.commands.bench import host, spike_train
from gatestep.errors import GatestepError

STRAIGHT, BRIDGED = "device at the server", "device at a bridge"
_LINK_S = 10.0


def _start(stack: ExitStack, bench: Bench, transport: str, name: str) -> tuple[Contestant, Any]:
    """A server, its client, and the bridge between where there is one; warmed up."""
    here = Path(tempfile.mkdtemp(dir=bench.folder))
    endpoint = f"ipc://{here}/loop" if transport == "ipc" else experiments._free_port()
    command = Rig().command(endpoint, here)
    stack.enter_context(contestants.server(command, here / "server.log"))
    device, bridge = here / "device", None
    client = [str(bench.programs["device"]), f"pty:{device}", str(bench.voltages), "1"]
    if name == STRAIGHT:
        client[1] = endpoint
    made = contestants.process_client(client, here / "client.log")
    contestant = Contestant(stack.enter_context(made))
    if name == BRIDGED:
        end = time.monotonic() + _LINK_S
        while not device.is_symlink() and time.monotonic() < end:
            time.sleep(0.01)
        command = [sys.executable, "-m", "gatestep", "bridge", str(device), "--json"]
        bridge = stack.enter_context(
            contestants.process(
                [*command, "--server", endpoint], here / "bridge.log", stdout=subprocess.PIPE
            )
        )
    contestant.run(name, WARM_UP)
    return contestant, bridge


def measure(given: argparse.Namespace) -> dict[str, Any]:
    """Costs, differences and the bridge's own account, of each transport."""
    v_mv = spike_train(load_model(MODEL).spec, VOLTAGES)
    found = {}
    with tempfile.TemporaryDirectory(prefix="gatestep-bench-") as name:
        folder = Path(name)
        programs = {"device": build_device(folder)}
        bench = Bench(folder, programs, v_mv, given.rounds, given.trips, False, _say)
        for transport in given.transport or ("tcp", "ipc"):
            with ExitStack() as stack:
                started = {n: _start(stack, bench, transport, n) for n in (STRAIGHT, BRIDGED)}
                running = {n: contestant for n, (contestant, _) in started.items()}
                done = experiments._take_turns(bench, running, transport)
                bridge = started[BRIDGED][1]
                bridge.send_signal(signal.SIGINT)
                own = json.loads(bridge.communicate()[0])
            found[transport] = {
                "costs": {n: asdict(cost(rounds)) for n, rounds in done.items()},
                "added_us": _added(done),
                "ratio_p50": asdict(ratio(done[BRIDGED], done[STRAIGHT]).p50),
                "own_us": {
                    way: {p: nsec / 1000 for p, nsec in each.items()}
                    for way, each in own["added_nsec"].items()
                },
            }
    return found


def _added(done: dict[str, Any]) -> dict[str, list[float]]:
    """Median, 10 % and 90 % of the rounds' differences in two percentiles, in us."""
    shares = (50, 99)
    each = {
        n: np.array([np.percentile(np.asarray(r) / 1000, shares) for r in rounds])
        for n, rounds in done.items()
    }
    differences = each[BRIDGED] - each[STRAIGHT]
    return {
        f"p{share}": np.percentile(differences[:, k], (50, 10, 90)).tolist()
        for k, share in enumerate(shares)
    }


def _say(what: str) -> None:
    print(f"serial_bridge: {what}", file=sys.stderr, end="\r", flush=True)


def _text(result: dict[str, Any]) -> str:
    lines = []
    for transport, found in result["transports"].items():
        lines.append(f"{transport}:")
        for name, one in found["costs"].items():
            lines.append(f"  {name:22} p50 {one['p50']:7.1f} us   p99 {one['p99']:7.1f} us")
        for name, (mid, low, high) in found["added_us"].items():
            lines.append(f"  added to {name:13} {mid:11.1f} us   [{low:.1f}, {high:.1f}]")
        for way, each in found["own_us"].items():
            shown = ", ".join(f"{p} {us:.1f}" for p, us in each.items())
            lines.append(f"  by the bridge, {way}: {shown} us")
    return "\n".join(lines)


def main() -> int:
    """Run the benchmark."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").partition("\n")[0])
    parser.add_argument("--rounds", type=int, default=100, help="alternating rounds (100)")
    parser.add_argument("--trips", type=int, default=300, help="round trips in each (300)")
    parser.add_argument("--transport", choices=("tcp", "ipc"), action="append")
    parser.add_argument("--json", action="store_true", help="print JSON instead of text")
    given = parser.parse_args()
    try:
        before = host()
        result = {"host": before, "transports": measure(given)}
    except GatestepError as fault:
        print(f"serial_bridge: {fault}", file=sys.stderr)
        return 1
    print(json.dumps(result, ensure_ascii=False) if given.json else _text(result))
    return 0


if __name__ == "__main__":
    sys.exit(main())
