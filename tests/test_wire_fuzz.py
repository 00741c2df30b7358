"""The decoder under mutated and random bytes, compiled and not, and a live server."""

from __future__ import annotations

import math
import os
import random
import subprocess
import sys
from pathlib import Path

import msgpack
import numpy as np
import pytest
from conftest import RawRig
from test_wire import TOP, Decoder, agree, forms, headers, reference

from gatestep.specs import MAX_CELLS
from gatestep.wire import (
    MALFORMED,
    MAX_MESSAGE,
)


@pytest.fixture(scope="module")
def decode():
    return Decoder()


def mutated(choice: random.Random, seeds: list[bytes]) -> bytes:
    """A valid message with a few bytes changed, lost, gained, or joined to another's."""
    message = bytearray(choice.choice(seeds))
    for _ in range(choice.choice((1, 1, 1, 2, 3, 8))):
        at = choice.randrange(len(message) + 1)
        kind = choice.randrange(7)
        if kind == 0 and at < len(message):
            message[at] ^= 1 << choice.randrange(8)
        elif kind == 1 and at < len(message):
            message[at] = choice.randrange(256)
        elif kind == 2 and at < len(message):
            message[at] = choice.choice(
                (0xC0, 0xCA, 0xCB, 0xCC, 0xCF, 0xD0, 0xD3, 0xDC, 0xDD, 0x95)
            )
        elif kind == 3:
            del message[at : at + choice.randrange(1, 9)]
        elif kind == 4:
            message[at:at] = choice.randbytes(choice.randrange(1, 5))
        elif kind == 5:
            other = choice.choice(seeds)
            message[at:] = other[choice.randrange(len(other)) :]
        else:
            message += message[at:]
    return bytes(message[:MAX_MESSAGE])


def fuzz_seeds(choice: random.Random, count: int) -> list[bytes]:
    """Valid samples of one cell in mixed widths."""
    seeds = []
    for _ in range(count):
        items = [
            choice.randrange(2 ** choice.choice((7, 16, 32, 63))),
            choice.choice((choice.randrange(2**32), choice.random() * 1e6)),
            choice.choice((None, choice.randrange(2**16))),
            choice.choice((None, choice.randrange(300), choice.random())),
            choice.choice((choice.uniform(-150, 100), choice.randrange(-200, 200), math.nan)),
        ]
        parts = [choice.choice(forms(x)) for x in items]
        seeds.append(choice.choice(headers(5)) + b"".join(parts))
    return seeds


def test_fuzz_decoder(decode):
    """Invariant: the decoder stays inside 100,000 mutated messages and accepts only samples.

    The messages end where the process may not read. Accepted are exactly those that the
    reference implementation decodes to a valid sample, with the same numbers.
    """
    choice = random.Random(20240601)
    seeds = fuzz_seeds(choice, 500)
    accepted = 0
    for _ in range(100_000):
        message = mutated(choice, seeds)
        found, expected = decode(message, 1), reference(message, 1)
        assert agree(found, expected), message.hex()
        accepted += found is not None
    assert 5_000 < accepted < 95_000


def test_fuzz_random_bytes(decode):
    """Invariant: random bytes behind a sample's header never make the decoder read beyond them.

    That holds at any number of cells, and for the decoder of answers too.
    """
    generator = np.random.default_rng(7)
    for _ in range(20_000):
        cells = int(generator.integers(1, MAX_CELLS + 1))
        message = generator.bytes(int(generator.integers(0, 40)))
        as_sample = bytes([0x94 + cells]) + message
        assert agree(decode(as_sample, cells), reference(as_sample, cells))
        decode.read_answer(bytes([0x93 + cells]) + message, cells)
        decode.read_answer(b"\x93\xc0" + message, cells)


def test_live_server_outlives_mutated_messages(serving):
    """Invariant: after thousands of mutated messages valid samples are still answered rightly.

    Each malformed one is answered as such and counted.
    """
    choice = random.Random(77)
    seeds = fuzz_seeds(choice, 100)
    server = serving()
    malformed = 0
    with RawRig(server.server.endpoints()["loop"]) as rig:
        for _ in range(3_000):
            message = mutated(choice, seeds)
            reply = rig.tell(message)
            if reference(message, 1) is None:
                malformed += 1
                assert reply == (None, MALFORMED, 0, [])
            else:
                assert reply.seq == msgpack.unpackb(message)[0]
                assert len(reply.i_pa) == 1
        newest = server.control.status()["seq"]
        after = rig.ask(newest + 1, -65.0, t_us=1) if newest < TOP else None
        with RawRig(server.server.endpoints()["loop"]) as stranger:
            refused = stranger.ask(5, -65.0)
    assert after is None or after.seq == newest + 1
    assert (refused.seq, refused.flags, refused.i_pa) == (5, 64, [0.0])
    assert server.control.status()["malformed"] == malformed
    assert 1_000 < malformed < 3_000


def test_uncompiled():
    """The codec's own tests also hold with the compiler switched off."""
    codec = Path(__file__).with_name("test_wire.py")
    run = subprocess.run(
        [
            sys.executable, "-m", "pytest", "-p", "no:cacheprovider",
            "--hypothesis-profile=few", "-n", "0", str(codec),
        ],
        check=False,
        env={**os.environ, "NUMBA_DISABLE_JIT": "1"},
        cwd=Path(__file__).parents[1],
        capture_output=True,
        text=True,
        timeout=300,
    )  # fmt: skip
    assert run.returncode == 0, run.stdout[-3000:] + run.stderr[-2000:]
    assert "passed" in run.stdout
