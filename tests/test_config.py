"""Rig files: what is read, what is refused and in which words, and who could connect."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from gatestep.config import is_local, load_rig, load_rig_models
from gatestep.errors import FileError

LOOP = 'interval_us = 20.0\nendpoint = "{loop}"'
RIG = """
[loop]
{loop}
[control]
endpoint = "{control}"
[feed]
endpoint = "{feed}"
{more}
[[cell]]
name = "a"
model = "squid-axon"
{cell}
"""
LOCAL = {
    "loop": "tcp://127.0.0.1:5790",
    "control": "tcp://127.0.0.1:5791",
    "feed": "tcp://127.0.0.1:5792",
}


def write(folder, loop=LOCAL["loop"], more="", cell="", keys="", **ends):
    """A rig file with some of its parts changed."""
    path = folder / "rig.toml"
    ends = {**LOCAL, **ends}
    text = RIG.format(
        loop=LOOP.format(loop=loop) + "\n" + keys,
        control=ends["control"],
        feed=ends["feed"],
        more=more,
        cell=cell,
    )
    path.write_text(text)
    return path


def refusal(path) -> str:
    """The words in which a rig file is refused; they name the file."""
    with pytest.raises(FileError) as caught:
        load_rig(path)
    assert str(path) in str(caught.value)
    return str(caught.value)


def test_a_plain_rig_file(tmp_path):
    """What is not said has the contract's defaults; the text is kept in full."""
    path = write(tmp_path)
    rig = load_rig(path)
    spec = rig.spec
    assert (rig.path, rig.text, rig.folder) == (path, path.read_text(), tmp_path)
    assert (spec.loop.interval_us, spec.loop.budget, spec.loop.apply) == (20.0, 20.0, "next-tick")
    assert spec.loop.anticipate == "auto"
    assert spec.cell[0].limits.window_mv == (-150.0, 100.0)
    assert [m.name for m in load_rig_models(rig)] == ["squid-axon"]


def test_all_faults_at_once(tmp_path):
    """Every unknown key, wrong kind and impossible value is named in one go, with its place."""
    path = write(
        tmp_path,
        keys='apply = "sometime"\nbudget_us = -5\nintervall_us = 3',
        more="[limits]\nsilence_ms = 0\nlate_run = 1.5",
        cell='capacitance_pf = "30"\n[cell.limits]\ncurrent_pa = inf\nwindow_mv = [50, -50]',
    )
    text = refusal(path)
    for word in (
        "apply", "sometime", "budget_us", "-5", "intervall_us", "interval_us?", "silence_ms",
        "late_run", "1.5", "capacitance_pf", '"30"', "current_pa", "window_mv", 'cell "a"',
    ):  # fmt: skip
        assert word in text, text
    assert all(line.startswith(str(path)) for line in text.splitlines())


@pytest.mark.parametrize(
    ("keys", "cell", "words"),
    [
        ("interval_us = 20", "", ["TOML"]),
        ("lane = 'fast'", "", ["lane", "direct"]),
        ("anticipate = 'yes'", "", ["anticipate"]),
        ("budget_us = nan", "", ["budget_us"]),
        ("budget_us = inf", "", ["budget_us"]),
        ("", "[cell.limits]\ncurrent_pa = 0", ["current_pa"]),
        ("", "[cell.limits]\ncurrent_pa = -5", ["current_pa"]),
        ("", "[cell.limits]\ncurrent_pa = 1e7", ["current_pa"]),
        ("", "[cell.limits]\ncurrent_pa = nan", ["current_pa"]),
        ("", "[cell.limits]\nslew_pa_per_ms = 0", ["slew_pa_per_ms"]),
        ("", "[cell.limits]\nslew_pa_per_ms = nan", ["slew_pa_per_ms"]),
        ("", "[cell.limits]\nwindow_mv = [-500, 500]", ["window_mv"]),
        ("", "[cell.limits]\nwindow_mv = [nan, nan]", ["window_mv"]),
        ("", "[cell.limits]\nwindow_mv = [-100]", ["window_mv"]),
        ("", '[[cell]]\nname = "a"\nmodel = "leak"', ["twice", "a"]),
        ("", '[[cell]]\nname = "1a"\nmodel = "leak"', ["name", "letter"]),
        ("", '[[cell]]\nname = "b"', ["model", "missing"]),
    ],
)
def test_impossible_values(tmp_path, keys, cell, words):
    """Limits that would not limit, and what nobody can mean, are refused by name."""
    text = refusal(write(tmp_path, keys=keys, cell=cell))
    for word in words:
        assert word in text, text


@pytest.mark.parametrize(
    ("content", "word"),
    [
        (b"", "loop"),
        (b"[loop]\ninterval_us = 20", "cell"),
        (b"[loop", "TOML"),
        (b"\xff\xfe", "UTF-8"),
        (b"\x00" * 10, "TOML"),
        (b"x = " + b"[" * 5000, "TOML"),
        (b"#" * 1_100_000, "too large"),
        (b"loop = 5\ncell = 6", "loop"),
        (b"cell = []\n[loop]\ninterval_us = 20", "cell"),
    ],
)
def test_files_that_are_no_rig(tmp_path, content, word):
    """Bytes of any kind give a refusal that names the file, never another error."""
    path = tmp_path / "rig.toml"
    path.write_bytes(content)
    assert word in refusal(path)


def test_paths_that_are_no_file(tmp_path):
    """A missing file and a folder are told apart."""
    assert "no such file" in refusal(tmp_path / "none.toml")
    assert "not a file" in refusal(tmp_path)


def test_a_model_beside_the_rig_file(tmp_path):
    """A model's path starts at the rig file; a fault in it names rig, cell and model."""
    (tmp_path / "own.toml").write_text(
        'title = "x"\nsource = "y"\ntemperature_c = 20\n'
        '[[conductance]]\nname = "own"\ngmax_ns = 1\nreversal_mv = 0\n'
    )
    path = write(tmp_path)
    path.write_text(path.read_text().replace('"squid-axon"', '"own.toml"'))
    assert load_rig_models(load_rig(path))[0].name == "own"
    (tmp_path / "own.toml").write_text("title = 5")
    with pytest.raises(FileError) as caught:
        load_rig_models(load_rig(path))
    for word in (str(path), "cell 'a'", "own.toml", "title"):
        assert word in str(caught.value)


LOCAL_ONES = [
    "tcp://127.0.0.1:5790",
    "tcp://127.3.2.1:5790",
    "tcp://localhost:5790",
    "tcp://[::1]:5790",
    "ipc:///tmp/loop",
    "ipc://@abstract",
]
OPEN_ONES = [
    "tcp://0.0.0.0:5790",
    "tcp://*:5790",
    "tcp://[::]:5790",
    "tcp://eth0:5790",
    "tcp://lo:5790",
    "tcp://10.0.0.5:5790",
    "tcp://192.168.1.1:5790",
    "tcp://127.example.org:5790",
    "tcp://localhost.example.org:5790",
    "tcp://127.0.0.1;0.0.0.0:5790",
    "tcp://127.1:5790",
    "tcp://0:5790",
]


@pytest.mark.parametrize("endpoint", LOCAL_ONES)
def test_what_only_this_machine_can_reach(tmp_path, endpoint):
    """Loopback and ipc need neither keys nor a list of peers."""
    assert is_local(endpoint)
    load_rig(write(tmp_path, loop=endpoint))


@pytest.mark.parametrize("socket", ["loop", "control", "feed"])
@pytest.mark.parametrize("endpoint", OPEN_ONES)
def test_what_others_could_reach_is_refused(tmp_path, socket, endpoint):
    """Without keys or peers the rig file is refused, with the key at fault and what to do."""
    assert not is_local(endpoint)
    path = write(tmp_path, **{socket: endpoint})
    text = refusal(path)
    for word in (f"{socket}.endpoint = {endpoint}", "peers", "curve_secret", "127.0.0.1"):
        assert word in text


def test_every_open_socket_is_named(tmp_path):
    """All sockets at fault are told at once."""
    text = refusal(
        write(tmp_path, loop="tcp://*:1", control="tcp://0.0.0.0:2", feed="tcp://10.0.0.1:3")
    )
    for word in ("loop.endpoint", "control.endpoint", "feed.endpoint"):
        assert word in text


@pytest.mark.parametrize(
    "network",
    [
        'peers = ["192.168.7.2"]',
        'curve_secret = "server.key_secret"\ncurve_clients = "clients"',
    ],
)
def test_with_peers_or_keys_it_may_be_open(tmp_path, network):
    """A list of peers, or CURVE, lets a rig file bind anywhere."""
    load_rig(write(tmp_path, loop="tcp://0.0.0.0:5790", more=f"[network]\n{network}"))


@pytest.mark.parametrize(
    ("network", "word"),
    [
        ('curve_secret = "x"', "curve_clients"),
        ('curve_clients = "x"', "curve_secret"),
        ('peers = ["10.0.0.2"]\ncurve_secret = "x"\ncurve_clients = "y"', "not both"),
        ("peers = []", "peers"),
        ('peers = ""', "peers"),
        ("peers = [5]", "peers"),
        ('peers = ["the-converter"]', "peers"),
        ('peers = ["10.0.0.0/24"]', "peers"),
        ('peers = ["*"]', "peers"),
        ('peers = [""]', "peers"),
        ("peers = [" + ", ".join(f'"10.0.0.{k}"' for k in range(100)) + "]", "peers"),
    ],
)
def test_half_a_guard_is_none(tmp_path, network, word):
    """Half of a pair of keys, an empty list, and what is no address are refused."""
    path = write(tmp_path, loop="tcp://0.0.0.0:5790", more=f"[network]\n{network}")
    assert word in refusal(path)


def test_the_direct_lane_cannot_do_keys(tmp_path):
    """Asked for both, the rig file is refused rather than served without keys."""
    path = write(
        tmp_path,
        keys='lane = "direct"',
        more='[network]\ncurve_secret = "x"\ncurve_clients = "y"',
    )
    assert "CURVE" in refusal(path)


@pytest.mark.parametrize(
    "endpoint",
    [
        "",
        "127.0.0.1:5790",
        "udp://127.0.0.1:5790",
        "tcp://127.0.0.1",
        "tcp://127.0.0.1:65536",
        "inproc://x",
    ],
)
def test_what_is_no_endpoint(tmp_path, endpoint):
    """An endpoint that is neither tcp nor ipc is refused and shown."""
    text = refusal(write(tmp_path, loop=endpoint))
    assert "tcp://ADDRESS:PORT or ipc://PATH" in text


def test_two_sockets_at_one_endpoint(tmp_path):
    """The same endpoint for two sockets is refused."""
    assert "twice" in refusal(write(tmp_path, control=LOCAL["loop"]))


@given(st.text(max_size=200))
def test_any_text_at_all(tmp_path_factory, text):
    """Invariant: any text is a rig or refused in words, never another error."""
    path = tmp_path_factory.getbasetemp() / "any.toml"
    path.write_text(text, encoding="utf-8", errors="replace")
    with pytest.raises(FileError):
        load_rig(path)
