"""Loading and swapping models through the verbs: right, hostile, and at the same time."""

from __future__ import annotations

import pytest
from verbdesk import Desk, refused

from gatestep.answers import safely
from gatestep.orders import Order


@pytest.fixture
def desk(tmp_path):
    return Desk(tmp_path)


@pytest.fixture
def two(tmp_path):
    return Desk(tmp_path, ("left", "right"))


@pytest.mark.parametrize(
    ("model", "words"),
    [
        ("squid-axom", ("squid-axon", "gatestep models")),
        ("./missing.toml", ("missing.toml", "no such file")),
        ("/", ("/",)),
        ("/dev/zero.toml", ("no such file",)),
        ("..", ()),
        ("\0.toml", ()),
        ("a\0b/x.toml", ()),
        ("~nosuchuser/model.toml", ()),
        ("x" * 5000 + ".toml", ()),
        ("/proc/self/mem", ()),
        ("💥", ()),
        ("\ud800", ()),
    ],
)
def test_loading_what_is_no_model(desk, model, words):
    """A name or path of no model is refused, the model in force stays, another can be loaded."""
    refused(desk.do("load", model=model), *words)
    assert desk.orders == []
    assert desk.shelf.prepared == [None]
    assert desk.do("load", model="na-squid")["ok"]


HOSTILE = {
    "no TOML": "title = ",
    "no model": 'title = "x"\nsource = "y"\ntemperature_c = 20\n',
    "code": """
title = "x"\nsource = "y"\ntemperature_c = 20
[[conductance]]\nname = "K"\ngmax_ns = 1\nreversal_mv = 0
[[conductance.gate]]\nname = "n"\nalpha = "__import__('os').system('true')"\nbeta = "1"
""",
    "never a number": """
title = "x"\nsource = "y"\ntemperature_c = 20
[[conductance]]\nname = "K"\ngmax_ns = 1\nreversal_mv = 0
[[conductance.gate]]\nname = "n"\nalpha = "log(-1 - V*V)"\nbeta = "1"
""",
    "overflow": """
title = "x"\nsource = "y"\ntemperature_c = 20
[[conductance]]\nname = "K"\ngmax_ns = 1\nreversal_mv = 0
[[conductance.gate]]\nname = "n"\nalpha = "exp(exp(V*V))"\nbeta = "9**9**9"
""",
    "nan": """
title = "x"\nsource = "y"\ntemperature_c = 20
[[conductance]]\nname = "K"\ngmax_ns = nan\nreversal_mv = 0
""",
    "inf": """
title = "x"\nsource = "y"\ntemperature_c = 20
[[conductance]]\nname = "K"\ngmax_ns = 1\nreversal_mv = inf
""",
    "too strong": """
title = "x"\nsource = "y"\ntemperature_c = 20
[[conductance]]\nname = "K"\ngmax_ns = 1e9\nreversal_mv = 0
""",
    "deep": 'title = "x"\nsource = "y"\ntemperature_c = 20\nx = ' + "[" * 3000 + "]" * 3000,
    "deep formula": """
title = "x"\nsource = "y"\ntemperature_c = 20
[[conductance]]\nname = "K"\ngmax_ns = 1\nreversal_mv = 0
[[conductance.gate]]\nname = "n"\nalpha = \""""
    + "(" * 240
    + "V"
    + ")" * 240
    + """\"\nbeta = "-1"
""",
    "not text": "\udcff",
}


@pytest.mark.parametrize("kind", HOSTILE)
def test_loading_a_hostile_model(desk, tmp_path, kind):
    """A file that is no usable model is refused with its name; the model in force stays."""
    (tmp_path / "bad.toml").write_bytes(HOSTILE[kind].encode("utf-8", "surrogateescape"))
    text = refused(desk.do("load", model="bad.toml"))
    assert "bad.toml" in text or kind in ("overflow", "never a number", "deep formula")
    assert desk.shelf.in_force[0].model.name == "squid-axon"
    assert desk.shelf.prepared == [None]
    assert desk.do("load", model="na-squid")["ok"]


def test_load_and_swap(desk):
    """A loaded model stands prepared beside the one in force until the loop has swapped."""
    refused(desk.ask("swap"), "swap", "load one first")
    answer = desk.do("load", model="k-squid")
    assert (answer["cell"], answer["model"]) == ("a", "k-squid")
    status = desk.ask("status")["cells"][0]
    assert (status["model"], status["prepared"]) == ("squid-axon", "k-squid")
    waiting = desk.ask("swap")
    assert desk.orders[-1] == (Order.SWAP, 0, 1, 0.0)
    assert desk.ask("status")["cells"][0]["model"] == "squid-axon"
    answer = desk.confirm(waiting)
    assert (answer["cell"], answer["model"], answer["seq"]) == ("a", "k-squid", 7)
    status = desk.ask("status")["cells"][0]
    assert (status["model"], status["prepared"]) == ("k-squid", None)
    assert set(status["parameters"]) == {"K.gmax_ns", "K.reversal_mv"}
    refused(desk.ask("swap"), "load one first")


def test_loading_again_replaces_what_was_prepared(desk):
    """The last model loaded is the one that a swap puts in force."""
    desk.do("load", model="k-squid")
    desk.do("load", model="na-squid")
    assert desk.do("swap")["model"] == "na-squid"


def test_only_one_load_or_swap_at_a_time(desk):
    """While a load or swap of a cell is under way, another is told to wait."""
    load = desk.ask("load", model="k-squid")
    refused(desk.ask("load", model="na-squid"), "load", "under way")
    safely(lambda: load.finish(load.future))
    swap = desk.ask("swap")
    refused(desk.ask("swap"), "under way")
    refused(desk.ask("load", model="na-squid"), "under way")
    desk.confirm(swap)
    assert desk.do("load", model="na-squid")["ok"]


def test_set_waits_for_a_swap(desk):
    """Between a swap's order and its confirmation a set is refused.

    It would name a conductance of one model and reach the other's.
    """
    desk.do("load", model="na-squid")
    waiting = desk.ask("swap")
    given_before = list(desk.orders)
    refused(desk.ask("set", key="K.gmax_ns", value=0.0), "set", "swap", "wait")
    assert desk.orders == given_before
    desk.confirm(waiting)
    assert desk.do("set", key="Na.gmax_ns", value=5.0)["ok"]


def test_arming_waits_for_a_swap(desk):
    """A model that the check has not seen in force is not armed, not even when forced."""
    desk.do("load", model="na-squid")
    waiting = desk.ask("swap")
    for force in (False, True):
        refused(desk.ask("arm", force=force), "arm", "swap", "wait")
    assert desk.do("disarm")["ok"]
    desk.confirm(waiting)
    assert desk.do("arm")["ok"]


def test_a_load_does_not_stop_a_set(desk):
    """Parameters of the model in force can be set while another is prepared."""
    desk.ask("load", model="k-squid")
    assert desk.do("set", key="Na.gmax_ns", value=5.0)["ok"]


def test_cells_are_named_where_there_are_several(two):
    """With two cells each of load, swap and set needs a name, and reaches that cell only."""
    for verb, arguments in (
        ("load", {"model": "k-squid"}),
        ("swap", {}),
        ("set", {"key": "K.gmax_ns", "value": 1.0}),
    ):
        refused(two.ask(verb, **arguments), verb, "left", "right")
    assert two.do("load", model="k-squid", cell="right")["ok"]
    refused(two.ask("swap", cell="left"), "left")
    assert two.do("swap", cell="right")["ok"]
    assert two.orders[-1] == (Order.SWAP, 1, 3, 0.0)
    assert two.do("set", key="K.gmax_ns", value=1.0, cell="right")["ok"]
    assert two.orders[-1] == (Order.SET_GMAX, 1, 0, 1.0)
    assert two.do("set", key="K.gmax_ns", value=2.0, cell="left")["ok"]
    assert two.orders[-1] == (Order.SET_GMAX, 0, 1, 2.0)
    models = [c["model"] for c in two.ask("status")["cells"]]
    assert models == ["squid-axon", "k-squid"]
