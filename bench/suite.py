"""The selection that ``roundtrip.py --suite`` measures: each target once, within minutes."""

from __future__ import annotations

from collections.abc import Iterator

from experiments import DIRECT, ECHO, Bench, Group, host, lanes, sizes, swaps

SWAP_EVERY_MS = 100.0
CONDUCTANCES, CELLS = [2, 16, 64], [1, 8]


def run(bench: Bench) -> Iterator[Group]:
    """Every group of the selection, one after the other."""
    yield lanes(bench.of(120, 500), "tcp", "C")
    for client in ("compiled", "spinning"):
        yield lanes(bench.of(120, 500), "tcp", client, (DIRECT, ECHO))
    for client in ("C", "compiled"):
        yield host(bench.of(60, 500, load=True), client)
    for client, real_time in (("C", False), ("compiled", False), ("compiled", True)):
        # At 25 to 45 µs a trip, a turn holds one to three swaps.
        yield swaps(bench.of(25, 6000), client, SWAP_EVERY_MS, real_time)
    yield sizes(bench.of(200, 300), "compiled", [1], CONDUCTANCES)
    yield sizes(bench.of(120, 300), "compiled", CELLS, [0])
