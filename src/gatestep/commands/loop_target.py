"""Which server ``gatestep bench loop`` measures: the one that runs, or one of its own."""

from __future__ import annotations

import json
import select
import signal
import socket
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ..config import LoadedRig
from ..control import Control
from ..errors import ControlError, LinkError
from ..library import find_model
from ..specs import ControlSpec, FeedSpec, LimitsSpec, NetworkSpec, RigSpec

START_S = 600.0
"""How long a private server may take to start; the first start on a machine compiles."""
_ARM_S = 10.0
_PR_SET_PDEATHSIG = 1
# Like 'python -m gatestep', but ended in order when this process ends, however it does.
_SERVE = f"""
import ctypes
prctl = getattr(ctypes.CDLL(None), "prctl", lambda *_: 0)
prctl({_PR_SET_PDEATHSIG}, {int(signal.SIGINT)}, 0, 0, 0)
from gatestep.cli import main
main()
"""
_CONNECT_S = 1.0


@dataclass(frozen=True)
class Target:
    """A server to measure: its loop endpoint, its status, whether it is our own."""

    endpoint: str
    status: dict[str, Any]
    private: bool

    @property
    def facts(self) -> dict[str, Any]:
        """What a result says of it."""
        return {
            "private": self.private,
            "state": self.status["state"],
            "lane": self.status.get("lane"),
            "anticipate": self.status.get("anticipate"),
            "version": self.status.get("version"),
            "transport": self.endpoint.partition(":")[0],
        }


@contextmanager
def choose_target(rig: LoadedRig, say: Callable[[str], None]) -> Iterator[Target]:
    """The server that answers at the rig file's control endpoint, else a private one.

    Raises
    ------
    ControlError
        When a server runs there that must not be disturbed: armed, or held by a rig.
    LinkError
        When what listens there gives no status, runs another rig file, or when a private
        server does not start.
    """
    status = running_status(rig.spec.control.endpoint)
    if status is None:
        with private_server(rig, say) as target:
            yield target
    else:
        refuse_if_in_use(status, rig)
        yield Target(status["endpoints"]["loop"], status, private=False)


def running_status(endpoint: str) -> dict[str, Any] | None:
    """Status of the server at a control endpoint, None when nobody listens there.

    Raises
    ------
    LinkError
        When somebody listens there and gives no status.
    """
    if not _listens(endpoint):
        return None
    try:
        with Control(endpoint) as control:
            return control.status()
    except LinkError:
        raise LinkError(
            f"control endpoint {endpoint}: something listens there but gives no status. A "
            "server with CURVE keys, or one at work, must not be disturbed: stop it first"
        ) from None


def _listens(endpoint: str) -> bool:
    if endpoint.startswith("ipc://"):
        link = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
        name = endpoint.removeprefix("ipc://")
        address: Any = f"\0{name[1:]}" if name.startswith("@") else name
    else:
        host, _, port = endpoint.removeprefix("tcp://").rpartition(":")
        host = host.strip("[]")
        link = socket.socket(socket.AF_INET6 if ":" in host else socket.AF_INET)
        address = ("127.0.0.1" if host == "*" else host, int(port))
    with link:
        link.settimeout(_CONNECT_S)
        try:
            return link.connect_ex(address) == 0
        except OSError:
            return False


def refuse_if_in_use(status: dict[str, Any], rig: LoadedRig) -> None:
    """Leave a server alone that works for a rig, or that was started with another file."""
    where = f"the server at {rig.spec.control.endpoint}"
    if status["state"] == "armed":
        raise ControlError(
            f"{where} is armed; measuring would disturb it. When no cell needs it any more, "
            "'gatestep disarm', or stop it and a private server is measured"
        )
    if status["rig"] == "connected":
        raise ControlError(
            f"{where} is held by a rig (seq {status['seq']}); end the rig's run first, or wait "
            "until it has been silent for limits.silence_ms"
        )
    cells = len(status["cells"])
    loop = rig.spec.loop
    same = (status["interval_us"], status["budget_us"]) == (loop.interval_us, loop.budget)
    if not same or cells != len(rig.spec.cell):
        raise LinkError(
            f"{where} runs another rig file ({status['rig_file']}: {cells} cell(s), tick "
            f"{status['interval_us']:g} µs, budget {status['budget_us']:g} µs); give that one, "
            "or stop the server"
        )


def private_rig(rig: LoadedRig, folder: Path) -> RigSpec:
    """The rig on sockets of its own, with nothing that would end a measurement.

    Endpoints become local, the loop's of the same kind as before; keys and lists of peers
    go; a record goes to ``folder``; silence and late answers do not trip.
    """
    spec = rig.spec
    over_tcp = spec.loop.endpoint.startswith("tcp://")
    endpoint = f"tcp://127.0.0.1:{_free_port()}" if over_tcp else f"ipc://{folder}/loop"
    cells = tuple(
        cell.model_copy(update={"model": str(find_model(cell.model, rig.folder).resolve())})
        for cell in spec.cell
    )
    changes: dict[str, Any] = {
        "loop": spec.loop.model_copy(update={"endpoint": endpoint}),
        "control": ControlSpec(endpoint=f"ipc://{folder}/control"),
        "feed": FeedSpec(endpoint=f"ipc://{folder}/feed", every=spec.feed.every),
        "network": NetworkSpec(),
        "limits": LimitsSpec(silence_ms=600_000.0, late_run=1_000_000),
        "cell": cells,
        "simulated": None,
    }
    changes["record"] = spec.record.model_copy(update={"folder": str(folder / "record")})
    return spec.model_copy(update=changes)


def _free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def as_toml(value: Any) -> str:
    """A value of JSON's kinds (no null) as TOML, tables inline."""
    if isinstance(value, dict):
        return "{" + ", ".join(f"{k} = {as_toml(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(as_toml(v) for v in value) + "]"
    return json.dumps(value, ensure_ascii=False)


@contextmanager
def private_server(rig: LoadedRig, say: Callable[[str], None]) -> Iterator[Target]:
    """A server of our own, armed; it has ended, and its files are gone, afterwards."""
    with tempfile.TemporaryDirectory(prefix="gatestep-") as name:
        folder = Path(name)
        content = private_rig(rig, folder).model_dump(mode="json", exclude_none=True)
        file = folder / "rig.toml"
        text = "".join(f"{k} = {as_toml(v)}\n" for k, v in content.items())
        file.write_text(text, encoding="utf-8")
        command = [sys.executable, "-c", _SERVE, "serve", str(file)]
        with (folder / "said").open("w", encoding="utf-8") as said:
            process = subprocess.Popen(
                [*command, "--arm", "--force", "--json"], stdout=subprocess.PIPE, stderr=said
            )
            try:
                endpoints = _await_ready(process, folder / "said", say)
                with Control(endpoints["control"]) as control:
                    status = _await_armed(control)
                yield Target(endpoints["loop"], status, private=True)
            finally:
                _end(process)


def _await_ready(
    process: subprocess.Popen[bytes], said: Path, say: Callable[[str], None]
) -> dict[str, str]:
    """Where the server listens, once it says so."""
    assert process.stdout is not None
    until = time.monotonic() + START_S
    say("starting a private server; the first start on a machine compiles")
    while time.monotonic() < until:
        if select.select([process.stdout], [], [], 0.2)[0]:
            line = process.stdout.readline()
            if not line:
                break
            ready: dict[str, Any] = json.loads(line)
            return dict(ready["endpoints"])
    process.poll()
    reason = said.read_text(encoding="utf-8").strip().rpartition("\n")[2]
    raise LinkError(f"the private server did not start: {reason or 'it took too long'}")


def _await_armed(control: Control) -> dict[str, Any]:
    until = time.monotonic() + _ARM_S
    while (status := control.status())["state"] != "armed":
        if time.monotonic() > until:
            raise LinkError(f"the private server did not arm; its state is {status['state']}")
        time.sleep(0.02)
    return status


def _end(process: subprocess.Popen[bytes]) -> None:
    """Stop it in order; kill it when it does not go."""
    if process.poll() is None:
        process.send_signal(signal.SIGINT)
        try:
            process.wait(5)
        except subprocess.TimeoutExpired:
            process.kill()
    process.wait()
    if process.stdout is not None:
        process.stdout.close()
