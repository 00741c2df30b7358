"""The check's word on the record: whether it can be kept, and for how long there is room."""

from __future__ import annotations

import os
import shutil
from pathlib import Path

from ..config import LoadedRig
from ..hostfacts import Finding
from ..journalbytes import sample_dtype

WEAK_H = 2.0
"""Room for fewer hours than this is called weak."""
_WHY = "A result can be published when every injected current can be computed again."


def record_finding(rig: LoadedRig) -> Finding:
    """Whether the folder of the record can be written, and how many hours it holds."""
    record = rig.spec.record
    if not record.on:
        return Finding("record", "weak", "off", _WHY, "in the rig file: [record] on = true")
    folder = rig.folder / Path(record.folder).expanduser()
    there = next((p for p in (folder, *folder.parents) if p.exists()), folder)
    if not there.is_dir() or not os.access(there, os.W_OK | os.X_OK):
        found = f"{folder}: cannot be written ({there})"
        return Finding("record", "missing", found, _WHY, "in the rig file: [record] folder")
    per_s = sample_dtype(len(rig.spec.cell)).itemsize * 1e6 / rig.spec.loop.interval_us
    free = shutil.disk_usage(there).free
    hours = free / per_s / 3600
    found = (
        f"{folder}: {per_s / 1e6:.2f} MB a second at this tick, {free / 1e9:.0f} GB free: "
        f"{hours:.1f} hours"
    )
    more = {"folder": str(folder), "bytes_per_s": per_s, "free_bytes": free, "hours": hours}
    if hours < WEAK_H:
        return Finding("record", "weak", found, _WHY, "make room, or choose another folder", more)
    return Finding("record", "ok", found, _WHY, None, more)
