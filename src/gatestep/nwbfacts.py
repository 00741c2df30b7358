"""What a journal states once, as an NWB file names it: subject, session, provenance.

Nothing is made up: a fact that the rig file does not give is named as missing.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Mapping
from dataclasses import asdict
from typing import Any

from . import __version__
from .errors import JournalError
from .files import parse
from .journalfile import Event, JournalFile
from .recordspecs import SessionSpec, SubjectSpec

NOT_STATED = "not stated in the rig file"

_PIECE = 1 << 22
_LONGEST_TOLD = 2000


def plain(text: str) -> str:
    """A text as an NWB file can hold it: without NUL, and in UTF-8."""
    return text.replace("\0", "\N{SYMBOL FOR NULL}").encode("utf-8", "replace").decode("utf-8")


def subject_of(journal: JournalFile) -> SubjectSpec:
    """What the rig file says of the subject."""
    return parse(SubjectSpec, journal.header["rig_spec"].get("subject") or {}, journal.path)


def session_of(journal: JournalFile) -> SessionSpec:
    """What the rig file says of the session."""
    return parse(SessionSpec, journal.header["rig_spec"].get("session") or {}, journal.path)


def missing_facts(subject: SubjectSpec, session: SessionSpec) -> list[str]:
    """The facts that the rig file does not give, as ``subject.sex``."""
    given = {"subject": subject.model_dump(), "session": session.model_dump()}
    return [f"{part}.{key}" for part, facts in given.items() for key in facts if not facts[key]]


def subject_facts(subject: SubjectSpec) -> dict[str, str]:
    """What is given of the subject."""
    return {key: plain(value) for key, value in subject.model_dump().items() if value}


def file_facts(journal: JournalFile, session: SessionSpec, sha256: str) -> dict[str, Any]:
    """What the file as a whole is said to be; ``sha256`` is the journal's."""
    texts = {
        "lab": session.lab,
        "institution": session.institution,
        "experiment_description": session.experiment,
        "slices": session.slices,
        "pharmacology": session.pharmacology,
        "notes": session.notes,
        "stimulus_notes": "; ".join(plan_titles(journal)) or None,
    }
    found: dict[str, Any] = {key: plain(text) for key, text in texts.items() if text}
    if session.experimenter:
        found["experimenter"] = tuple(plain(name) for name in session.experimenter)
    program = journal.header.get("program") or {}
    recorder = f"{program.get('name', 'gatestep')} {program.get('version', 'unknown')}"
    return {
        **found,
        "identifier": sha256,
        "session_id": plain(journal.path.stem).replace("/", "-"),
        "session_start_time": journal.start,
        "session_description": plain(session.description or NOT_STATED),
        "data_collection": (
            f"Dynamic clamp, recorded by {recorder} in the journal {plain(journal.path.name)}, a "
            f"sample and an answer every {journal.interval_us:g} µs. Times are the rig's sample "
            "clock: a sample's number since its session's first one, times that interval."
        ),
        "was_generated_by": [["gatestep", __version__]],
    }


def plans_of(journal: JournalFile) -> list[dict[str, Any]]:
    """The plans that played, as the journal has them."""
    plans = (e.fields.get("plan") for e in journal.events if e.kind == "plan")
    return [plan if isinstance(plan, dict) else {} for plan in plans]


def plan_titles(journal: JournalFile) -> list[str]:
    """Their titles, each once."""
    titles = [str(plan["title"]) for plan in plans_of(journal) if plan.get("title")]
    return list(dict.fromkeys(titles))


def provenance(
    journal: JournalFile, sha256: str, verdict: Mapping[str, Any] | None
) -> dict[str, tuple[str, str]]:
    """Where the data comes from: texts by their name, each with what it is."""
    header = journal.header
    facts = {
        "journal": {
            "name": journal.path.name,
            "sha256": sha256,
            "bytes": journal.size,
            "closed": journal.closed,
            "torn": None if journal.tail is None else asdict(journal.tail),
            "damaged": [asdict(found) for found in journal.damaged],
        },
        "exported_by": {"name": "gatestep", "version": __version__},
        **{key: header.get(key) for key in ("program", "versions", "machine", "host", "start")},
        "rig": {key: header["rig"].get(key) for key in ("path", "sha256")},
        "rig_spec": header["rig_spec"],
    }
    found = {
        "provenance": (
            json.dumps(facts, ensure_ascii=False),
            "JSON: the journal that this was made from with its hash, versions, machine, rig",
        )
    }
    if header["rig"].get("text"):
        found["rig_file"] = (header["rig"]["text"], "TOML: the rig file in full")
    for number, plan in enumerate(plans_of(journal), 1):
        if plan.get("text"):
            found[f"plan_file_{number}"] = (plan["text"], f"TOML: plan {number} in full")
    if verdict is not None:
        what = "JSON: whether every current was computed again from the journal, bit for bit"
        found["replay"] = (json.dumps(verdict, ensure_ascii=False), what)
    return {name: (plain(text), what) for name, (text, what) in found.items()}


def hash_of(
    journal: JournalFile, progress: Callable[[int, int], None] = lambda _done, _of: None
) -> str:
    """SHA-256 of a journal as it was when it was opened.

    Raises
    ------
    JournalError
        If it cannot be read, or has become shorter since.
    """
    digest, left = hashlib.sha256(), journal.size
    try:
        with journal.path.open("rb") as file:
            while left and (piece := file.read(min(left, _PIECE))):
                digest.update(piece)
                left -= len(piece)
                progress(journal.size - left, journal.size)
    except OSError as fault:
        raise JournalError(f"{journal.path}: cannot be read: {fault.strerror or fault}") from None
    if left:
        raise JournalError(f"{journal.path}: has become {left} bytes shorter while it was read")
    return digest.hexdigest()


def told(event: Event) -> str:
    """An event's own facts in words: ``cell 0, which gmax_ns, value 12.0``."""
    fields = dict(event.fields)
    if event.kind == "plan":
        plan = fields.pop("plan", None)
        fields = {"title": plan.get("title") if isinstance(plan, dict) else None, **fields}
    words = ", ".join(f"{key} {_words(value)}" for key, value in fields.items())
    return plain(words if len(words) <= _LONGEST_TOLD else f"{words[: _LONGEST_TOLD - 3]}...")


def _words(value: Any) -> str:
    """A value without braces, which readers take for data to be unpacked."""
    if isinstance(value, dict):
        return f"({', '.join(f'{key} {_words(inner)}' for key, inner in value.items())})"
    if isinstance(value, list | tuple):
        return f"[{', '.join(_words(inner) for inner in value)}]"
    return str(value)
