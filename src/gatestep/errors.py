"""Every error gatestep raises on purpose.

Each subclasses the nearest built-in, so callers that know nothing of gatestep
still catch what they expect. Messages say what was found, where, and what to do.
"""

from __future__ import annotations


class GatestepError(Exception):
    """Base of all errors a user can cause and a user can mend."""


class FileError(GatestepError, ValueError):
    """A rig or model file that cannot be used; the message lists every fault found."""


class FormulaError(GatestepError, ValueError):
    """A rate formula that is not plain arithmetic, or gives numbers that cannot be used."""


class TableError(GatestepError, ValueError):
    """A gate whose table cannot reach the stated accuracy, or does not fit."""


class FirmwareError(GatestepError, ValueError):
    """A model that cannot be made into firmware as asked."""


class WireError(GatestepError, ValueError):
    """Bytes that are not a valid message."""


class JournalError(GatestepError, ValueError):
    """A journal that cannot be read there, or cannot be written."""


class ControlError(GatestepError, RuntimeError):
    """The server refused a request; the message is the server's own."""


class LinkError(GatestepError, ConnectionError):
    """The other end cannot be reached or does not answer."""


class MissingExtraError(GatestepError, ImportError):
    """An optional package is needed for this.

    Parameters
    ----------
    package : str
        The package that could not be imported.
    extra : str
        The gatestep extra that brings it.
    purpose : str
        What it is needed for, in words.
    """

    def __init__(self, package: str, extra: str, purpose: str) -> None:
        super().__init__(
            f"{purpose} needs {package}, which is not installed: pip install 'gatestep[{extra}]'"
        )
