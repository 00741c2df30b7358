"""Answers to control requests: at once, or once the loop or the builder has done its part."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Future
from dataclasses import dataclass
from typing import Any

from .errors import GatestepError
from .watch import LoopEvent

Answer = dict[str, Any]


@dataclass(frozen=True)
class Confirmed:
    """An answer that waits until the loop has carried out an order."""

    number: int
    finish: Callable[[LoopEvent], Answer]


@dataclass(frozen=True)
class Built:
    """An answer that waits until tables are built."""

    future: Future[Any]
    finish: Callable[[Future[Any]], Answer]


Waiting = Confirmed | Built


def refusal(text: str) -> Answer:
    """The answer that says why not."""
    return {"ok": False, "error": text}


def safely(work: Callable[[], Answer | Waiting]) -> Any:
    """What ``work`` gives, or the refusal that says why it could not.

    No request, whatever is in it, may end the thread that carries disarm and stop.
    """
    try:
        return work()
    except GatestepError as fault:
        return refusal(str(fault))
    except Exception as fault:
        return refusal(
            f"the request met a fault in the server, {type(fault).__name__}: {fault}; "
            "nothing was changed by it that an answer has not confirmed"
        )
