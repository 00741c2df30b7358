"""Each verb by itself, without sockets or a loop: right, wrong and hostile arguments."""

from __future__ import annotations

import json
import math
from types import SimpleNamespace

import msgpack
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from verbdesk import Desk, refused

from gatestep.answers import Confirmed
from gatestep.orders import Order, Outcome
from gatestep.states import Fault, State
from gatestep.tick import LOOP


@pytest.fixture
def desk(tmp_path):
    return Desk(tmp_path)


@pytest.fixture(scope="module")
def shared(tmp_path_factory):
    """One desk for all examples of a test: building tables for each would take long."""
    return Desk(tmp_path_factory.mktemp("shared"))


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
