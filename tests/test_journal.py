"""The journal's writer: what it makes of the log, and what it does when the disk does not."""

from __future__ import annotations

import errno
import os
import threading
import time
from pathlib import Path

import numpy as np
import pytest
from conftest import wait_until
from hypothesis import given, settings
from hypothesis import strategies as st
from journals import Log, expected_samples, new_journal

from gatestep.journal import BLOCK_BYTES
from gatestep.journalfile import open_journal
from gatestep.journalout import Out
from gatestep.library import load_model
from gatestep.loop import Entry
from gatestep.orders import Order, Outcome
from gatestep.states import FAULT_TEXTS, Fault
from gatestep.tables import build_tables
from gatestep.wire import GAP, LATE, LIVE, NIL, REPEAT


def finished(journal):
    """Close a journal that must be whole, and open it."""
    status = journal.close()
    assert (status["state"], status["reason"]) == ("ended", None)
    return open_journal(status["path"])


def shown(found, *keys):
    """Kind, place, number and some fields of every event."""
    return [(e.kind, e.position, e.seq, *(e.fields.get(k) for k in keys)) for e in found.events]


def test_every_field_of_every_sample_is_kept(tmp_path):
    """Bit for bit, NaN included, for one cell and for eight."""
    for cells in (1, 8):
        journal, log = new_journal(tmp_path / str(cells), cells), Log(cells)
        entries = log.samples(300)
        entries["v_mv"][7, 0] = np.nan
        entries["in_force"][3], entries["lag_us"][3] = NIL, NIL
        for part in np.array_split(entries, 9):
            journal.take(log.block(part))
        with finished(journal) as found:
            for name, values in expected_samples(entries, cells).items():
                kept = found.samples[:][name]
                assert np.array_equal(kept.view("u8"), np.ascontiguousarray(values).view("u8"))


def test_orders_mean_what_was_expected_of_them(tmp_path):
    """An order's event has what was said of it, what the log says, and its outcome."""
    journal, log = new_journal(tmp_path), Log(1)
    journal.expect(1, "arm", forced=True)
    journal.expect(2, "set", key="K.gmax_ns")
    journal.expect(3, "mark", text="µ\ud800 seal")
    order = {
        1: {"code": Order.ARM, "outcome": Outcome.TRIPPED},
        2: {"code": Order.SET_GMAX, "cell": 0, "index": 4, "value": 0.1},
        3: {"code": Order.MARK},
        9: {"code": Order.DISARM},
    }
    entries = [log.other(Entry.ORDER, number=n, seq=n + 3, **f) for n, f in order.items()]
    journal.take(log.block(log.samples(4), entries[0], log.samples(1), *entries[1:]))
    with finished(journal) as found:
        keys = ("number", "outcome", "forced", "key", "which", "value", "text")
        assert shown(found, *keys) == [
            ("arm", 4, 4, 1, "tripped", True, None, None, None, None),
            ("set", 5, 5, 2, "done", None, "K.gmax_ns", "gmax_ns", 0.1, None),
            ("mark", 5, 6, 3, "done", None, None, None, None, "µ\ud800 seal"),
            ("disarm", 5, 12, 9, "done", None, None, None, None, None),
        ]


def test_trips_and_rigs_are_events(tmp_path):
    """A trip has its fault in words; hold and release have the session's number."""
    journal, log = new_journal(tmp_path), Log(1)
    trip = log.other(Entry.TRIP, code=Fault.SILENCE, cell=NIL)
    hold, release = log.other(Entry.HOLD, code=3), log.other(Entry.RELEASE, code=3)
    journal.take(log.block(hold, log.samples(2), trip, release, log.other(Entry.CLOCK_JUMP)))
    journal.note("mark", text="x")
    with finished(journal) as found:
        keys = ("fault", "text", "cell", "session")
        silence = int(Fault.SILENCE), FAULT_TEXTS[Fault.SILENCE], None, None
        assert [s[0:2] + s[3:] for s in shown(found, *keys)] == [
            ("hold", 0, None, None, None, 3),
            ("trip", 2, *silence),
            ("release", 2, None, None, None, 3),
            ("clock_jump", 2, None, None, None, None),
            ("mark", 2, None, "x", None, None),
        ]


def test_a_stimulus_that_plays_to_its_end_ends_its_sweep(tmp_path):
    """The loop's own REST names the order that began it; one of no sweep is only a rest."""
    journal, log = new_journal(tmp_path), Log(1)
    journal.expect(5, "sweep_start", sweep=2, name="step")
    play = log.other(Entry.ORDER, number=5, code=Order.PLAY, cell=0, value=3.0)
    rest = log.other(Entry.ORDER, number=5, code=Order.REST, cell=0)
    journal.take(log.block(log.samples(2), play, log.samples(3), rest, rest, log.samples(1)))
    with finished(journal) as found:
        assert [(s.index, s.start, s.stop, s.complete) for s in found.sweeps] == [(2, 2, 5, True)]
        assert [e.kind for e in found.events] == ["sweep_start", "sweep_end", "rest"]
        assert found.events[0].fields["ticks"] == 3


def test_gaps_and_late_runs_come_from_the_flags(tmp_path):
    """A run of late samples is one event, a gap counts its ticks, a repeat tells nothing."""
    journal, log = new_journal(tmp_path), Log(1)
    seqs = np.array([1, 2, 3, 6, 6, 7, 8, 9, 20])
    late, gap, again = LIVE | LATE, LIVE | GAP, REPEAT | GAP | LATE
    flags = np.array([LIVE, late, late, gap | LATE, again, LIVE, late, LIVE, gap])
    order = log.other(Entry.ORDER, number=1, code=Order.DISARM)
    samples = log.samples(9, flags, seqs)
    journal.take(log.block(samples[:6], order, samples[6:]))
    journal.take(log.block(log.samples(1, gap, np.array([30]))))
    with finished(journal) as found:
        assert shown(found, "count", "missed") == [
            ("late", 1, 2, 3, None),
            ("gap", 3, 6, None, 2),
            ("disarm", 6, found.events[2].seq, None, None),
            ("late", 6, 8, 1, None),
            ("gap", 8, 20, None, 10),
            ("gap", 9, 30, None, 9),
        ]
        assert found.events[0].fields["lag_us"] == samples["lag_us"][1]
        assert found.events[0].fields["in_force"] == samples["in_force"][1]


def test_what_the_loop_itself_lost_is_told_where_it_was(tmp_path):
    """The count of lost entries grows between two blocks; a gap after it has unknown size."""
    journal, log = new_journal(tmp_path), Log(1)
    journal.take(log.block(log.samples(5)))
    log.lost, log.seq = 7, 12
    journal.take(log.block(log.samples(5, np.array([LIVE | GAP, *[LIVE] * 4]))))
    journal.take(log.block(log.samples(5)))
    with finished(journal) as found:
        assert shown(found, "entries", "missed") == [
            ("lost", 5, 5, 7, None),
            ("gap", 5, 13, None, None),
        ]


@settings(max_examples=30)
@given(data=st.data())
def test_the_order_of_what_happened_is_kept(tmp_path_factory, data):
    """However the log is cut into blocks and batches, places and order are the same."""
    log = Log(2, seed=data.draw(st.integers(0, 999)))
    journal = new_journal(tmp_path_factory.mktemp("order"), 2)
    expected, position, block = [], 0, []
    for k in range(data.draw(st.integers(1, 40))):
        what = data.draw(st.sampled_from(["samples", "order", "note", "send", "flush"]))
        if what == "samples":
            count = data.draw(st.integers(0, 5))
            block.append(log.samples(count))
            position += count
        elif what == "order":
            block.append(log.other(Entry.ORDER, number=k, code=Order.MARK))
            journal.expect(k, "mark", k=k)
            expected.append((k, position))
        else:
            journal.take(log.block(*block))
            block = []
            if what == "note":
                journal.note("mark", k=k)
                expected.append((k, position))
            elif what == "flush":
                journal.flush()
    journal.take(log.block(*block))
    with finished(journal) as found:
        assert [(e.fields["k"], e.position) for e in found.events] == expected
        assert np.array_equal(found.samples[:]["seq"], 1 + np.arange(position))


def test_blocks_are_bounded_and_a_model_stands_before_its_event(tmp_path):
    """However much waits, no block of samples is larger than its bound; models come first."""
    journal, log = new_journal(tmp_path, 1, flush_ms=60_000), Log(1)
    for _ in range(20):
        journal.take(log.block(log.samples(2000)))
    model = load_model("squid-axon")
    journal.note("swap", cell=0, model=journal.add_model(model, build_tables(model.spec)))
    with finished(journal) as found:
        index = found.closing["index"]
        largest = max(
            n for n, kind in zip(index["length"], index["kind"], strict=True) if kind == 2
        )
        assert BLOCK_BYTES // 2 < largest <= BLOCK_BYTES
        assert index["kind"].index(4) < index["kind"].index(3)
        assert len(found.samples) == 40_000


def test_notes_of_many_threads_are_all_kept(tmp_path):
    """The queue takes from any thread at once; each thread's own order stays."""
    journal = new_journal(tmp_path, flush_ms=1)

    def speak(who):
        for k in range(200):
            journal.note("mark", who=who, k=k)

    threads = [threading.Thread(target=speak, args=(who,)) for who in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    with finished(journal) as found:
        for who in range(4):
            assert [e.fields["k"] for e in found.events if e.fields["who"] == who] == [*range(200)]


def test_off_makes_no_file(tmp_path):
    """With on = false nothing is made, and nothing is asked of the disk."""
    journal, log = new_journal(tmp_path / "records", on=False), Log(1)
    journal.take(log.block(log.samples(5)))
    journal.note("mark")
    assert journal.add_model(load_model("leak"), build_tables(load_model("leak").spec)) == 0
    assert journal.close()["state"] == "off"
    assert not (tmp_path / "records").exists()


class Failing(Out):
    """A disk with room for so many bytes, or one that breaks at a sync."""

    room, breaks = 10**9, False

    def write(self, data):
        part = data[: self.room]
        super().write(part)
        self.room -= len(part)
        if len(part) < len(data):
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    def sync(self):
        if self.breaks:
            raise OSError(errno.EIO, os.strerror(errno.EIO))


def made_by(disks: list, kind: type[Out]):
    """An ``out`` for a journal, which also hands out the disk it makes."""

    def make(path: Path):
        disks.append(kind(path))
        return disks[-1]

    return make


def is_failed(journal):
    return journal.status()["state"] == "failed"


@pytest.mark.parametrize("room", [0, 1, 31, 33, 200, 2000, 3000])
def test_a_disk_that_fills_ends_the_record_and_nothing_else(tmp_path, room):
    """What fitted is whole, the loss is counted to the sample, and it is said exactly once."""
    disks, said, log = [], [], Log(1)
    journal = new_journal(tmp_path, 1, said, flush_ms=1, out=made_by(disks, Failing))
    journal.take(log.block(log.samples(10)))
    assert journal.flush()
    written = journal.status()
    disks[0].room = room
    for _ in range(60):
        journal.take(log.block(log.samples(10)))
        journal.note("mark", text="on")
    wait_until(lambda: is_failed(journal), "a failed journal")
    journal.take(log.block(log.samples(10)))
    status = journal.close()
    assert status["state"] == "failed"
    assert status["reason"] == "No space left on device"
    assert status["samples"] + status["dropped_samples"] == 620
    assert status["samples"] >= written["samples"] == 10
    assert len(said) == 1
    assert said[0].startswith("RECORD FAILED: ")
    assert status["path"] in said[0]
    with open_journal(status["path"]) as found:
        assert len(found.samples) == status["samples"]
        assert (found.closed, found.tail, found.verify()) == (False, None, [])
        assert found.size == status["bytes"]
        word = [e for e in found.events if e.kind == "dropped"]
        # There was room for the last word, or there was not.
        assert [e.fields["reason"] for e in word] == ["No space left on device"] * len(word)


@pytest.mark.parametrize("sync_s", [0, 0.001])
def test_the_last_word_is_left_where_there_is_room(tmp_path, sync_s):
    """After a failed sync, waited for or not, the file still takes an event that it ends there."""
    disks, said, log = [], [], Log(1)
    disk = made_by(disks, Failing)
    journal = new_journal(tmp_path, 1, said, flush_ms=1, sync_s=sync_s, out=disk)
    journal.take(log.block(log.samples(10)))
    assert journal.flush()
    disks[0].breaks = True
    journal.take(log.block(log.samples(5)))
    wait_until(lambda: is_failed(journal), "a failed journal")
    journal.close()
    assert len(said) == 1
    assert "Input/output error" in said[0]
    with open_journal(journal.status()["path"]) as found:
        assert found.events[-1].kind == "dropped"
        assert found.events[-1].fields["reason"] == "Input/output error"
        assert len(found.samples) == found.events[-1].position == journal.status()["samples"]


class Slow(Out):
    """A disk that stands still while told to."""

    def __init__(self, path):
        super().__init__(path)
        self.free = threading.Event()
        self.free.set()

    def write(self, data):
        self.free.wait(20)
        super().write(data)


def test_a_slow_disk_costs_samples_that_are_counted_and_no_event(tmp_path):
    """The queue is bounded; what does not fit is told at its place, what matters is kept."""
    disks, said, log = [], [], Log(1)
    journal = new_journal(tmp_path, 1, said, queue_mb=1, flush_ms=1, out=made_by(disks, Slow))
    journal.take(log.block(log.samples(100)))
    assert journal.flush()
    disks[0].free.clear()
    trip = log.other(Entry.TRIP, code=Fault.SILENCE)
    started = time.monotonic()
    for k in range(200):
        entries = [log.samples(100)] + ([trip] if k == 150 else [])
        journal.take(log.block(*entries))
    journal.note("mark", text="kept")
    assert time.monotonic() - started < 10, "nothing here may wait for the disk"
    status = journal.status()
    assert status["state"] == "on"
    assert 10_000 < status["dropped_samples"] < 20_000
    assert 0.9e6 < status["queue_high_water_bytes"] < 2.1e6
    disks[0].free.set()
    assert journal.flush()
    journal.take(log.block(log.samples(50)))
    with finished(journal) as found:
        seqs = found.samples[:]["seq"]
        drops = [e for e in found.events if e.kind == "dropped"]
        assert sum(e.fields["samples"] for e in drops) == status["dropped_samples"]
        assert len(seqs) + status["dropped_samples"] == 20_150
        assert found.closing["dropped_samples"] == status["dropped_samples"]
        jumps = {int(k) + 1: int(d) - 1 for k, d in enumerate(np.diff(seqs)) if d != 1}
        told: dict[int, int] = {}
        for e in drops:
            told[e.position] = told.get(e.position, 0) + e.fields["samples"]
        assert told == jumps
        kinds = [e.kind for e in found.events]
        assert kinds.count("trip") == kinds.count("mark") == 1
        assert "gap" not in kinds
    assert len(said) == 1
    assert said[0].startswith("RECORD INCOMPLETE: ")


def test_a_disk_that_never_comes_back_does_not_hold_up_the_end(tmp_path, monkeypatch):
    """Closing gives up after its time, and says so."""
    monkeypatch.setattr("gatestep.journal._CLOSE_S", 0.2)
    disks, said, log = [], [], Log(1)
    journal = new_journal(tmp_path, 1, said, flush_ms=1, out=made_by(disks, Slow))
    disks[0].free.clear()
    journal.take(log.block(log.samples(5)))
    assert journal.close()["state"] == "failed"
    assert len(said) == 1
    disks[0].free.set()
    wait_until(lambda: not journal.is_writing(), "the end of the writer")
    assert len(said) == 1


@pytest.mark.parametrize("how", ["removed", "moved", "replaced", "folder"])
def test_a_file_that_vanishes_ends_the_record(tmp_path, how):
    """Nothing goes on being written to a file that no one will find."""
    said, log = [], Log(1)
    journal = new_journal(tmp_path / "records", 1, said, flush_ms=1)
    journal.take(log.block(log.samples(5)))
    assert journal.flush()
    path = Path(journal.status()["path"])
    if how == "folder":
        path.parent.rename(tmp_path / "elsewhere")
    elif how == "moved":
        path.rename(tmp_path / "moved")
    else:
        path.unlink()
    if how == "replaced":
        path.write_text("not ours", "utf-8")
    wait_until(lambda: is_failed(journal), "a failed journal")
    journal.take(log.block(log.samples(5)))
    status = journal.close()
    assert "moved or removed" in status["reason"]
    assert status["dropped_samples"] == 5
    assert len(said) == 1
    if how == "replaced":
        assert path.read_text("utf-8") == "not ours"
    if how == "moved":
        with open_journal(tmp_path / "moved") as found:
            assert found.events[-1].kind == "dropped"
            assert len(found.samples) == 5


def test_a_folder_that_cannot_be_had_is_said_once(tmp_path):
    """A file in the folder's place: the journal is failed from the start, and all is counted."""
    (tmp_path / "records").write_text("a file", "utf-8")
    said, log = [], Log(1)
    journal = new_journal(tmp_path / "records", 1, said)
    journal.take(log.block(log.samples(5)))
    journal.note("mark")
    assert not journal.flush()
    status = journal.close()
    assert (status["state"], status["samples"], status["dropped_samples"]) == ("failed", 0, 5)
    assert len(said) == 1
    assert str(tmp_path / "records") in said[0]


def test_a_real_full_device_and_a_folder_without_leave(tmp_path):
    """The system's own errors: /dev/full has no room, and a file system that takes no files."""
    full = Path("/dev/full")
    assert full.exists(), "this test needs /dev/full, which every Linux has"
    said: list[str] = []

    class Full(Out):
        def __init__(self, _):
            self._path, self._file = full, os.open(full, os.O_WRONLY)

    journal = new_journal(tmp_path, 1, said, out=Full)
    assert journal.close()["reason"] == "No space left on device"
    for refused in (Path("/proc/records"), Path("/sys/records")):
        assert new_journal(refused, 1, said).close()["state"] == "failed"
    assert len(said) == 3


def test_no_file_is_ever_written_over(tmp_path):
    """A journal of the same name is left as it is; the new one fails to begin."""
    first = new_journal(tmp_path)
    name = Path(first.close()["path"])
    content = name.read_bytes()
    disks: list = []

    def same(_: Path):
        disks.append(1)
        return Out(name)

    said: list[str] = []
    assert new_journal(tmp_path, 1, said, out=same).close()["state"] == "failed"
    assert disks
    assert name.read_bytes() == content
    assert "File exists" in said[0]


def test_a_disk_that_takes_long_to_sync_holds_nothing_up(tmp_path):
    """While a sync is under way, what comes is written, and would outlive the process."""
    disks: list = []

    class Long(Out):
        calls, free = 0, threading.Event()

        def sync(self):
            self.calls += 1
            if self.calls > 1:  # the first is that of the header
                self.free.wait(20)

    journal, log = new_journal(tmp_path, 1, sync_s=0.001, out=made_by(disks, Long)), Log(1)
    for k in range(5):
        journal.take(log.block(log.samples(5)))
        assert journal.flush()
        with open_journal(journal.status()["path"]) as found:
            assert len(found.samples) == 5 * (k + 1)
    assert disks[0].calls == 2
    Long.free.set()
    finished(journal).close()


def test_how_often_the_disk_is_made_to_take_it(tmp_path):
    """sync_s = 0 syncs with every flush; a long one leaves it to the start and the end."""
    counts = {}
    for sync_s in (0, 86_400):
        disks: list = []

        class Counting(Out):
            syncs = 0

            def sync(self):
                self.syncs += 1
                super().sync()

        journal, log = new_journal(tmp_path / str(sync_s), 1, sync_s=sync_s,
                                   out=made_by(disks, Counting)), Log(1)  # fmt: skip
        for _ in range(10):
            journal.take(log.block(log.samples(5)))
            assert journal.flush()
        journal.close()
        counts[sync_s] = disks[0].syncs
    assert counts[0] >= 11
    assert counts[86_400] <= 3
