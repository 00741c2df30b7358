"""Each verb by itself, without sockets or a loop: right, wrong and hostile arguments."""

from __future__ import annotations

import json
import math
from concurrent.futures import Executor, Future
from types import SimpleNamespace

import msgpack
import numpy as np
import pytest
from conftest import make_rig
from hypothesis import given
from hypothesis import strategies as st

from gatestep.answers import Built, Confirmed, safely
from gatestep.kernel import BANK, records
from gatestep.library import load_model
from gatestep.orders import Order, Outcome
from gatestep.shelf import Shelf
from gatestep.states import Fault, State
from gatestep.tables import build_tables
from gatestep.tick import LOOP
from gatestep.verbs import Verbs
from gatestep.watch import LoopEvent, Watch

LIMITS = {"current_pa": 1000.0}


class AtOnce(Executor):
    """Carries work out when it is submitted."""

    def submit(self, work, /, *args, **kwargs):
        future: Future = Future()
        try:
            future.set_result(work(*args, **kwargs))
        except Exception as fault:
            future.set_exception(fault)
        return future


class Desk:
    """Verbs with their orders kept in a list, and a loop that carries them out when told to."""

    def __init__(self, folder, cells=("a",)):
        self.rig = make_rig(
            folder, cell=[{"name": c, "model": "squid-axon", "limits": LIMITS} for c in cells]
        )
        self.orders: list[tuple] = []
        self.sent = 0
        self.watch = Watch(list(cells))
        self.shelf = Shelf(records(BANK, 2 * len(cells)), np.empty(1 << 20))
        self.verbs = Verbs(self.rig, self.shelf, self.watch, self.send, AtOnce(), {"lane": "none"})
        model = load_model("squid-axon")
        for k in range(len(cells)):
            self.verbs.put_in_force(k, model, build_tables(model.spec))

    def send(self, kind, cell=0, index=0, value=0.0, *_, **_meaning):
        self.orders.append((kind, cell, index, value))
        return len(self.orders)

    def ask(self, verb, /, **arguments):
        """Handle a request as far as it goes without the loop."""
        return self.verbs.handle({"verb": verb, **arguments})

    def confirm(self, waiting, outcome=Outcome.DONE, seq=7):
        """The answer once the loop has carried the order out."""
        assert isinstance(waiting, Confirmed)
        event = LoopEvent("order", seq, "", waiting.number, int(outcome))
        return safely(lambda: waiting.finish(event))

    def do(self, verb, outcome=Outcome.DONE, **arguments):
        """The answer to a request, built and carried out at once."""
        found = self.ask(verb, **arguments)
        if isinstance(found, Confirmed):
            return self.confirm(found, outcome)
        if isinstance(found, Built):
            return safely(lambda: found.finish(found.future))
        return found


@pytest.fixture
def desk(tmp_path):
    return Desk(tmp_path)


@pytest.fixture(scope="module")
def shared(tmp_path_factory):
    """One desk for all examples of a test: building tables for each would take long."""
    return Desk(tmp_path_factory.mktemp("shared"))


@pytest.fixture
def two(tmp_path):
    return Desk(tmp_path, ("left", "right"))


def refused(answer, *words):
    """The text of a refusal, which holds the words."""
    assert answer["ok"] is False
    assert set(answer) == {"ok", "error"}
    for word in words:
        assert word in answer["error"], answer["error"]
    return answer["error"]


@pytest.mark.parametrize(
    ("verb", "order"),
    [
        ("arm", Order.ARM),
        ("disarm", Order.DISARM),
        ("reset", Order.RESET),
        ("stop", Order.STOP),
    ],
)
def test_simple_orders(desk, verb, order):
    """One order goes to the loop; the answer waits for it and names the newest sample."""
    waiting = desk.ask(verb)
    assert isinstance(waiting, Confirmed)
    assert desk.orders == [(order, 0, 0, 0.0)]
    answer = desk.confirm(waiting)
    assert answer["ok"]
    assert answer["seq"] == 7
    assert answer["state"] == "idle"
    assert set(answer) >= {"ok", "seq", "state"}


def test_the_contracts_verbs_are_all_there(desk):
    """Each verb of the contract is known, and an unknown one is told all of them."""
    verbs = {"status", "arm", "disarm", "reset", "load", "swap", "set", "mark", "stop"}
    text = refused(desk.ask("harm"), "'harm'")
    assert verbs <= set(text.replace(",", "").split())


@pytest.mark.parametrize(
    "request_",
    [
        None,
        7,
        "arm",
        [],
        ["verb", "arm"],
        {},
        {"verb": None},
        {"verb": 1},
        {"verb": ["arm"]},
        {"verb": {"arm": 1}},
        {"verb": b"arm"},
        {b"verb": b"arm"},
        {"VERB": "arm"},
        {"verb": "ARM"},
        {"verb": ""},
        {"verb": "handle"},
        {"verb": "__init__"},
        {"verb": "x" * 100_000},
        {"verb": msgpack.Timestamp(1)},
    ],
)
def test_what_is_no_request(desk, request_):
    """It is refused in a few words, and no order is given."""
    text = refused(desk.verbs.handle(request_))
    assert len(text) < 1000
    assert desk.orders == []


@pytest.mark.parametrize(
    ("verb", "extra"),
    [
        ("arm", {"force": "yes"}),
        ("arm", {"force": 1}),
        ("arm", {"force": None}),
        ("arm", {"cell": "a"}),
        ("disarm", {"now": True}),
        ("reset", {"": 1}),
        ("stop", {"verbs": 1}),
        ("status", {"cell": "a"}),
        ("status", {"self": 1}),
        ("mark", {}),
        ("mark", {"text": ""}),
        ("mark", {"text": 5}),
        ("mark", {"text": b"bytes"}),
        ("mark", {"text": "x" * 1001}),
        ("mark", {"text": ["x"]}),
        ("load", {}),
        ("load", {"model": ""}),
        ("load", {"model": 5}),
        ("load", {"model": ["squid-axon"]}),
        ("load", {"model": "squid-axon", "cell": "b"}),
        ("load", {"model": "squid-axon", "cell": 0}),
        ("load", {"model": "squid-axon", "path": "x"}),
        ("swap", {"cell": "b"}),
        ("swap", {"cell": ["a"]}),
        ("swap", {"cell": {}}),
        ("set", {}),
        ("set", {"key": "K.gmax_ns"}),
        ("set", {"value": 1.0}),
        ("set", {"key": "K", "value": 1.0}),
        ("set", {"key": "K.", "value": 1.0}),
        ("set", {"key": ".gmax_ns", "value": 1.0}),
        ("set", {"key": "Q.gmax_ns", "value": 1.0}),
        ("set", {"key": "K.n", "value": 1.0}),
        ("set", {"key": "K.gmax_ns.x", "value": 1.0}),
        ("set", {"key": "k.gmax_ns", "value": 1.0}),
        ("set", {"key": 5, "value": 1.0}),
        ("set", {"key": ["K.gmax_ns"], "value": 1.0}),
        ("set", {"key": b"K.gmax_ns", "value": 1.0}),
        ("set", {"key": "K.gmax_ns", "value": 1.0, "cell": "b"}),
        ("set", {"key": "K.gmax_ns", "value": 1.0, "index": 3}),
    ],
)
def test_wrong_arguments(desk, verb, extra):
    """They are refused with the verb's name and what to do, and no order is given."""
    text = refused(desk.verbs.handle({"verb": verb, **extra}), verb)
    assert len(text) < 1000
    assert desk.orders == []


def nested(depth):
    value = 1.0
    for _ in range(depth):
        value = [value]
    return value


@pytest.mark.parametrize(
    "value",
    [
        math.nan,
        math.inf,
        -math.inf,
        1e300,
        -1e300,
        1.000001e6,
        -1.000001e6,
        True,
        False,
        None,
        "5",
        b"5",
        "nan",
        [],
        [5.0],
        {},
        2**64 - 1,
        -(2**63),
        10**400,
        -(10**400),
        nested(1000),
        {"a": nested(900)},
        msgpack.Timestamp(5),
        msgpack.ExtType(1, b"5"),
        1j,
    ],
    ids=lambda value: type(value).__name__,
)
@pytest.mark.parametrize("key", ["K.gmax_ns", "K.reversal_mv"])
def test_hostile_values(desk, key, value):
    """No value but a number within the limits reaches the loop; the refusal says which are."""
    text = refused(desk.ask("set", key=key, value=value), key)
    assert ("1e+06" if "gmax" in key else "300") in text
    assert len(text) < 1000
    assert desk.orders == []


@given(value=st.floats(-1e6, 1e6) | st.integers(-(10**6), 10**6))
def test_any_number_within_the_limits_is_set(shared, value):
    """It goes to the loop as the float it is, for the right conductance."""
    desk = shared
    answer = desk.do("set", key="K.gmax_ns", value=value)
    assert desk.orders[-1] == (Order.SET_GMAX, 0, 1, float(value))
    assert answer["ok"]
    assert (answer["key"], answer["value"]) == ("K.gmax_ns", float(value))
    assert desk.ask("status")["cells"][0]["parameters"]["K.gmax_ns"] == float(value)


def test_set_is_told_in_the_status_only_when_the_loop_has_done_it(desk):
    """Before the loop confirms it the old value stands."""
    waiting = desk.ask("set", key="leak.reversal_mv", value=-70)
    before = desk.ask("status")["cells"][0]["parameters"]
    assert before["leak.reversal_mv"] == pytest.approx(-54.387)
    assert desk.orders == [(Order.SET_REVERSAL, 0, 2, -70.0)]
    desk.confirm(waiting)
    assert desk.ask("status")["cells"][0]["parameters"]["leak.reversal_mv"] == -70.0


def test_the_limits_themselves_can_be_set(desk):
    """1e6 nS and 300 mV of either sign are allowed, 0 too."""
    for value in (1e6, -1e6, 0, 0.0, -0.0):
        assert desk.do("set", key="Na.gmax_ns", value=value)["ok"]
    for value in (300, -300.0):
        assert desk.do("set", key="Na.reversal_mv", value=value)["ok"]


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


def show_loop(desk, **fields):
    """Let the watch see the loop's record with these fields."""
    loop = np.zeros(1, LOOP)
    loop["fault_cell"] = -1
    for name, value in fields.items():
        loop[name] = value
    desk.watch.take(loop.tobytes())


def test_arming_a_tripped_loop(desk):
    """The refusal says why it tripped and what to do."""
    show_loop(desk, state=State.TRIPPED, fault=Fault.SILENCE)
    refused(desk.do("arm", Outcome.TRIPPED), "arm", "silent", "reset")


@pytest.mark.parametrize("tick_us", [19.0, 0.0])
def test_arming_with_a_wrong_tick(desk, tick_us):
    """The refusal names both ticks; a clock that stands still shows one of 0."""
    show_loop(desk, tick_us=tick_us, tick_wrong=1)
    refused(desk.do("arm", Outcome.WRONG_TICK), "arm", f"{tick_us:g} µs", "20")


def test_arming_while_stopping(desk):
    """A server that is stopping does not arm again."""
    refused(desk.do("arm", Outcome.STOPPING), "arm", "stopping")


def test_force_is_told(desk):
    """Whether arming was forced is in its answer."""
    assert desk.do("arm", force=True)["forced"] is True
    assert desk.do("arm")["forced"] is False


def test_a_note_comes_back_with_its_sample(desk):
    """A mark's text is in its answer, with the sample it stands after."""
    for text in ("dose 2", "µ💡\n", "x" * 1000):
        answer = desk.do("mark", text=text)
        assert (answer["text"], answer["seq"]) == (text, 7)


def test_status_holds_what_the_contract_asks(desk):
    """At least these keys are there before any sample, and all of it can be packed."""
    status = desk.ask("status")
    keys = "state seq answered late missed repeats malformed clipped trips cells service_nsec"
    assert set(keys.split()) <= set(status)
    assert status["ok"]
    assert (status["state"], status["seq"]) == ("idle", None)
    assert (
        set(msgpack.unpackb(msgpack.packb(status)))
        == set(status)
        == set(json.loads(json.dumps(status)))
    )


def test_any_fault_of_ours_becomes_an_answer(desk):
    """What nobody foresaw is an answer too, so that nothing ends the thread that disarms."""
    desk.verbs._shelf = SimpleNamespace(prepared=None)
    refused(desk.ask("swap"), "fault in the server", "TypeError")
    assert desk.do("disarm")["ok"]


JUNK = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text() | st.binary(),
    lambda inner: st.lists(inner) | st.dictionaries(st.text() | st.integers(), inner),
    max_leaves=10,
)
NAMES = ("status", "arm", "disarm", "reset", "load", "swap", "set", "mark", "stop")


@given(
    arguments=st.dictionaries(
        st.sampled_from(["cell", "model", "key", "value", "text", "force", "verb", "x"]),
        JUNK | st.sampled_from(["a", "K.gmax_ns", "squid-axon", True]),
    ),
    verb=st.sampled_from(NAMES),
)
def test_any_arguments_at_all(shared, arguments, verb):
    """Invariant: whatever the arguments, the answer is ok or a refusal in words.

    A set that reaches the loop is finite and within the limits.
    """
    shared.orders.clear()
    answer = shared.do(**{**arguments, "verb": verb})
    assert answer["ok"] is True or refused(answer)
    for kind, cell, index, value in shared.orders:
        assert (cell, index) == (0, index)
        assert math.isfinite(value)
        assert abs(value) <= (300.0 if kind == Order.SET_REVERSAL else 1e6)
