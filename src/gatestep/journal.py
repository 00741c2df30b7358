"""The journal's writer: everything that happens, on disk, while it happens.

The attending thread hands over the loop's log and its own notes and never waits; one
writer thread owns the file. Between them stands a queue of bounded size. A disk that is
slow fills it, and then samples are dropped and counted, events are kept; a disk that
fails ends the record. The loop goes on in every case, and it is said once.
"""

from __future__ import annotations

import contextlib
import datetime
import os
import threading
import time
from collections.abc import Callable, Mapping
from concurrent.futures import Future, ThreadPoolExecutor
from pathlib import Path
from typing import Any

import numpy as np

from .errors import JournalError
from .journalbytes import Kind, dtype_as_json, pack_block, pack_json, sample_dtype, unpack_json
from .journalentries import Entries, Event
from .journalfacts import model_payload, start_now
from .journalout import Out, sync_folder
from .journalqueue import Batch, Dropped, Expected, Item, Model, Note, Waiting
from .library import LoadedModel
from .recordspecs import RecordSpec
from .tables import Tables

BLOCK_BYTES = 1 << 20
"""Most bytes of samples in one block."""

_WAKE_BYTES = 2 << 20  # waiting: then the writer need not be due to be woken
_CLOSE_S = 30.0


class Journal:
    """A journal that is being written.

    Nothing here raises for a disk's sake: a journal that cannot be made or carried on is
    ``failed``, ``say`` is told once, and everything handed over from then on is counted.

    Parameters
    ----------
    spec : RecordSpec
    folder : Path
        Where the file is made; made itself when missing.
    header : mapping
        From :func:`gatestep.journalfacts.header_of`.
    cells : int
        Voltages of a sample.
    say : callable
        Takes a line for the user; called on the writer's thread or the caller's.
    name : str
        The middle of the file's name: the rig file's, without its suffix.
    """

    def __init__(
        self,
        spec: RecordSpec,
        folder: Path,
        header: Mapping[str, Any],
        cells: int,
        say: Callable[[str], None],
        name: str,
        out: Callable[[Path], Out] = Out,
    ) -> None:
        self._spec, self._say = spec, say
        self._lock = threading.Lock()
        self._waiting = Waiting(int(spec.queue_mb * 1e6))
        self._models: dict[tuple[str, str], int] = {}
        self._state, self._reason = ("on", "") if spec.on else ("off", "")
        self._path: Path | None = None
        self._size = self._written = self._serial = 0
        self._index: dict[str, list[int]] = {
            "offset": [], "kind": [], "length": [], "position": []
        }  # fmt: skip
        self._entries = Entries(cells)
        self._wake, self._closing = threading.Event(), threading.Event()
        self._thread: threading.Thread | None = None
        self._synced, self._synced_size = 0.0, 0
        self._syncer = ThreadPoolExecutor(1, thread_name_prefix="journal sync")
        self._syncing: Future[None] | None = None
        if spec.on:
            self._begin(folder, dict(header), cells, name, out)

    def add_model(self, model: LoadedModel, tables: Tables) -> int:
        """Have a model in the journal, once for each text and table; its number there."""
        with self._lock:
            key = model.sha256, tables.sha256
            if key not in self._models:
                self._models[key] = len(self._models)
                number = self._models[key]
                self._put(Model(number, model, tables), tables.table.nbytes)
            return self._models[key]

    def expect(self, number: int, kind: str, **fields: Any) -> None:
        """Say what an order means, before the log that tells its outcome is handed over."""
        content = pack_json(fields)
        with self._lock:
            self._put(Expected(number, kind, content), len(content))

    def note(self, kind: str, **fields: Any) -> None:
        """Put in an event after all that was handed over so far."""
        content = pack_json(fields)
        with self._lock:
            self._put(Note(kind, time.monotonic_ns(), content), len(content))

    def take(self, block: bytes) -> None:
        """Hand over a block of the loop's log: its ``LOOP`` record and its entries."""
        with self._lock:
            on = self._state == "on"
            if on and self._waiting.has_room(len(block)):
                self._put(block, len(block))
                return
            if not on and self._state != "failed":
                return
            first = on and not self._waiting.dropped_samples
            dropped = self._waiting.leave_out(block, keep_events=on)
        if first and dropped:
            self._say(
                "RECORD INCOMPLETE: the disk is too slow, and samples are left out of "
                f"{self._path}; the loop goes on. Record to a faster disk ([record] folder)"
            )

    def status(self) -> dict[str, Any]:
        """How the journal stands."""
        with self._lock:
            return {
                "state": self._state,
                "path": None if self._path is None else str(self._path),
                "bytes": self._size,
                "samples": self._written,
                "queue_high_water_bytes": self._waiting.high_water,
                "dropped_samples": self._waiting.dropped_samples,
                "reason": self._reason or None,
            }

    def flush(self, timeout_s: float = _CLOSE_S) -> bool:
        """Wait until all that was handed over so far is in the file; whether it is."""
        written = threading.Event()
        with self._lock:
            if self._state != "on":
                return False
            self._put(written, 0)
        self._wake.set()
        return written.wait(timeout_s) and self._state == "on"

    def close(self) -> dict[str, Any]:
        """Write what waits, and the end; how the journal stands then."""
        if self._thread is not None:
            self._closing.set()
            self._wake.set()
            self._thread.join(_CLOSE_S)
            if self._thread.is_alive():
                self._declare_failed(f"the disk has not taken the rest in {_CLOSE_S:g} s")
        return self.status()

    def is_writing(self) -> bool:
        """Whether the writer's thread still has the file."""
        return self._thread is not None and self._thread.is_alive()

    def _put(self, item: Item, size: int) -> None:
        """Queue an item while there is a record; the lock is held."""
        if self._state == "on":
            self._waiting.put(item, size)
            if self._waiting.queued >= _WAKE_BYTES:
                self._wake.set()

    def _begin(
        self,
        folder: Path,
        header: dict[str, Any],
        cells: int,
        name: str,
        out: Callable[[Path], Out],
    ) -> None:
        """Make the file and its first block, and start the writer."""
        header = {
            "start": start_now(),
            **header,
            "sample_dtype": dtype_as_json(sample_dtype(cells)),
        }
        start = datetime.datetime.fromisoformat(header["start"]["time"])
        self._path = folder / f"{start:%Y%m%dT%H%M%S}-{name}-{os.getpid()}.journal"
        try:
            folder.mkdir(parents=True, exist_ok=True)
            self._out = out(self._path)
            self._append(Kind.HEADER, pack_json(header))
            self._out.sync()
            sync_folder(folder)
        except (OSError, JournalError) as fault:
            self._declare_failed(_reason_of(fault))
            return
        self._thread = threading.Thread(target=self._run, name="journal", daemon=True)
        self._thread.start()

    def _run(self) -> None:
        """[writer] Write until closed, or until the disk fails."""
        try:
            while not self._closing.is_set():
                self._wake.wait(self._spec.flush_ms / 1000)
                self._wake.clear()
                self._turn()
            self._turn()
            self._end()
        except Exception as fault:  # whatever it is, the loop goes on
            self._give_up(_reason_of(fault))
        finally:
            self._syncer.shutdown()
            with contextlib.suppress(OSError):
                self._out.close()

    def _turn(self) -> None:
        """[writer] Write all that waits."""
        more = True
        while more:
            with self._lock:
                if self._closing.is_set():
                    self._waiting.put_missing()
                batch = self._waiting.batch()
            self._write(batch)
            with self._lock:
                self._waiting.written(batch)
                more = bool(self._waiting)
            _tell(batch)
            if not self._out.is_in_place():
                raise JournalError("the file has been moved or removed")
            self._sync()

    def _write(self, batch: Batch) -> None:
        """[writer] A batch as blocks: what samples need to be understood stands before them."""
        logs: list[bytes] = []
        for item, _ in batch:
            if isinstance(item, bytes):
                logs.append(item)
                continue
            self._entries.take(logs)
            logs = []
            self._write_item(item)
        self._entries.take(logs)
        samples, events = self._entries.give()
        if events:
            self._append(Kind.EVENTS, pack_json(events))
        if samples:
            self._append_samples(np.concatenate(samples) if len(samples) > 1 else samples[0])

    def _write_item(self, item: Item) -> None:
        """[writer] One item that is not a block of the log."""
        entries = self._entries
        if isinstance(item, Model):
            payload = model_payload(item.id, item.model, item.tables, self._spec.tables)
            self._append(Kind.MODEL, payload)
        elif isinstance(item, Expected):
            entries.expect(item.number, item.kind, unpack_json(item.fields))
        elif isinstance(item, Note):
            entries.note(item.kind, item.nsec, unpack_json(item.fields))
        elif isinstance(item, Dropped):
            entries.skip(item.samples, item.newest)
            fields = {"samples": item.samples, "blocks": item.blocks}
            entries.note("dropped", time.monotonic_ns(), fields)

    def _append_samples(self, samples: np.ndarray) -> None:
        """[writer] Samples as blocks of at most ``BLOCK_BYTES``."""
        most = max(BLOCK_BYTES // samples.dtype.itemsize, 1)
        for start in range(0, len(samples), most):
            part = samples[start : start + most]
            self._append(Kind.SAMPLES, part.tobytes())
            with self._lock:
                self._written += len(part)

    def _append(self, kind: Kind, payload: bytes) -> None:
        """[writer] One block to the file's end."""
        block = pack_block(kind, payload, self._written, self._serial)
        self._out.write(block)
        entry = {"offset": self._size, "kind": int(kind), "length": len(payload)}
        for name, value in {**entry, "position": self._written}.items():
            self._index[name].append(value)
        self._serial += 1
        with self._lock:
            self._size += len(block)

    def _sync(self) -> None:
        """[writer] Have the disk take it all, where that is due.

        A disk may need seconds for that. Unless it is to be waited for, it is asked on a
        thread of its own: what comes meanwhile is written all the same, and a killed process
        then loses no more of it.
        """
        if self._syncing is not None and self._syncing.done():
            self._syncing.result()
            self._syncing = None
        now = time.monotonic()
        due = self._size > self._synced_size and now - self._synced >= self._spec.sync_s
        if not due or self._syncing is not None:
            return
        self._synced, self._synced_size = now, self._size
        if self._spec.sync_s == 0:
            self._out.sync()
        else:
            self._syncing = self._syncer.submit(self._out.sync)

    def _end(self) -> None:
        """[writer] The last block of an orderly end."""
        with self._lock:
            known = {
                "queue_high_water_bytes": self._waiting.high_water,
                "dropped_samples": self._waiting.dropped_samples,
                "dropped_blocks": self._waiting.dropped_blocks,
            }
        close = {
            "nsec": time.monotonic_ns(),
            "samples": self._written,
            "counters": self._entries.counters(),
            **known,
            "index": {name: list(values) for name, values in self._index.items()},
        }
        self._append(Kind.CLOSE, pack_json(close))
        if self._syncing is not None:
            self._syncing.result()  # a fault is told to the first who asks, and to no one after
        self._out.sync()
        with self._lock:
            # A close that gave up on the disk has already said that it failed.
            self._state = "ended" if self._state == "on" else self._state

    def _give_up(self, reason: str) -> None:
        """[writer] The record ends here; the file is left whole, saying so where it can."""
        unwritten = self._entries.position - self._written
        with self._lock:
            waiting, samples, blocks = self._waiting.give_up(unwritten)
            # Under the same lock: nothing may be queued any more that no one will count.
            news = self._set_failed(reason)
        fields = {"samples": samples, "blocks": blocks, "reason": reason}
        self._entries.give()
        if news:
            self._say_failed()
        self._leave_word(fields)
        _tell(waiting)

    def _leave_word(self, fields: Event) -> None:
        """[writer] Take back a torn block, and put in its place that the record failed."""
        with contextlib.suppress(OSError):
            if self._out.is_reachable():
                self._out.cut(self._size)
                self._entries.position = self._written
                self._entries.note("dropped", time.monotonic_ns(), fields)
                try:
                    self._append(Kind.EVENTS, pack_json(self._entries.give()[1]))
                    self._out.sync()
                except OSError:
                    self._out.cut(self._size)

    def _set_failed(self, reason: str) -> bool:
        """The record has ended; whether that is news. The lock is held."""
        if self._state == "failed":
            return False
        self._state, self._reason = "failed", reason
        return True

    def _declare_failed(self, reason: str) -> None:
        """The record has ended, which is said once."""
        with self._lock:
            news = self._set_failed(reason)
        if news:
            self._say_failed()

    def _say_failed(self) -> None:
        self._say(
            f"RECORD FAILED: {self._path}: {self._reason}. Nothing more is recorded; the loop goes "
            "on. Mend the disk or [record] folder and start the server again for a new record"
        )


def _tell(batch: Batch) -> None:
    """[writer] Let those go on who wait for what was before them in the queue."""
    for item, _ in batch:
        if isinstance(item, threading.Event):
            item.set()


def _reason_of(fault: BaseException) -> str:
    """Why it failed, in few words."""
    if isinstance(fault, OSError):
        return fault.strerror or str(fault) or type(fault).__name__
    return str(fault) if isinstance(fault, JournalError) else f"{type(fault).__name__}: {fault}"
