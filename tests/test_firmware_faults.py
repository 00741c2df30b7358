"""What a device must do at one certain fault: clocks, orders to stop, lost handshakes."""

from __future__ import annotations

import ctypes
import math
import random

import msgpack
import pytest
import zmtp_reference as rfc
from firmware_build import BRIDGE, ROOT, Answer, Config, Limits, Sample, library, program, run
from firmware_fake import WRAP, Board, Rates
from firmware_naive import Setting

IGNORED = 1
LINK, ROOM, SILENCE, GREETING, CLOCK, STOPPED = -7, -2, -13, -14, -15, -17
LIVE, TRIPPED = 1, 8
SKIPPED, FAULTS, SILENCES = 1, 6, 7  # counters
PLAIN = Rates()
ONE = Setting(
    serial=False,
    on_arrival=False,
    interval_us=50,
    silence_us=1000,
    limit_pa=(1000.0,),
    slew_pa_per_ms=(1000.0,),
    window_mv=(-120.0, 90.0),
    room=1024,
    ring=64,
)
BOTH = pytest.mark.parametrize("on_arrival", [False, True])


def _changed(**changes):
    return Setting(**{**ONE.__dict__, **changes})


def _steady(board, i_pa=500.0, flags=LIVE):
    """From now on the host answers every sample with this."""
    board.host._answer = lambda sample: msgpack.packb([sample[0], flags, 850, i_pa])


def _tick(board, ticks=1):
    """So many ticks of the sample clock, with a poll just before each next one."""
    for _ in range(ticks):
        board.tick()
        board.now += 49
        board.poll()
        board.now += 1


def _running(setting, i_pa=500.0):
    """A device through which a current flows; its slew limit allows 50 pA a tick."""
    board = Board(setting, random.Random(1), PLAIN, 0)
    _steady(board, i_pa)
    board.connect()
    board.now += 50
    board.poll()
    _tick(board, 20)
    assert board.state == "running"
    assert board.written[-1][1] == [i_pa]
    return board


def _error(board):
    return board._c.shim_error(board.device)


# ---- clocks ----


@BOTH
def test_a_clock_that_stands_still_takes_the_output_to_zero(on_arrival):
    """At the second tick in one microsecond, and for as long as it stands, answers or not."""
    board = _running(_changed(on_arrival=on_arrival))
    board.set_clock(0.0)
    _tick(board)
    for _ in range(30):
        _tick(board)
        assert board.written[-1][1] == [0.0]
        assert _error(board) == CLOCK
    board.set_clock(1.0)
    _tick(board, 20)
    assert board.written[-1][1] == [500.0]


@BOTH
@pytest.mark.parametrize("rate", [0.001, 0.02, 0.3])
def test_silence_is_found_by_a_slow_clock_too(on_arrival, rate):
    """After as many ticks as the time-out has, and two, though the clock says far less."""
    board = _running(_changed(on_arrival=on_arrival))
    board.set_clock(rate)
    board.line.rates = Rates(drop=1.0)
    _tick(board, 1_000 // 50 + 3)
    assert board.written[-1][1] == [0.0]
    assert _error(board) in (SILENCE, CLOCK)
    assert rate < 0.02 or (board.state, board.counter(SILENCES)) == ("silent", 1)


def test_an_answer_from_long_ago_is_ignored_by_a_slow_clock_too():
    """Its age is counted in ticks as well."""
    rig = _Rig()
    for k in range(40):
        assert rig.tick(2 * k) == 0
        if 15 <= k < 30:
            assert rig.answer(2 * k, k - 15) == 0
    assert rig.answer(80, 18) == IGNORED  # 22 ticks, 44 us by its clock
    assert rig.answer(80, 19) == 0


class _Rig:
    """``struct gsb_rig`` by itself, one cell, 50 us, silence 1000 us."""

    def __init__(self, interval_us=50.0):
        self.c = library()
        config = Config(1, interval_us, 0, 1000, 0)
        config.cell[0] = Limits(1000.0, 1e5, -120.0, 90.0)
        self._rig = ctypes.create_string_buffer(self.c.shim_size(6))
        self._taken = ctypes.create_string_buffer(64 * self.c.shim_size(3))
        self.at, self.sample = ctypes.byref(self._rig), Sample()
        self._v_mv = (ctypes.c_float * 1)(-65.0)
        assert self.c.gsb_rig_init(self.at, ctypes.byref(config), self._taken, 64) == 0
        self.c.gsb_rig_greet(self.at, ctypes.c_uint64(0))
        self.c.gsb_rig_run(self.at, ctypes.c_uint64(0))
        self.c.gsb_rig_current_pa.restype = ctypes.POINTER(ctypes.c_float)

    def tick(self, now_us):
        now = ctypes.c_uint64(now_us)
        return self.c.gsb_rig_tick(self.at, now, self._v_mv, ctypes.byref(self.sample))

    def answer(self, now_us, seq, i_pa=1.0, flags=LIVE):
        answer = Answer(seq, flags, 0, 1)
        answer.i_pa[0] = i_pa
        return self.c.gsb_rig_answer(self.at, ctypes.c_uint64(now_us), ctypes.byref(answer))

    def wrote(self, now_us):
        self.c.gsb_rig_wrote(self.at, ctypes.c_uint64(now_us))

    @property
    def i_pa(self):
        return self.c.gsb_rig_current_pa(self.at)[0]


@pytest.mark.parametrize("ppm", [-200, -50, 50, 200])
def test_two_oscillators_that_drift_miss_no_tick(ppm):
    """Over 50,000 ticks, several of drift: no number is left out; one that is missed is."""
    rig, rng = _Rig(), random.Random(2)
    period = 50.0 * (1 + ppm * 1e-6)
    for k in range(50_000):
        rig.tick(int(k * period) + rng.randrange(0, 8))
        if rig.sample.seq != k:
            raise AssertionError((k, rig.sample.seq))
    assert 50_000 * abs(period - 50.0) > 100  # two ticks and more
    rig.tick(int(50_001 * period))
    assert rig.sample.seq == 50_001


def test_ticks_that_are_made_up_for_do_not_upset_the_schedule():
    """After a burst of late ticks the next ones are counted one by one, and a gap is found."""
    rig = _Rig()
    for k in range(100):
        rig.tick(50 * k)
    for k in range(20):
        rig.tick(50 * 120 + 2 * k)
    first = rig.sample.seq
    for k in range(100):
        rig.tick(50 * (121 + k))
    assert rig.sample.seq == first + 100
    rig.tick(50 * 223)
    assert rig.sample.seq == first + 103


# ---- answers that are not live ----


@BOTH
@pytest.mark.parametrize("i_pa", [0.0, 400.0])
def test_an_answer_that_is_not_live_is_obeyed_at_once(on_arrival, i_pa):
    """0 pA as soon as it arrives, whatever the slew limit, the tick, and its currents."""
    board = _running(_changed(on_arrival=on_arrival))
    _steady(board, i_pa, TRIPPED)
    board.tick()
    board.now += 49
    board.poll()
    assert board.written[-1][1] == [0.0]
    assert board.counter(FAULTS) == 0
    board.now += 1
    board.tick()
    seq, _, in_force, lag_us, _ = board.host.samples[-1]
    assert in_force == seq - 1
    assert 0 <= lag_us <= 52


def test_where_nothing_flows_it_waits_for_its_tick_as_any_other():
    """So that a device whose server is disarmed says the same of what is in force as ever."""
    board = Board(ONE, random.Random(1), PLAIN, 0)
    _steady(board, 0.0, 0)
    board.connect()
    board.now += 50
    board.poll()
    _tick(board, 10)
    assert [s[2] for s in board.host.samples] == [None, None, *range(8)]


def test_what_is_in_an_answer_that_is_not_live_does_not_matter():
    """NaN and infinity there are taken as 0; in a live answer they are a fault."""
    for flags, wanted in ((0, 0), (LIVE, -9)):
        for value in (math.nan, math.inf):
            rig = _Rig()
            rig.tick(10)
            assert rig.answer(20, 0, value, flags) == wanted
            rig.tick(60)
            assert rig.i_pa == 0.0


# ---- silence ----


def test_a_sample_says_what_flowed_when_it_was_taken():
    """Though the silence is found within the very tick: the current ends after the sample."""
    rig = _Rig()
    rig.tick(0)
    assert rig.answer(20, 0) == 0
    rig.tick(50)
    rig.wrote(53)
    assert rig.i_pa == 1.0
    assert rig.tick(1_500) == SILENCE
    assert (rig.sample.in_force, rig.sample.lag_us) == (0, 53)
    assert rig.i_pa == 0.0
    rig.wrote(1_502)
    rig.tick(1_550)
    assert (rig.sample.in_force, rig.sample.lag_us) == (-1, -1)


def test_a_silence_that_an_answer_comes_after_is_told():
    """The answer itself is too old; its call returns the silence."""
    rig = _Rig()
    rig.tick(0)
    assert rig.answer(1_400, 0) == SILENCE
    rig.tick(1_450)
    assert rig.answer(1_460, 0) == IGNORED


# ---- links ----


@pytest.mark.parametrize("call", ["tick", "poll"])
def test_a_handshake_that_takes_too_long_ends_the_link(call):
    """Found in a tick or in a poll: idle, and the link is to be opened anew, which works."""
    board = Board(_changed(greeting_us=5_000), random.Random(1), PLAIN, 0)
    board.connect()
    board.line.clear()
    board.now += 4_000
    getattr(board, call)()
    assert (board.state, board.broken) == ("greeting", False)
    board.now += 1_100
    getattr(board, call)()
    assert (board.state, board.broken, _error(board)) == ("idle", True, GREETING)
    board.connect()
    board.poll()
    assert board.state == "running"


def test_a_link_that_has_no_room_to_answer_leaves_the_device_idle():
    """A PING whose PONG does not fit ends the link; nothing flows, and it can be opened anew."""
    board = _running(_changed(room=256))
    board.rates = Rates(stall=1.0)
    while board.counter(FAULTS) == 0 or any(board.written[-1][1]):
        _tick(board)
    assert (board.broken, _error(board)) == (False, ROOM)
    board.line.plain(board.now, rfc.ping(10, b"sixteen letters."))
    board.poll()
    assert (board.state, board.broken, _error(board)) == ("idle", True, ROOM)
    board.rates = PLAIN
    board.connect()
    board.now += 1
    board.poll()
    assert board.state == "running"


# ---- stopping ----


def test_a_stop_holds_until_it_is_released():
    """Connecting is refused and sends nothing; after the release it works."""
    board = _running(ONE)
    assert board._c.gsb_device_stop(board.device) == 0
    assert board.written[-1][1] == [0.0]
    assert (board.state, board.broken, _error(board)) == ("idle", True, STOPPED)
    for _ in range(3):
        board.log = []
        assert board._c.gsb_device_connect(board.device) == STOPPED
        assert not any(entry[0] == "sent" for entry in board.log)
        _tick(board)
        assert board.state == "idle"
    board._c.gsb_device_release(board.device)
    board.connect()
    board.now += 50
    board.poll()
    assert board.state == "running"


def test_a_stop_that_the_converter_does_not_take_is_written_again():
    """The stop tells it; every further call tries, a refused connect among them."""
    board = _running(ONE)
    board.converter.rates = Rates(output_fault=1.0)
    assert board._c.gsb_device_stop(board.device) == -12
    board.converter.rates = PLAIN
    before = len(board.written)
    assert board._c.gsb_device_connect(board.device) == STOPPED
    assert [i_pa for _, i_pa in board.written[before:]] == [[0.0]]


def test_the_clock_of_the_board_wraps_without_a_fault():
    """2**32 us pass in the middle of a tick and nothing is noticed."""
    board = Board(ONE, random.Random(1), PLAIN, WRAP - 475)
    _steady(board)
    board.connect()
    board.now += 50
    board.poll()
    _tick(board, 30)
    assert (board.counter(FAULTS), board.counter(SKIPPED)) == (0, 0)
    assert board.written[-1][1] == [500.0]


# ---- the template ----


@pytest.fixture(scope="module")
def template(tmp_path_factory):
    """The template on a made-up board; passes of its loop as (relay, code, hellos, error)."""
    source = (BRIDGE / "examples" / "template" / "board.c").read_text()
    ours, mark, _ = source.partition("/* ---- BOARD: stand-ins")
    assert mark
    path = tmp_path_factory.mktemp("template") / "template.c"
    path.write_text(ours)
    made = program("template", path, ROOT / "tests" / "firmware_template.c")

    def play(events):
        told = run([made], env={"BOARD": " ".join(events)}).stdout
        return [tuple(map(int, line.split())) for line in told.splitlines()]

    return play


def test_the_template_opens_its_relay_when_the_converter_refuses(template):
    """Closed while running; open at the pass in which the write of 0 pA fails, until it works.

    The converter breaks before the first silence, at which 0 pA is to be written.
    """
    passes = template(["8:w", "20:d", "400:m", "410:w", "420:e"])
    relays = [relay for relay, *_ in passes]
    assert relays[:8] == [0] * 8
    assert relays[10:20] == [1] * 10
    assert set(relays[60:410]) == {0}
    assert passes[60][3] == -12
    running = template(["8:w", "20:w", "21:d", "24:w", "30:m", "34:w", "38:e"])
    assert [relay for relay, *_ in running[20:38]] == [1] * 4 + [0] * 6 + [1] * 8


def test_the_template_stays_stopped(template):
    """After the stop button no hello, no relay; after the release, both again."""
    passes = template(["8:w", "20:s", "1500:r", "1504:w", "1510:e"])
    assert passes[19][0] == 1
    stopped = passes[20:1500]
    assert {(relay, hellos) for relay, _, hellos, _ in stopped} == {(0, passes[19][2])}
    assert {error for *_, error in stopped} == {STOPPED}
    assert passes[-1][2] > passes[19][2]
    assert passes[-1][0] == 1
