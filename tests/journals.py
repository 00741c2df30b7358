"""Journals for tests: log blocks as the loop makes them, and journals written from them."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from gatestep.config import LoadedRig
from gatestep.journal import Journal
from gatestep.journalfacts import header_of
from gatestep.loop import ENTRY, Entry
from gatestep.specs import RecordSpec, RigSpec
from gatestep.tick import LOOP
from gatestep.wire import NIL

RIG_TEXT = 'title = "µ"\n'


def rig_of(cells: int, folder: Path) -> LoadedRig:
    """A rig of some cells that is never run."""
    names = [{"name": f"c{k}", "model": "leak"} for k in range(cells)]
    spec = RigSpec.model_validate({"loop": {"interval_us": 20.0}, "cell": names})
    return LoadedRig(folder / "rig.toml", RIG_TEXT, spec)


class Log:
    """A loop's log, made to order: blocks of samples with noise in every field."""

    def __init__(self, cells: int, seed: int = 1) -> None:
        self.cells, self.seq, self.lost, self.nsec = cells, 0, 0, 10**9
        self.random = np.random.default_rng(seed)

    def samples(self, count: int, flags: int = 1, seqs: Any = None) -> np.ndarray:
        """Entries of samples; their numbers go on unless given."""
        entries = np.zeros(count, ENTRY)
        entries["kind"] = Entry.SAMPLE
        if seqs is None:
            seqs = self.seq + 1 + np.arange(count)
        entries["seq"] = seqs
        if count:
            self.seq = int(max(self.seq, entries["seq"].max()))
        entries["t_us"] = 20.0 * entries["seq"]
        entries["in_force"] = entries["seq"] - 2
        entries["lag_us"] = self.random.uniform(10, 40, count)
        entries["nsec"] = self.nsec + 20_000 * np.arange(count)
        self.nsec += 20_000 * count
        entries["service_nsec"] = self.random.integers(3000, 9000, count)
        entries["flags"] = flags
        for name in ("v_mv", "i_pa", "stimulus_pa"):
            entries[name] = self.random.normal(0, 50, entries[name].shape)
        return entries

    def other(self, kind: Entry, **fields: Any) -> np.ndarray:
        """An entry that is no sample."""
        entries = np.zeros(1, ENTRY)
        entries["kind"], entries["nsec"], entries["seq"] = kind, self.nsec, self.seq
        entries["cell"] = NIL
        for name, value in fields.items():
            entries[name] = value
        return entries

    def block(self, *entries: np.ndarray, **counters: int) -> bytes:
        """Entries as the loop hands them over."""
        loop = np.zeros(1, LOOP)
        loop["records_lost"] = self.lost
        for name, value in counters.items():
            loop[name] = value
        return loop.tobytes() + b"".join(part.tobytes() for part in entries)


def new_journal(folder: Path, cells: int = 1, said: list[str] | None = None, **options: Any):
    """A journal of a rig of some cells, in a folder; ``options`` are RecordSpec's, or ``out``."""
    more = {"out": options.pop("out")} if "out" in options else {}
    spec = RecordSpec(**options)
    header = header_of(rig_of(cells, folder), [])
    say = (lambda _: None) if said is None else said.append
    return Journal(spec, folder, header, cells, say, "rig", **more)


def expected_samples(entries: np.ndarray, cells: int) -> dict[str, np.ndarray]:
    """What the journal must give back for entries of samples, field by field."""
    plain = ("seq", "t_us", "in_force", "lag_us", "nsec", "service_nsec", "flags")
    found = {name: entries[name] for name in plain}
    return {**found, **{n: entries[n][:, :cells] for n in ("v_mv", "i_pa", "stimulus_pa")}}


def write_journal(folder: Path, cells: int = 2, blocks: int = 6, a_block: int = 20, **options: Any):
    """A closed journal of several blocks with models and events; its path and its entries."""
    from gatestep.library import load_model
    from gatestep.tables import build_tables

    journal, log = new_journal(folder, cells, **options), Log(cells)
    model = load_model("leak")
    number = journal.add_model(model, build_tables(model.spec))
    for k in range(cells):
        journal.note("swap", cell=k, model=number, name=model.name)
    made = []
    for k in range(blocks):
        made.append(log.samples(a_block))
        journal.take(log.block(made[-1]))
        journal.note("mark", text=f"µ {k}")
        journal.flush()
    path = Path(journal.close()["path"])
    return path, np.concatenate(made) if made else np.empty(0, ENTRY)
