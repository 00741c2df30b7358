"""Round trips of the device library in C to the direct lane, beside libzmq to libzmq.

    python bench/device_roundtrip.py [--rounds N] [--trips N] [--transport tcp|ipc] [--load]
                                     [--out FILE.json] [--json]

One side is a rig on the device library, over a plain stream socket, with a served squid
axon; the other a libzmq DEALER in C with a libzmq ROUTER in C that computes nothing. All
stay up while rounds alternate between them, and ratios are taken within rounds.
"""

from __future__ import annotations

import argparse
import json
import shlex
import subprocess
import sys
import tempfile
from contextlib import ExitStack
from dataclasses import asdict
from pathlib import Path
from typing import Any

import contestants
import experiments
from experiments import DIRECT, ECHO, WARM_UP, Bench, Contestant
from ratios import cost, ratio
from rigs import MODEL, Rig

from gatestep import load_model
from gatestep.commands.bench import host, spike_train
from gatestep.errors import GatestepError

DEVICE, SPINNING = "device library", "device library, spinning"
LIBZMQ = "libzmq to libzmq echo"
TARGET = 0.30
"""The most of the p50 ratio."""
VOLTAGES = 20_000
_BRIDGE = contestants.FOLDER.parent / "firmware_bridge"


def build_device(folder: Path) -> Path:
    """Compile ``c/device.c`` with the device library.

    Raises
    ------
    GatestepError
        Without a C compiler, or when it fails.
    """
    example = _BRIDGE / "examples" / "posix_rig"
    sources = [contestants.FOLDER / "c" / "device.c", example / "posix_stream.c"]
    sources += sorted((_BRIDGE / "src").glob("*.c"))
    program = folder / "device"
    command = ["cc", "-std=c99", "-O2", "-o", str(program), *map(str, sources)]
    command += ["-I", str(_BRIDGE / "include"), "-I", str(example)]
    try:
        done = subprocess.run(command, capture_output=True, text=True, timeout=120, check=False)
    except FileNotFoundError as fault:
        raise GatestepError("this benchmark needs a C compiler: no cc on the path") from fault
    if done.returncode:
        raise GatestepError(f"{shlex.join(command)}: {done.stderr.strip()[-1000:]}")
    return program


def _start(stack: ExitStack, bench: Bench, transport: str, name: str) -> Contestant:
    """A server and its client, warmed up."""
    if name == LIBZMQ:
        return experiments._start(stack, bench, transport, "C", ECHO)
    here = Path(tempfile.mkdtemp(dir=bench.folder))
    endpoint = f"ipc://{here}/loop" if transport == "ipc" else experiments._free_port()
    command = Rig().command(endpoint, here)
    stack.enter_context(contestants.server(command, here / "server.log"))
    client = [str(bench.programs["device"]), endpoint, str(bench.voltages), "1"]
    client += ["spin"] if name == SPINNING else []
    made = contestants.process_client(client, here / "client.log")
    contestant = Contestant(stack.enter_context(made))
    contestant.run(name, WARM_UP)
    return contestant


def measure(given: argparse.Namespace) -> dict[str, Any]:
    """Costs and ratios of each transport."""
    libzmq = contestants.find_libzmq(None)
    v_mv = spike_train(load_model(MODEL).spec, VOLTAGES)
    found = {}
    with tempfile.TemporaryDirectory(prefix="gatestep-bench-") as name:
        folder = Path(name)
        programs = {p: contestants.build_c(p, folder, libzmq) for p in ("client", "echo")}
        programs["device"] = build_device(folder)
        bench = Bench(folder, programs, v_mv, given.rounds, given.trips, given.load, _say)
        for transport in given.transport or ("tcp", "ipc"):
            with ExitStack() as stack:
                names = (DEVICE, SPINNING, LIBZMQ)
                running = {n: _start(stack, bench, transport, n) for n in names}
                done = experiments._take_turns(bench, running, transport)
            found[transport] = {
                "costs_us": {n: asdict(cost(rounds)) for n, rounds in done.items()},
                "ratios": {n: asdict(ratio(done[n], done[LIBZMQ])) for n in (DEVICE, SPINNING)},
            }
    return found


def _say(what: str) -> None:
    print(f"device_roundtrip: {what}", file=sys.stderr, end="\r", flush=True)


def _text(result: dict[str, Any]) -> str:
    lines = []
    for transport, found in result["transports"].items():
        lines.append(f"{transport}, {DIRECT}:")
        for name, one in found["costs_us"].items():
            lines.append(f"  {name:26} p50 {one['p50']:7.1f} us   p99 {one['p99']:7.1f} us")
        for name, one in found["ratios"].items():
            p50, p99 = one["p50"], one["p99"]
            lines.append(
                f"  {name:26} / libzmq: p50 {p50['median']:.3f} "
                f"[{p50['low']:.3f}, {p50['high']:.3f}], p99 {p99['median']:.3f} "
                f"(target of p50 {TARGET:.2f}: {'met' if p50['median'] <= TARGET else 'missed'})"
            )
    return "\n".join(lines)


def main() -> int:
    """Run the benchmark; the exit status is 0 also when the target is missed."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").partition("\n")[0])
    parser.add_argument("--rounds", type=int, default=100, help="alternating rounds (100)")
    parser.add_argument("--trips", type=int, default=300, help="round trips in each (300)")
    parser.add_argument("--transport", choices=("tcp", "ipc"), action="append")
    parser.add_argument("--load", action="store_true", help="one busy thread a core")
    parser.add_argument("--json", action="store_true", help="print JSON instead of text")
    parser.add_argument("--out", type=Path, help="write JSON to this file")
    given = parser.parse_args()
    try:
        before = host()
        result = {"host": before, "target_p50": TARGET, "transports": measure(given)}
    except GatestepError as fault:
        print(f"device_roundtrip: {fault}", file=sys.stderr)
        return 1
    if given.out:
        given.out.write_text(json.dumps(result, indent=1, ensure_ascii=False) + "\n")
    print(json.dumps(result, ensure_ascii=False) if given.json else _text(result))
    return 0


if __name__ == "__main__":
    sys.exit(main())
