"""Model files: found by name or path, read, checked.

The models that come with gatestep lie in ``configs/models``; a model's name is its
file's name without the suffix.
"""

from __future__ import annotations

import difflib
import hashlib
from dataclasses import dataclass
from pathlib import Path

from .errors import FileError, FormulaError
from .files import parse, parse_toml, read_bytes
from .formula import make_curve
from .specs import ModelSpec


@dataclass(frozen=True)
class LoadedModel:
    """A model file: its name, where it lies, its text, the text's SHA-256, what it says."""

    name: str
    path: Path
    text: str
    sha256: str
    spec: ModelSpec


def shipped_folder() -> Path:
    """Folder of the models that come with gatestep, in a wheel or a checkout."""
    package = Path(__file__).resolve().parent
    installed = package / "configs" / "models"
    return installed if installed.is_dir() else package.parents[1] / "configs" / "models"


def shipped_names() -> list[str]:
    """Names of the models that come with gatestep, in alphabetical order."""
    return sorted(path.stem for path in shipped_folder().glob("*.toml"))


def shipped_models() -> list[LoadedModel]:
    """All models that come with gatestep, in alphabetical order."""
    return [load_model(name) for name in shipped_names()]


def find_model(name_or_path: str, relative_to: Path | None = None) -> Path:
    """Path of a model file.

    Parameters
    ----------
    name_or_path : str
        A shipped model's name, or a path: anything with a separator or ``.toml``.
    relative_to : Path, optional
        Folder that relative paths start from (a rig file's own); default the
        working folder.

    Raises
    ------
    FileError
        If no shipped model has that name.
    """
    if "/" in name_or_path or "\\" in name_or_path or name_or_path.endswith(".toml"):
        return (relative_to or Path()) / Path(name_or_path).expanduser()
    known = shipped_names()
    if name_or_path in known:
        return shipped_folder() / f"{name_or_path}.toml"
    close = difflib.get_close_matches(name_or_path, known, 3, 0.4)
    hint = f" Close: {', '.join(close)}." if close else ""
    raise FileError(
        f"no model is named {name_or_path!r}.{hint} 'gatestep models' lists them; "
        "a file of your own is given as a path, such as ./mine.toml"
    )


def load_model(name_or_path: str, relative_to: Path | None = None) -> LoadedModel:
    """Read and check a model file, formulas included.

    Raises
    ------
    FileError
        If it cannot be found, read or understood; the message lists every fault.
    """
    path = find_model(name_or_path, relative_to)
    content = read_bytes(path)
    spec = parse(ModelSpec, parse_toml(content, path), path)
    _check_formulas(spec, path)
    digest = hashlib.sha256(content).hexdigest()
    return LoadedModel(path.stem, path, content.decode("utf-8"), digest, spec)


def _check_formulas(spec: ModelSpec, path: Path) -> None:
    faults = []
    for conductance in spec.conductance:
        for gate in conductance.gate:
            where = f'{path}: conductance "{conductance.name}", gate "{gate.name}"'
            for key in ("alpha", "beta", "inf", "tau"):
                rate = getattr(gate, key)
                try:
                    if rate is not None:
                        make_curve(rate, spec.parameters, f"{where}: {key}")
                except FormulaError as error:
                    faults.append(str(error))
    if faults:
        raise FileError("\n".join(faults))
