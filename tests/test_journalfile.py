"""Journals read back: by this program, by a reader made from the format's text, and damaged."""

from __future__ import annotations

import json
import shutil
import struct
import zlib
from contextlib import suppress
from datetime import datetime

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from journals import Log, expected_samples, new_journal, write_journal

import gatestep
from gatestep import journalbytes
from gatestep.errors import JournalError
from gatestep.journalbytes import HEADER_SIZE, Kind, pack_block, pack_json
from gatestep.journalfile import open_journal
from gatestep.library import load_model
from gatestep.loop import Entry
from gatestep.orders import Order
from gatestep.tables import build_tables

CELLS = 2


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    """A closed journal of six blocks of samples, its bytes, and the entries in it."""
    path, entries = write_journal(tmp_path_factory.mktemp("journal"), CELLS, 6, 20)
    return path, path.read_bytes(), entries


def independent(data: bytes):
    """A reader made from the text of journalbytes alone: struct, json, zlib and numpy.

    Returns the header, the samples, the events, the models with their tables and the end.
    """
    at, header, events, models, close, parts = 0, None, [], [], None, []
    serials = []
    while at < len(data):
        magic, kind, version, length, crc, position, serial, check = struct.unpack_from(
            "<4sHHIIQII", data, at
        )
        assert (magic, version) == (b"GSJ\x1a", 1)
        assert check == zlib.crc32(data[at : at + 28])
        payload = data[at + 32 : at + 32 + length]
        assert crc == zlib.crc32(payload)
        assert position == sum(map(len, parts))
        serials.append(serial)
        if kind == 1:
            header = json.loads(payload)
            dtype = np.dtype([(f[0], f[1], *map(tuple, f[2:])) for f in header["sample_dtype"]])
        elif kind == 2:
            parts.append(np.frombuffer(payload, dtype))
        elif kind == 3:
            events += json.loads(payload)
        elif kind == 4:
            (size,) = struct.unpack_from("<I", payload)
            model = json.loads(payload[4 : 4 + size])
            table = np.frombuffer(zlib.decompress(payload[4 + size :]), "<f8")
            models.append((model, table.reshape(model["rows"], model["columns"])))
        elif kind == 5:
            close = json.loads(payload)
        at += 32 + length
        pad = -at % 8
        assert data[at : at + pad] == bytes(pad)
        at += pad
    assert serials == list(range(len(serials)))
    return header, np.concatenate(parts), events, models, close


def test_the_text_of_the_format_suffices_to_read_it(written):
    """A reader written from the description alone finds every sample, event and model."""
    path, data, entries = written
    header, samples, events, models, close = independent(data)
    for name, values in expected_samples(entries, CELLS).items():
        assert np.array_equal(samples[name], values), name
    assert samples.dtype.itemsize == 56 + 24 * CELLS
    tables = build_tables(load_model("leak").spec)
    assert models[0][0]["table_sha256"] == tables.sha256
    assert np.array_equal(models[0][1].reshape(-1), tables.table)
    assert [e["text"] for e in events if e["kind"] == "mark"] == [f"µ {k}" for k in range(6)]
    assert header["cells"] == ["c0", "c1"]
    assert close["samples"] == len(entries) == 120
    with open_journal(path) as journal:
        assert np.array_equal(journal.samples[:], samples)
        assert [e.kind for e in journal.events] == [e["kind"] for e in events]
        assert journal.header == header
        assert journal.closing == close


def test_the_example_of_the_description_is_what_is_written():
    """The bytes printed in the description are those of the block that it names."""
    text = journalbytes.__doc__.partition("An example")[2].partition("::")[2]
    assert pack_block(Kind.EVENTS, b"[]", 3, 7) == bytes.fromhex(text)
    assert "payload, block 7, after 3 samples" in journalbytes.__doc__


def test_samples_are_a_sequence(written):
    """Slices, single samples, columns and strides are those of the whole array."""
    path, _, entries = written
    with gatestep.open_journal(path) as journal:
        whole = journal.samples[:]
        assert len(journal.samples) == len(entries)
        for cut in (slice(3, 97), slice(-5, None), slice(50, 40), slice(0, 120, 7), slice(19, 21)):
            assert np.array_equal(journal.samples[cut], whole[cut]), cut
        assert np.array_equal(journal.samples[99:10:-3], whole[99:10:-3])
        assert journal.samples[-1] == whole[-1]
        assert np.array_equal(journal.samples.column("v_mv", 7, 66), whole["v_mv"][7:66])
        with pytest.raises(IndexError):
            journal.samples[120]
        with pytest.raises(JournalError, match="no field 'volts'"):
            journal.samples.column("volts")


def test_times_and_facts(written):
    """The clock, the tick, the cells and the models are those that were written."""
    path, data, _ = written
    with open_journal(path) as journal:
        header = independent(data)[0]
        start = datetime.fromisoformat(header["start"]["time"])
        assert journal.start == start
        later = journal.time_of(header["start"]["monotonic_nsec"] + 1_500_000_000)
        assert (later - start).total_seconds() == 1.5
        assert (journal.interval_us, journal.cells) == (20.0, ["c0", "c1"])
        assert journal.closed
        assert journal.tail is None
        assert journal.verify() == []
        assert set(header["versions"]) == {"python", "numpy", "numba", "pyzmq", "libzmq"}
        assert path.name.startswith(f"{start:%Y%m%dT%H%M%S}-rig-")


@pytest.mark.parametrize("stored", [True, False])
def test_a_model_comes_back_as_it_ran(tmp_path, stored):
    """Spec, bank, table, reports and hash are the loop's own, from the table or the text."""
    model = load_model("squid-axon")
    tables = build_tables(model.spec)
    journal = new_journal(tmp_path, tables=stored)
    assert [journal.add_model(model, tables) for _ in range(2)] == [0, 0]
    path = journal.close()["path"]
    with open_journal(path) as found:
        assert list(found.models) == [0]
        again = found.models[0].tables()
        assert again.sha256 == tables.sha256
        assert (again.spec, again.gates) == (tables.spec, tables.gates)
        assert again.reports == tables.reports
        assert again.bank == tables.bank
        assert np.array_equal(again.table, tables.table)
        assert found.models[0].loaded().spec == model.spec
        assert found.models[0].text == model.text


def test_what_was_in_force_is_told_for_every_sample(tmp_path):
    """Swaps and settings count from the sample that they stand before; refused ones do not."""
    journal, log = new_journal(tmp_path, 2), Log(2)
    ids = {}
    for name in ("squid-axon", "leak"):
        model = load_model(name)
        ids[name] = journal.add_model(model, build_tables(model.spec))
    journal.note("swap", cell=0, model=ids["squid-axon"], name="squid-axon")
    journal.note("swap", cell="c1", model=ids["leak"], name="leak", gmax_ns=[2.5])
    journal.expect(1, "set", key="K.gmax_ns", cell=0)
    journal.expect(2, "swap", model=ids["leak"], name="leak")
    order = log.other(Entry.ORDER, number=1, code=Order.SET_GMAX, cell=0, index=1, value=77.0)
    swap = log.other(Entry.ORDER, number=2, code=Order.SWAP, cell=0, index=1)
    journal.take(log.block(log.samples(10), order, log.samples(10), swap, log.samples(10)))
    with open_journal(journal.close()["path"]) as found:
        first, last = load_model("squid-axon").spec, found.in_force(29)
        gmax = {c.name: c.gmax_ns for c in first.conductance}
        assert [cell.gmax_ns for cell in found.in_force(9)] == [gmax, {"leak": 2.5}]
        assert found.in_force(10)[0].gmax_ns == {**gmax, "K": 77.0}
        assert found.in_force(19)[0].name == "squid-axon"
        assert (found.in_force(20)[0].name, last[0].model) == ("leak", ids["leak"])
        assert last[0].reversal_mv == {"leak": -65.0}


def test_sweeps_have_their_samples(tmp_path):
    """A sweep that ended is complete or not as told; one that was cut off lasts to the end."""
    journal, log = new_journal(tmp_path), Log(1)
    for k, (kind, fields) in enumerate(
        [
            ("sweep_start", {"sweep": 0, "name": "a"}),
            ("sweep_end", {"sweep": 0, "complete": True}),
            ("sweep_start", {"sweep": 1, "name": "b"}),
            ("sweep_end", {"sweep": 1, "complete": False}),
            ("sweep_start", {"sweep": 2, "name": "c"}),
        ]
    ):
        journal.take(log.block(log.samples(10 + k)))
        journal.note(kind, **fields)
    journal.take(log.block(log.samples(5)))
    with open_journal(journal.close()["path"]) as found:
        shown = [(s.index, s.start, s.stop, s.complete, s.fields["name"]) for s in found.sweeps]
        assert shown == [(0, 10, 21, True, "a"), (1, 33, 46, False, "b"), (2, 60, 65, False, "c")]


def test_a_number_is_found_in_its_session(tmp_path):
    """Numbers begin again with every rig; repeats and gaps mislead no one."""
    journal, log = new_journal(tmp_path), Log(1)
    for session in range(3):
        journal.take(log.block(log.other(Entry.HOLD, code=session)))
        for k in range(30):
            seqs = 100 * session + np.array([3, 4, 5, 5, 4, 7, 8]) + 10 * k
            flags = np.array([1, 1, 1, 33, 33, 17, 1])
            journal.take(log.block(log.samples(7, flags, seqs)))
            journal.flush()
    with open_journal(journal.close()["path"]) as found:
        whole = found.samples[:]
        fresh = np.flatnonzero(whole["flags"] & 32 == 0)
        for after in (0, 211, 420):
            for seq in (3, 103, 205, 207, 298, 498):
                right = [p for p in fresh if p >= after and whole["seq"][p] == seq]
                if right:
                    assert found.position_of(seq, after) == right[0]
        with pytest.raises(JournalError, match="no sample 106"):
            found.position_of(106, 420)


def check_against(found, entries) -> int:
    """Every sample that is given out is the original at that place; how many were."""
    given = 0
    expected = expected_samples(entries, CELLS)
    for piece in found.samples.pieces():
        stop = piece.position + len(piece.samples)
        assert stop <= len(entries)
        for name, values in expected.items():
            assert np.array_equal(piece.samples[name], values[piece.position : stop]), name
        given += len(piece.samples)
    lost = sum(d.samples for d in found.damaged)
    tail = 0 if found.tail is None else found.tail.samples
    if tail is not None:
        # Nothing is lost that is not told, to the last sample, unless no header was left.
        assert given + lost + tail >= len(found.samples)
    return given


def read_all(path, entries) -> int:
    """Read everything of a journal that may be damaged; how many samples were whole."""
    with open_journal(path) as found:
        given = check_against(found, entries)
        _ = found.events, found.sweeps, found.verify()
        for position in (0, len(found.samples)):
            found.in_force(position)
        for model in found.models.values():
            model.tables()
        for seq in (5, 60, 119):
            try:
                assert entries["seq"][found.position_of(seq)] == seq
            except JournalError:
                continue
        for start in range(0, len(found.samples), 25):
            try:
                part = found.samples[start : start + 25]
                stop = min(start + 25, len(found.samples))
                assert np.array_equal(part["seq"], entries["seq"][start:stop])
            except JournalError:
                continue
        return given


@settings(max_examples=300)
@given(data=st.data())
def test_no_damage_is_ever_taken_for_a_sample(written, tmp_path_factory, data):
    """Bytes changed, removed, put in or cut off: a JournalError, or the samples as they were."""
    path, original, entries = written
    damaged = bytearray(original)
    starts = [offset for offset, _, _ in blocks_of(original)]
    for _ in range(data.draw(st.integers(1, 3))):
        # By blocks, for most of the places are not in the first, whose loss loses all.
        at = data.draw(st.sampled_from(starts)) + data.draw(st.integers(0, 2200))
        at = min(at, len(damaged) - 1)
        how = data.draw(st.sampled_from(["flip", "set", "cut", "remove", "insert", "zero"]))
        if how == "flip":
            damaged[at] ^= 1 << data.draw(st.integers(0, 7))
        elif how == "set":
            damaged[at] = data.draw(st.integers(0, 255))
        elif how == "cut":
            del damaged[max(at, 1) :]
        elif how == "remove":
            del damaged[at : at + data.draw(st.integers(1, 3000))]
        elif how == "insert":
            damaged[at:at] = data.draw(st.binary(min_size=1, max_size=64))
        else:
            damaged[at : at + 512] = bytes(len(damaged[at : at + 512]))
        if not damaged:
            return
    path = tmp_path_factory.getbasetemp() / "damaged.journal"
    path.write_bytes(damaged)
    with suppress(JournalError):
        read_all(path, entries)


def blocks_of(data: bytes) -> list[tuple[int, int, int]]:
    """Offset, kind and whole size of every block of a sound journal."""
    found, at = [], 0
    while at < len(data):
        _, kind, _, length = struct.unpack_from("<4sHHI", data, at)
        found.append((at, kind, 32 + length + -length % 8))
        at += found[-1][2]
    return found


def test_cut_at_any_byte_of_its_last_blocks_it_says_exactly_what_is_lost(written, tmp_path):
    """The tail begins where the last whole block ends, and counts every byte after it."""
    _, data, _ = written
    blocks = blocks_of(data)
    path = tmp_path / "cut.journal"
    for at in range(blocks[-3][0], len(data)):
        path.write_bytes(data[:at])
        # Padding holds nothing: a block without it is whole.
        whole = [b for b in blocks if b[0] + b[2] <= at or _payload_end(data, b[0]) <= at]
        last = whole[-1]
        with open_journal(path) as found:
            end = min(last[0] + last[2], at)
            if end == at:
                assert found.tail is None, at
            else:
                assert (found.tail.offset, found.tail.bytes) == (end, at - end)
                header_left = at - end >= HEADER_SIZE
                torn = next(b for b in blocks if b[0] == end)
                promised = 20 if torn[1] == Kind.SAMPLES else 0
                assert found.tail.samples == (promised if header_left else None)
            assert len(found.samples) == 20 * sum(b[1] == Kind.SAMPLES for b in whole)
            assert found.closed == (last[1] == Kind.CLOSE)


def _payload_end(data: bytes, at: int) -> int:
    return at + 32 + struct.unpack_from("<4sHHI", data, at)[3]


def test_a_damaged_block_is_named_and_the_others_are_read(written, tmp_path):
    """With a block's payload or header damaged, closed or not, only its samples are missing."""
    _, data, entries = written
    blocks = blocks_of(data)
    samples = [b for b in blocks if b[1] == Kind.SAMPLES]
    path = tmp_path / "damaged.journal"
    for whole in (data, data[: blocks[-1][0]]):
        for at in (samples[2][0] + 100, samples[2][0] + 9):
            changed = bytearray(whole)
            changed[at] ^= 4
            path.write_bytes(changed)
            with open_journal(path) as found:
                assert len(found.samples) == 120
                assert read_all(path, entries) == 100
                with pytest.raises(JournalError, match="samples 40 to 59 cannot be read"):
                    found.samples[30:70]
                assert np.array_equal(found.samples[60:]["seq"], entries["seq"][60:])
                (damage,) = found.verify()
                assert (damage.offset, damage.position, damage.samples) == (samples[2][0], 40, 20)


def test_zeros_after_a_power_cut_are_a_tail(written, tmp_path):
    """A file whose end the disk never got, of zeros or with one block's bytes missing."""
    _, data, _ = written
    last = [b for b in blocks_of(data) if b[1] == Kind.SAMPLES][-1]
    path = tmp_path / "zeros.journal"
    path.write_bytes(data[: last[0]] + bytes(5000))
    with open_journal(path) as found:
        assert (found.tail.offset, found.tail.bytes, found.tail.samples) == (last[0], 5000, None)
        assert len(found.samples) == 100
    torn = data[: last[0] + 32] + bytes(last[2] - 32)
    path.write_bytes(torn)
    with open_journal(path) as found:
        assert (found.tail.offset, found.tail.bytes, found.tail.samples) == (last[0], last[2], 20)
        assert found.damaged == []
        assert len(found.samples) == 100


@pytest.mark.parametrize(
    ("content", "said"),
    [
        (b"", "it is empty"),
        (b"[loop]\ninterval_us = 20\n" * 9, "does not begin with a journal's header"),
        (pack_block(Kind.EVENTS, b"[]", 0, 0), "does not begin"),
        (pack_block(Kind.HEADER, b"[]", 0, 0), "its header lacks start"),
        (pack_block(Kind.HEADER, b"{", 0, 0), "should be JSON"),
    ],
)
def test_what_is_no_journal_is_refused(tmp_path, content, said):
    """Each says what is wrong, with the file's name."""
    path = tmp_path / "x.journal"
    path.write_bytes(content)
    with pytest.raises(JournalError, match=said) as fault:
        open_journal(path)
    assert str(path) in str(fault.value)
    with pytest.raises(JournalError, match="cannot be opened"):
        open_journal(tmp_path)
    with pytest.raises(JournalError, match="cannot be opened"):
        open_journal(tmp_path / "none.journal")


def test_a_later_format_is_refused_and_an_unknown_kind_is_not(written, tmp_path):
    """Another format is named; a kind of block that this version does not know is skipped."""
    _, data, _ = written
    path = tmp_path / "x.journal"
    changed = bytearray(data)
    struct.pack_into("<H", changed, 6, 2)
    struct.pack_into("<I", changed, 28, zlib.crc32(changed[:28]))
    path.write_bytes(changed)
    with pytest.raises(JournalError, match="format 2; this gatestep reads format 1"):
        open_journal(path)
    blocks = blocks_of(data)
    body = data[: blocks[-1][0]]
    path.write_bytes(body + pack_block(99, b"from the future", 120, len(blocks) - 1))
    with open_journal(path) as found:
        assert (len(found.samples), found.tail, found.verify()) == (120, None, [])
        assert len(found.events) == 8


@pytest.mark.parametrize("closed", [True, False])
def test_opening_a_large_journal_reads_little_of_it(tmp_path, closed):
    """Headers only, or the closing index alone: of 2 GB not a thousandth is read."""
    path = tmp_path / "large.journal"
    small, _ = write_journal(tmp_path / "small", 1, 0)
    data = small.read_bytes()
    blocks = blocks_of(data)
    index = {"offset": [], "kind": [], "length": [], "position": []}
    record, most = 80, 13_107
    payload = bytes(record * most)
    crc, count = zlib.crc32(payload), 2000
    with path.open("wb") as file:
        for offset, kind, _ in blocks[:-1]:
            length = struct.unpack_from("<4sHHI", data, offset)[3]
            for name, value in zip(index, (offset, kind, length, 0), strict=True):
                index[name].append(value)
        file.write(data[: blocks[-1][0]])
        for k in range(count):
            head = struct.pack(
                "<4sHHIIQI", b"GSJ\x1a", 2, 1, len(payload), crc, k * most, k + len(blocks) - 1
            )
            fields = (file.tell(), 2, len(payload), k * most)
            for name, value in zip(index, fields, strict=True):
                index[name].append(value)
            file.write(head + struct.pack("<I", zlib.crc32(head)))
            file.seek(len(payload) + -len(payload) % 8, 1)
        file.truncate()
        if closed:
            close = pack_json({"samples": count * most, "index": index})
            file.write(pack_block(Kind.CLOSE, close, count * most, count + len(blocks) - 1))
    with open_journal(path) as found:
        assert found.closed is closed
        assert (len(found.samples), found.tail) == (count * most, None)
        opened = found.bytes_read
        # Not closed, the last block is checked as well: it might be torn.
        assert opened < 1000 * 1000 if closed else opened < len(payload) + 1000 * 1000
        assert found.size > 2_000_000_000
        part = found.samples[10**7 : 10**7 + 100]
        assert len(part) == 100
        assert found.bytes_read - opened < 3 * len(payload)


def test_a_journal_is_read_while_it_is_written(tmp_path):
    """What has been flushed is there; the rest comes with the next opening."""
    journal, log = new_journal(tmp_path), Log(1)
    made = [log.samples(10) for _ in range(2)]
    for k, entries in enumerate(made):
        journal.take(log.block(entries))
        assert journal.flush()
        copy = tmp_path / "copy"
        shutil.copy(journal.status()["path"], copy)
        with open_journal(journal.status()["path"]) as found:
            assert len(found.samples) == 10 * (k + 1)
            assert not found.closed
            assert found.tail is None
    journal.close()


def test_a_file_cut_short_under_the_reader_is_an_error(written, tmp_path):
    """It is no end of the process, as it would be for memory mapped from the file."""
    _, data, _ = written
    path = tmp_path / "x.journal"
    path.write_bytes(data)
    with open_journal(path) as found:
        with path.open("r+b") as file:
            file.truncate(3000)
        with pytest.raises(JournalError, match="samples"):
            found.samples[:]
    with pytest.raises(JournalError, match="cannot be read"):
        found.samples[0:1]
