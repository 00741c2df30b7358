"""On the device a fault of any kind in any order never harms, and a sample never lies.

The C library runs on a fake board (``firmware_fake``); every byte it sends and every
current it writes is compared with ``firmware_naive``, and bounds are watched beside that.
"""

from __future__ import annotations

import ctypes
import random
from collections import Counter
from itertools import pairwise

import msgpack
import numpy as np
import pytest
from firmware_fake import CLOCK_RATES, WRAP, Board, Rates
from firmware_naive import Naive, Setting, frame
from hypothesis import Phase, given, settings
from hypothesis import strategies as st

TICKS = 120
PLAIN = Rates()


class Watch:
    """What must hold whatever the description says, from the callbacks alone."""

    def __init__(self, setting: Setting) -> None:
        self.set = setting
        self.last = [0.0] * setting.cells
        self.seen = 0
        self.heard_us = 0
        self.ticks, self.ticked_us = 0, -1

    def check_tick(self, board: Board, begun_us: int) -> None:
        """After a tick as well: none that no time has led up to, nor one too many, lets flow."""
        self.ticks += 1
        self.check(board, begun_us)
        if begun_us == self.ticked_us:
            assert not any(self.last), "a current by a clock that stands still"
        if self.ticks > self.set.silence_us / self.set.interval_us + 2:
            assert not any(self.last), "a current after as many ticks as the silence has"
        self.ticked_us = begun_us

    def check(self, board: Board, begun_us: int) -> None:
        """After each call: limits, slew, and no current after the silence."""
        came = any(entry[0] == "received" and entry[1] for entry in board.log)
        for _, i_pa in board.written[self.seen :]:
            for k, now_pa in enumerate(i_pa):
                assert abs(now_pa) <= np.float32(self.set.limit_pa[k])
                step_pa = self.set.slew_pa_per_ms[k] * self.set.interval_us * 1e-3
                close = abs(now_pa - self.last[k]) <= step_pa * (1 + 1e-5)
                assert now_pa == 0.0 or close, (now_pa, self.last[k], step_pa)
            self.last = i_pa
        self.seen = len(board.written)
        if came:
            self.heard_us, self.ticks = board.age, 0
        elif begun_us - self.heard_us >= self.set.silence_us:
            assert not any(self.last), "a current after the silence time-out"
        if board.state != "running":
            assert not any(self.last), f"a current while {board.state}"


def _play(setting: Setting, rates: Rates, seed: int, ticks: int = TICKS) -> tuple[Board, Watch]:
    """A device's life of so many ticks, compared call by call."""
    rng = random.Random(seed)
    start = rng.choice([0, WRAP - 20 * setting.interval_us, rng.randrange(WRAP)])
    board = Board(setting, rng, rates, start)
    model, watch = Naive(setting, 0), Watch(setting)
    model.init(board.log)

    def connect():
        begun = board.age
        model.connect(begun, board.connect())
        watch.check(board, begun)

    def poll():
        begun = board.age
        model.poll(begun, board.poll())
        watch.check(board, begun)

    connect()
    due = board.now + setting.interval_us
    for _ in range(ticks):
        if rates.odd_clock and rng.random() < rates.odd_clock:
            board.set_clock(rng.choice(CLOCK_RATES))
        if rng.random() < rates.missed_tick:
            due += setting.interval_us * rng.choice([1, 2, 5, 4000 // setting.interval_us])
            due += 130_000 * (rng.random() < 0.05)
        late = rng.randrange(setting.interval_us // 4) if rates.missed_tick else 0
        while board.now < due + late:
            step = max(setting.interval_us, (due - board.now) // 3)
            board.now = min(board.now + rng.randrange(1, step), due + late)
            poll()
        begun = board.age
        log = board.tick()
        model.tick(begun, board.v_mv, log)
        watch.check_tick(board, begun)
        due += setting.interval_us
        board.line.gone = board.line.gone or rng.random() < rates.lost_link / 4
        if board.broken and rng.random() < 0.4:
            connect()
    return board, watch


@st.composite
def _settings(draw):
    cells = draw(st.integers(1, 3))
    interval_us = draw(st.sampled_from([5, 20, 50, 100]))
    return Setting(
        serial=draw(st.booleans()),
        on_arrival=draw(st.booleans()),
        interval_us=interval_us,
        silence_us=interval_us * draw(st.sampled_from([1, 3, 8, 30])),
        limit_pa=tuple(draw(st.sampled_from([10.0, 999.9, 30_000.0])) for _ in range(cells)),
        slew_pa_per_ms=tuple(draw(st.sampled_from([1e3, 1e5, 1e8])) for _ in range(cells)),
        window_mv=(-120.0, 90.0),
        room=draw(st.sampled_from([256, 2048])),
        ring=draw(st.sampled_from([4, 64])),
        greeting_us=draw(st.sampled_from([0, 0, interval_us * 3])),
    )


_SHARES = st.sampled_from([0.0, 0.0, 0.02, 0.2])
_RATES = st.builds(
    Rates,
    drop=_SHARES,
    duplicate=_SHARES,
    corrupt=_SHARES,
    truncate=_SHARES,
    delay=_SHARES,
    nonsense=_SHARES,
    input_fault=_SHARES,
    output_fault=_SHARES,
    missed_tick=_SHARES,
    lost_link=_SHARES,
    stall=_SHARES,
    odd_clock=_SHARES,
)


# Not shrunk: a seed's life has no simpler one near it, and looking takes minutes.
@settings(max_examples=100, phases=[Phase.explicit, Phase.generate])
@given(_settings(), _RATES, st.integers(0, 2**32))
def test_whatever_goes_wrong_the_device_does_as_described(setting, rates, seed):
    """Every byte and every current are those of the plain model; the bounds always hold."""
    _play(setting, rates, seed)


ONE = Setting(
    serial=False,
    on_arrival=False,
    interval_us=50,
    silence_us=1000,
    limit_pa=(1000.0,),
    slew_pa_per_ms=(1e8,),
    window_mv=(-120.0, 90.0),
    room=1024,
    ring=64,
)


def _changed(setting, **changes):
    return Setting(**{**setting.__dict__, **changes})


@pytest.mark.parametrize("serial", [False, True])
@pytest.mark.parametrize(("on_arrival", "behind"), [(False, 2), (True, 1)])
def test_a_sound_loop_reports_what_the_wire_promises(serial, on_arrival, behind):
    """next-tick: in_force is seq - 2; on-arrival: seq - 1; lags within the tick they must be in."""
    setting = _changed(ONE, serial=serial, on_arrival=on_arrival, limit_pa=(4000.0,))
    board, _ = _play(setting, Rates(), seed=1)
    samples = [s for s in board.host.samples[4:] if s[2] is not None]
    assert len(samples) > 0.6 * TICKS  # one answer in ten is beyond the limit, and so clipped
    least, most = (0, 50 + 4) if on_arrival else (50, 100 + 4)
    for seq, _, in_force, lag_us, _ in samples:
        assert seq - in_force in (behind, behind + 1)
        assert least <= lag_us <= most + 50 * (seq - in_force - behind)
    assert board.counter(5) > 0
    assert board.counter(6) == 0


def test_the_faults_do_happen():
    """Over some seeds every counter moves, currents flow, and all four states are seen."""
    rates = Rates(*[0.03] * 12)
    counted, flowed, states = Counter(), 0, set()  # type: ignore[var-annotated]
    for seed in range(12):
        for serial in (False, True):
            board, _ = _play(_changed(ONE, serial=serial), rates, seed)
            counted.update({k: board.counter(k) for k in range(8)})
            flowed += sum(1 for _, i_pa in board.written if any(i_pa))
            states.add(board.state)
    assert all(counted[k] > 0 for k in range(8)), counted
    assert flowed > 1000
    assert len(states) >= 2


@pytest.mark.parametrize("serial", [False, True])
def test_after_the_last_answer_current_flows_for_the_time_out_and_no_longer(serial):
    """The last valid answer's current is taken to 0 pA within a poll of the silence time-out."""
    setting = _changed(ONE, serial=serial)
    board, _ = _play(setting, PLAIN, seed=3, ticks=50)
    assert any(board.written[-1][1])
    board.line.clear()
    last_us = board.age
    while any(board.written[-1][1]):
        board.now += 10
        board.poll()
        assert board.age - last_us <= setting.silence_us + 60
    assert board.age - last_us >= setting.silence_us - setting.interval_us * 2
    assert board.state == "silent"


def test_it_recovers_from_silence_with_a_fresh_answer():
    """Samples go on in silence, and the answer to one of them brings the current back."""
    board, _ = _play(ONE, PLAIN, seed=3, ticks=50)
    board.line.clear()
    board.now += 2000
    board.poll()
    assert board.state == "silent"
    for _ in range(3):
        board.now += 50
        board.tick()
        board.now += 49
        board.poll()
    assert board.state == "running"
    assert any(board.written[-1][1])


def test_a_clock_that_goes_back_is_a_fault():
    """0 pA at once, and the loop goes on from the new time."""
    board, _ = _play(ONE, PLAIN, seed=3, ticks=50)
    assert any(board.written[-1][1])
    board.now -= 500
    board.poll()
    assert not any(board.written[-1][1])
    assert board._c.shim_error(board.device) == -15
    assert board.state == "running"


def test_stop_is_zero_at_once():
    """Stopped, it writes 0 pA, is idle, and sends nothing more."""
    board, _ = _play(ONE, PLAIN, seed=3, ticks=50)
    heard = len(board.host.samples)
    board._call("gsb_device_stop")
    assert not any(board.written[-1][1])
    board.now += 50
    board.tick()
    assert (board.state, len(board.host.samples)) == ("idle", heard)


def test_a_lost_welcome_is_asked_for_again():
    """On a serial line hello is repeated every 100 ms until the welcome comes."""
    setting = _changed(ONE, serial=True)
    rng = random.Random(1)
    board = Board(setting, rng, Rates(drop=1.0), 0)
    board.connect()
    hellos = []
    for _ in range(100):
        board.now += 5_000
        hellos += [board.age for entry in board.poll() if entry[0] == "sent" and entry[1]]
    assert board.state == "greeting"
    assert [b - a for a, b in pairwise(hellos)] == [100_000] * 4
    board.line.rates = PLAIN
    for _ in range(30):
        board.now += 5_000
        board.poll()
    assert board.state == "silent"  # welcome, and not ticking


def test_a_welcome_for_another_number_of_cells_is_refused():
    """The loop stays closed and hello goes on, on the same line."""
    board = Board(_changed(ONE, serial=True), random.Random(1), PLAIN, 0)
    board.connect()
    board.line.clear()
    for cells, state in ((2, "greeting"), (1, "running")):
        board.line.plain(board.now, frame(0x02, msgpack.packb([1, 0, cells])))
        board.now += 50
        board.poll()
        assert board.state == state
    board.line.plain(board.now, frame(0x02, msgpack.packb([2, 0, 1])))
    board.poll()
    assert (board.state, board.broken) == ("greeting", False)


def test_a_sick_line_does_not_stop_the_next_frame():
    """Half a frame at the start and noise between frames cost faults, not the loop."""
    board, _ = _play(_changed(ONE, serial=True), PLAIN, seed=5, ticks=20)
    faults = board.counter(6)
    for noise in (b"\x09\x10\x11", b"\x00", bytes(range(1, 200)), b"\x00" * 50):
        board.line.plain(board.now, noise)
        board.poll()
    assert board.counter(6) == faults + 2
    assert board.state == "running"
    for _ in range(3):
        board.now += 50
        board.tick()
        board.now += 49
        board.poll()
    assert any(board.written[-1][1])


def test_a_device_that_is_refused_never_runs():
    """No memory for samples, for one: an error, and told to connect all the same it is idle."""
    board = Board(ONE, random.Random(1), PLAIN, 0)
    c, (_, into, out, taken) = board._c, board._memory
    room, config = ctypes.c_size_t(ONE.room), ctypes.byref(board.config)
    port = ctypes.byref(board._port)
    assert c.shim_make(board.device, config, port, 0, into, out, room, taken, 3) == -1
    board.connect()
    for _ in range(3):
        board.now += 50
        board.tick()
        board.poll()
    assert board.state == "idle"
    assert not any(any(i_pa) for _, i_pa in board.written)
    assert board.host.samples == []
