"""What a rig file says of the record: where it goes, and facts that only a person knows."""

from __future__ import annotations

from typing import Literal

from pydantic import Field

from .specbase import Spec, Text


class RecordSpec(Spec):
    """The record: one journal a run of the server, in ``folder`` beside the rig file."""

    on: bool = True
    folder: str = Field(default="records", min_length=1, max_length=1000)
    flush_ms: float = Field(default=200.0, ge=1, le=60_000)
    sync_s: float = Field(default=1.0, ge=0, le=86_400)
    queue_mb: float = Field(default=256.0, ge=1, le=65_536)
    tables: bool = True


class SubjectSpec(Spec):
    """Facts of the animal or tissue, as the record's export names them; none is invented."""

    subject_id: Text | None = None
    species: Text | None = None
    strain: Text | None = None
    genotype: Text | None = None
    sex: Literal["M", "F", "U", "O"] | None = None
    age: Text | None = None
    weight: Text | None = None
    description: Text | None = None


class SessionSpec(Spec):
    """Facts of the session, likewise."""

    description: Text | None = None
    experimenter: tuple[Text, ...] = Field(default=(), max_length=50)
    lab: Text | None = None
    institution: Text | None = None
    experiment: Text | None = None
    slices: Text | None = None
    pharmacology: Text | None = None
    electrode: Text | None = None
    notes: Text | None = None
