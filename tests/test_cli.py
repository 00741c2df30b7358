"""The command line: help, wrong input in words and without tracebacks, and every verb."""

from __future__ import annotations

import json
import os
import subprocess
import sys

import pytest
import typer
import zmq.auth
from conftest import Attended, RawRig, make_rig, running, wait_until

from gatestep import cli, cliapp
from gatestep.control import Control


class Done:
    """What a command left: its exit status and what it wrote."""

    def __init__(self, code, out, err):
        self.code, self.out, self.err = code, out, err

    def refused(self, *words, code=1):
        """Exit status, one line on stderr that holds the words, nothing on stdout."""
        assert self.code == code, (self.code, self.err)
        assert self.err.endswith("\n")
        assert len(self.err.splitlines()) == 1, self.err
        assert self.err.startswith("gatestep: ")
        assert self.out == ""
        for word in words:
            assert word in self.err, self.err
        return self.err


@pytest.fixture
def call(monkeypatch, capsys):
    """Run a command line in this process; clients wait briefly."""
    monkeypatch.setenv("COLUMNS", "200")
    monkeypatch.setattr(Control.__init__, "__defaults__", (cliapp.CONTROL, 20.0, None, None))

    def run(*arguments, timeout_s=20.0) -> Done:
        Control.__init__.__defaults__ = (cliapp.CONTROL, timeout_s, None, None)
        monkeypatch.setattr(sys, "argv", ["gatestep", *map(str, arguments)])
        capsys.readouterr()
        with pytest.raises(SystemExit) as ended:
            cli.main()
        return Done(ended.value.code, *capsys.readouterr())

    return run


def shell(*arguments, **options) -> Done:
    """Run a command line in a process of its own."""
    done = subprocess.run(
        [sys.executable, "-m", "gatestep", *arguments],
        capture_output=True,
        check=False,
        timeout=300,
        env={**os.environ, "COLUMNS": "200"},
        **options,
    )
    return Done(done.returncode, done.stdout.decode(), done.stderr.decode(errors="replace"))


def commands(group=None, before=()):
    """Every command of the program, as the words that call it."""
    group = typer.main.get_command(cli.app) if group is None else group
    for name, command in sorted(group.commands.items()):
        if hasattr(command, "commands"):
            yield (*before, name)
            yield from commands(command, (*before, name))
        else:
            yield (*before, name)


COMMANDS = list(commands())
STEERING = {
    "status": (),
    "arm": (),
    "disarm": (),
    "reset": (),
    "stop": (),
    "load": ("squid-axon",),
    "swap": (),
    "set": ("K.gmax_ns=5",),
    "mark": ("here",),
}


def test_the_contracts_commands_are_there():
    """Each steering command of the contract exists, with serve, models, curves and simrig."""
    names = {words[0] for words in COMMANDS}
    assert {*STEERING, "serve", "models", "curves", "simrig", "check", "demo"} <= names


@pytest.mark.parametrize("words", [(), *COMMANDS], ids=" ".join)
def test_help(call, words):
    """Every command tells what it does and takes, and exits with 0."""
    done = call(*words, "--help")
    assert done.code == 0
    assert done.err == ""
    assert "Usage:" in done.out
    assert "--help" in done.out


@pytest.mark.parametrize("words", COMMANDS, ids=" ".join)
def test_every_command_can_print_json(call, words):
    """Each command, groups apart, has --json."""
    done = call(*words, "--help")
    if "COMMAND [ARGS]" not in done.out:
        assert "--json" in done.out


def test_help_is_quick_to_come():
    """Asking for help imports none of the heavy packages; nor does a command's, of its own.

    For a command's options typer itself may import pydantic.
    """
    code = (
        "import sys\n"
        "from gatestep.cli import main\n"
        "heavy = 'numpy numba llvmlite pydantic zmq msgpack matplotlib scipy'.split()\n"
        "for words in (['--help'], ['serve', '--help'], ['status', '--nonsense']):\n"
        "    sys.argv = ['gatestep', *words]\n"
        "    try: main()\n"
        "    except SystemExit: pass\n"
        "    print('heavy:', [m for m in heavy if m in sys.modules])\n"
        "    heavy = [m for m in heavy if m != 'pydantic']\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60
    )
    told = [line for line in done.stdout.splitlines() if line.startswith("heavy:")]
    assert told == ["heavy: []"] * 3


@pytest.mark.parametrize("words", COMMANDS, ids=" ".join)
def test_an_unknown_option(call, words):
    """It is refused with the option's name and status 2, without a traceback."""
    done = call(*words, "--nonsense")
    assert done.code == 2
    assert "--nonsense" in done.err or "Missing" in done.err
    assert "Traceback" not in done.err
    assert done.out == ""


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("fire",), "fire"),
        (("serve",), "RIG"),
        (("load",), "MODEL"),
        (("set",), "KEY=VALUE"),
        (("mark",), "TEXT"),
        (("curves",), "MODEL"),
        (("status", "extra"), "extra"),
        (("arm", "--force=maybe"), "force"),
    ],
)
def test_wrong_words(call, words, said):
    """What is missing, unknown or too much is named; status 2."""
    done = call(*words)
    assert done.code == 2
    assert said in done.err
    assert "Traceback" not in done.err


def test_no_command(call):
    """Without a command the help is shown."""
    done = call()
    assert "Usage:" in done.out + done.err


@pytest.mark.parametrize("name", STEERING)
def test_no_server(call, name, tmp_path):
    """Each steering command says on one line where it asked and how to start a server; status 1."""
    endpoint = f"ipc://{tmp_path}/nobody"
    done = call(name, *STEERING[name], "--control", endpoint, timeout_s=0.1)
    done.refused("no gatestep server answers", endpoint, "gatestep serve")


def test_no_server_in_a_shell(tmp_path):
    """The same in a process of its own."""
    done = shell("status", "--json", "--control", f"ipc://{tmp_path}/nobody")
    done.refused("no gatestep server answers")


@pytest.mark.parametrize("endpoint", ["", "nonsense", "tcp://", "tcp://127.0.0.1", "5791"])
def test_a_wrong_control_endpoint(call, endpoint):
    """It is named on one line; status 1."""
    call("status", "--control", endpoint).refused("control endpoint")


@pytest.mark.parametrize(
    "words", [("serve",), ("check",), ("simrig",), ("bench", "loop")], ids=" ".join
)
@pytest.mark.parametrize("kind", ["missing", "folder", "bytes", "empty", "faulty", "open"])
def test_rig_files_that_are_none(call, tmp_path, words, kind):
    """Each command that takes a rig file refuses what is none, by name; status 1."""
    path = tmp_path / "rig.toml"
    if kind == "folder":
        path.mkdir()
    elif kind != "missing":
        path.write_bytes(
            {
                "bytes": b"\xff\x00",
                "empty": b"",
                "faulty": b"[loop]\ninterval_us = -1\n[[cell]]\nname = 'a'\nmodel = 'leak'",
                "open": b"[loop]\ninterval_us = 20\nendpoint = 'tcp://*:1'\n"
                b"[[cell]]\nname = 'a'\nmodel = 'leak'",
            }[kind]
        )
    done = call(*words, path)
    assert done.code == 1
    assert str(path) in done.err + done.out
    assert "Traceback" not in done.err + done.out


def rig_file(tmp_path, model="leak", more=""):
    path = tmp_path / "rig.toml"
    path.write_text(
        f"[loop]\ninterval_us = 20.0\nendpoint = 'ipc://{tmp_path}/loop'\n"
        f"[control]\nendpoint = 'ipc://{tmp_path}/control'\n"
        f"[feed]\nendpoint = 'ipc://{tmp_path}/feed'\n{more}\n"
        f"[[cell]]\nname = 'a'\nmodel = '{model}'\n"
    )
    return path


@pytest.mark.parametrize("model", ["no-such-model", "./none.toml", "/"])
def test_serving_a_model_that_is_none(tmp_path, model):
    """The refusal names the rig file, the cell and the model, and the process ends with 1."""
    done = shell("serve", str(rig_file(tmp_path, model)))
    lines = done.err.splitlines()
    assert done.code == 1
    assert "Traceback" not in done.err
    assert "cell 'a'" in lines[-1]
    assert str(tmp_path) in lines[-1]


def test_serving_with_keys_that_are_none(tmp_path):
    """A missing certificate ends the process with 1, at once and with nothing left hanging."""
    more = "[network]\ncurve_secret = 'none.key_secret'\ncurve_clients = '.'"
    done = shell("serve", str(rig_file(tmp_path, more=more)))
    assert done.code == 1
    assert "none.key_secret" in done.err.splitlines()[-1]
    assert "Traceback" not in done.err


def test_serving_where_another_serves(tmp_path):
    """A taken endpoint is refused on the last line, with 1, and the first server goes on."""
    with running(tmp_path) as first:
        done = shell("serve", str(rig_file(tmp_path)))
        assert done.code == 1
        assert "loop.endpoint" in done.err.splitlines()[-1]
        assert "another server" in done.err.splitlines()[-1]
        assert "Traceback" not in done.err
        assert first.control.status()["ok"]


@pytest.mark.parametrize(
    "words",
    [
        ("curves", "no-such-model"),
        ("curves", "./none.toml"),
        ("curves", "/"),
        ("curves", "squid-axon", "--at", "nonsense"),
        ("curves", "squid-axon", "--at", "nan"),
        ("curves", "squid-axon", "--figure", "/nonexistent/folder/x.png"),
        ("curves", "squid-axon", "--figure", "x.nonsense"),
    ],
    ids=" ".join,
)
def test_curves_of_what_is_none(call, words):
    """A wrong model, voltage or figure is refused on one line; status 1."""
    call(*words).refused()


@pytest.fixture
def served(tmp_path):
    """A server, its control endpoint, and a rig that has sampled once."""
    with running(tmp_path) as server:
        ends = server.server.endpoints()
        with RawRig(ends["loop"]) as rig:
            rig.ask(0, -65.0)
            wait_until(lambda: server.control.status()["answered"] == 1, "the sample told")
            yield server, ends["control"]


def test_steering_in_words(call, served):
    """Every steering command says in one line what was done and after which sample."""
    server, end = served
    for words, said in [
        (("arm",), "armed after sample 0"),
        (("set", "K.gmax_ns=500"), "K.gmax_ns = 500 in cell a after sample 0"),
        (("set", " Na.reversal_mv = 45 "), "Na.reversal_mv = 45"),
        (("mark", "dose 2"), "marked after sample 0: dose 2"),
        (("load", "na-squid"), "prepared na-squid for cell a"),
        (("swap",), "na-squid is in force in cell a after sample 0"),
        (("disarm",), "idle after sample 0"),
        (("reset",), "idle after sample 0"),
        (("load", "leak", "--cell", "a"), "prepared leak"),
        (("stop",), "stopping at 0 pA"),
    ]:
        done = call(*words, "--control", end)
        assert (done.code, done.err) == (0, ""), done.err
        assert said in done.out
        assert len(done.out.splitlines()) == 1
    server.thread.join(30)
    assert server.result == 0


def test_steering_in_json(call, served):
    """With --json the server's answer comes out whole, and nothing else."""
    _, end = served
    for words in [
        ("arm",), ("set", "K.gmax_ns=500"), ("mark", "µ💡"), ("load", "na-squid"), ("swap",),
        ("disarm",), ("reset",),
    ]:  # fmt: skip
        done = call(*words, "--control", end, "--json")
        assert (done.code, done.err) == (0, ""), done.err
        assert json.loads(done.out)["ok"] is True
    status = json.loads(call("status", "--control", end, "--json").out)
    keys = "state seq answered late missed repeats malformed clipped trips cells service_nsec"
    assert set(keys.split()) <= set(status)
    assert status["seq"] == 0
    assert status["cells"][0]["model"] == "na-squid"
    assert set(status["service_nsec"]) >= {"p50", "p99", "max"}


def test_the_status_for_people(call, served):
    """It names the state, the rig, the counters and each cell."""
    _, end = served
    out = call("status", "--control", end).out
    for word in ("idle", "connected", "answered 1", "squid-axon", "-65.00", "budget"):
        assert word in out


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("set", "K.gmax_ns"), "has no '='"),
        (("set", "K.gmax_ns="), "not a number"),
        (("set", "K.gmax_ns=five"), "'five' is not a number"),
        (("set", "=5"), "no parameter"),
        (("set", "K.gmax_ns=nan"), "from -1e+06 to 1e+06"),
        (("set", "K.gmax_ns=1e999"), "from -1e+06 to 1e+06"),
        (("set", "K.gmax_ns=-2e6"), "from -1e+06 to 1e+06"),
        (("set", "K.reversal_mv=301"), "from -300 to 300"),
        (("set", "Q.gmax_ns=5"), "Na.gmax_ns"),
        (("set", "K.gmax_ns=5", "--cell", "b"), "its cells are a"),
        (("load", "no-such-model"), "gatestep models"),
        (("load", "./none.toml"), "no such file"),
        (("load", "~nosuchuser/x.toml"), "load"),
        (("load", ""), "model is missing"),
        (("swap",), "load one first"),
        (("mark", ""), "1 to 1000 characters"),
        (("mark", "x" * 1001), "1 to 1000 characters"),
    ],
)
def test_what_the_server_refuses(call, served, words, said):
    """The server's words come out on one line of stderr; status 1."""
    _, end = served
    call(*words, "--control", end).refused(said if said != "load" else "")


def test_words_that_are_no_text(served):
    """Bytes that are no UTF-8 on the command line are refused, not a traceback."""
    _, end = served
    for words in ((b"mark", b"\xff\xfe"), (b"load", b"\xff.toml"), (b"set", b"\xff=5")):
        shell(*words, b"--control", end.encode()).refused()


def test_the_loops_socket_is_not_the_controls(call, served):
    """Pointed at another of the server's sockets, a command says so; the rig is not disturbed."""
    server, _ = served
    for name in ("loop", "feed"):
        end = server.server.endpoints()[name]
        call("status", "--control", end, timeout_s=0.5).refused(end)
    assert server.control.status()["rig"] == "connected"


def test_keys_for_the_control_socket(call, tmp_path):
    """Certificates open a guarded server; wrong ones are refused by name."""
    for name in ("server", "client"):
        zmq.auth.create_certificates(tmp_path, name)
    clients = tmp_path / "clients"
    clients.mkdir()
    (clients / "client.key").write_bytes((tmp_path / "client.key").read_bytes())
    network = {"curve_secret": str(tmp_path / "server.key_secret"), "curve_clients": str(clients)}
    server = Attended(make_rig(tmp_path, network=network))
    try:
        end = server.server.endpoints()["control"]
        keys = ("--curve-server", tmp_path / "server.key", "--curve-client")
        done = call("status", "--control", end, *keys, tmp_path / "client.key_secret", "--json")
        assert json.loads(done.out)["ok"]
        call("status", "--control", end, *keys, tmp_path / "client.key").refused("no secret key")
        call("status", "--control", end, *keys, tmp_path / "none").refused("CURVE")
        call("status", "--control", end, timeout_s=0.5).refused("no gatestep server answers")
    finally:
        server.close()


def test_models_and_curves_in_json(call):
    """The lists that scripts read have the contract's shape."""
    models = json.loads(call("models", "--json").out)
    assert "squid-axon" in json.dumps(models)
    found = json.loads(call("curves", "squid-axon", "--at", "-65,0", "--json").out)
    assert found["model"] == "squid-axon"
    gates = {g["name"]: g for g in found["gates"]}
    assert set(gates) == {"Na.m", "Na.h", "K.n"}
    assert set(gates["K.n"]) >= {"name", "instances", "v_mv", "inf", "tau_ms"}
    assert gates["K.n"]["instances"] == 4
    assert gates["K.n"]["v_mv"] == [-65.0, 0.0]
    # n at rest 0.3177: computed from the published equations of Hodgkin and Huxley 1952.
    assert gates["K.n"]["inf"][0] == pytest.approx(0.3177, abs=5e-5)


def test_a_reader_that_leaves(tmp_path):
    """A pipe that is closed early, as by head, is no reason for a traceback."""
    process = subprocess.Popen(
        [sys.executable, "-m", "gatestep", "curves", "squid-axon"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    )
    process.stdout.close()
    said = process.stderr.read().decode()
    process.stderr.close()
    process.wait(60)
    assert "Traceback" not in said
