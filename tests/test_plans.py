"""Plan files: faults told all at once, ladders, the orders, what goes into the record."""

from __future__ import annotations

import json
from collections import Counter
from itertools import islice
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from gatestep.errors import FileError
from gatestep.files import parse
from gatestep.plans import _draws, condition_of, load_plan, parse_plan, shuffled
from gatestep.planspecs import OrderSpec, PlanSpec, StimulusSpec, SweepSpec

PLACE = Path(__file__).parent / "plan.toml"


def plan_of(text: str, place: Path = PLACE):
    return parse_plan(text.encode(), place)


def ladder(plan: str = "", sweep: str = "", stimulus: str = "") -> str:
    return f"""
title = "a ladder"
[plan]
{plan}
[[sweep]]
name = "a"
duration_ms = 100.0
{sweep}
[[sweep.stimulus]]
kind = "step"
start_ms = 10.0
stop_ms = 60.0
current_pa = [10.0, 20.0]
{stimulus}
[[sweep]]
name = "b"
duration_ms = 50.0
"""


def order_of(plan) -> list[tuple]:
    return [(s.name, s.step and s.step["current_pa"], s.scale, s.repeat) for s in plan.expand()]


def test_listed_plays_all_repeats_of_a_sweep_before_the_next():
    """Contract: repeats follow one another; a ladder's scale changes faster than its current."""
    found = order_of(plan_of(ladder("repeats = 2", "scale = [0.0, 1.0]")))
    rungs = [("a", i, scale) for i in (10.0, 20.0) for scale in (0.0, 1.0)] + [("b", None, 1.0)]
    assert found == [(*rung, repeat) for rung in rungs for repeat in (0, 1)]


def test_interleaved_goes_through_the_whole_list_in_each_repeat():
    """Contract: every repeat holds each sweep once; one with fewer repeats is left out later."""
    found = order_of(plan_of(ladder('order = "interleaved"\nrepeats = 2', "repeats = 3")))
    one = [("a", 10.0, 1.0), ("a", 20.0, 1.0), ("b", None, 1.0)]
    rounds = [one, one, one[:2]]
    assert found == [(*rung, repeat) for repeat, rungs in enumerate(rounds) for rung in rungs]


@given(seed=st.integers(0, 2**63 - 1))
def test_shuffled_plays_each_repeat_whole_in_an_order_of_its_own(seed):
    """Contract: blocks of one repeat each; the same seed gives the same order."""
    plan = plan_of(ladder('order = "shuffled"\nrepeats = 4', "scale = [0.0, 0.5, 1.0]"))
    sweeps = plan.expand(seed)
    assert [s.index for s in sweeps] == list(range(28))
    assert [s.repeat for s in sweeps] == [r for r in range(4) for _ in range(7)]
    for r in range(4):
        block = sweeps[7 * r : 7 * r + 7]
        assert len({(s.name, s.scale, str(s.step)) for s in block}) == 7
    assert plan.expand(seed) == sweeps


def test_the_seed_of_the_file_is_used_and_another_gives_another_order():
    """The order is the file's unless a seed is given."""
    plan = plan_of(ladder('order = "shuffled"\nrepeats = 9\nseed = 5'))
    assert plan.expand() == plan.expand(5) != plan.expand(6)


def test_draws_are_those_of_splitmix64():
    """First outputs for seed 1234567, as widely printed for splitmix64 (from memory)."""
    assert list(islice(_draws(1234567), 5)) == [
        6457827717110365317,
        3203168211198807973,
        9817491932198370423,
        4593380528125082431,
        16408922859458223821,
    ]


def test_the_shuffle_is_even():
    """Each of the 6 orders of three comes up about as often: chi-square below its 0.999 point."""
    orders = shuffled([[0, 1, 2]] * 6000, 1)
    counts = Counter(map(tuple, orders))
    assert len(counts) == 6
    assert sum((n - 1000) ** 2 / 1000 for n in counts.values()) < 20.5


def test_lists_combine_currents_slowest_then_parameters_models_and_scale():
    """Each combination once, in the order that configs/README.md states."""
    text = ladder(sweep='model = ["k-squid", "squid-axon"]\nscale = [0.0, 2.0]')
    text = text.replace("[[sweep.stimulus]]", '[sweep.parameters]\n"K.gmax_ns" = [5.0, 6.0]\n'
                        "[[sweep.stimulus]]", 1)  # fmt: skip
    sweeps = [s for s in plan_of(text).expand() if s.name == "a"]
    found = [(s.step["current_pa"], s.parameters["K.gmax_ns"], s.model, s.scale) for s in sweeps]
    assert found == [
        (i, g, model, scale)
        for i in (10.0, 20.0)
        for g in (5.0, 6.0)
        for model in ("k-squid", "squid-axon")
        for scale in (0.0, 2.0)
    ]


def test_the_length_is_that_of_all_that_runs():
    """Sweeps, ramps before and rests between: 2 x (2 x 100 + 50) + 6 x 20 + 5 x 30 ms."""
    plan = plan_of(ladder("repeats = 2\npause_ms = 30.0\nramp_ms = 20.0"))
    assert plan.duration_ms() == 2 * 250.0 + 6 * 20.0 + 5 * 30.0
    sweeps = plan.expand(interval_us=20.0)
    assert plan.duration_ms() == sum(s.duration_ms + s.ramp_ms for s in sweeps) + 5 * 30.0
    assert {s.ticks for s in sweeps} == {5000, 2500}


def test_a_step_is_described_only_where_it_is_the_whole_stimulus():
    """``step`` serves the report: one part, a step; otherwise None."""
    alone = plan_of(ladder()).expand()
    assert alone[0].step == {"start_ms": 10.0, "stop_ms": 60.0, "current_pa": 10.0}
    assert alone[-1].step is None
    more = '[[sweep.stimulus]]\nkind = "sine"\namplitude_pa = 5.0\nfrequency_hz = 40.0'
    sweep = plan_of(ladder(stimulus=more)).expand()[0]
    assert sweep.step is None
    assert sweep.stimulus[1] == {
        "kind": "sine", "start_ms": 0.0, "stop_ms": 100.0, "amplitude_pa": 5.0,
        "frequency_hz": 40.0, "phase_deg": 0.0, "offset_pa": 0.0,
    }  # fmt: skip


def test_what_goes_into_the_record_is_plain_data():
    """The plan with its text and sweeps goes through JSON and comes back the same."""
    plan = plan_of(ladder(sweep='model = "squid-axon"'))
    data = plan.as_json(plan.expand(interval_us=33.3))
    assert json.loads(json.dumps(data)) == data
    assert data["text"] == plan.text
    assert len(data["sweeps"]) == 3


@pytest.mark.parametrize(
    ("model", "scale", "parameters", "label"),
    [
        (None, 0.0, {}, "without the conductance"),
        ("k-squid", 0.0, {}, "without the conductance"),
        (None, 1.0, {}, "with the conductance"),
        (None, 0.5, {}, "with the conductance × 0.5"),
        ("k-squid", 1.0, {}, "k-squid"),
        ("/somewhere/mine.toml", 2.0, {}, "mine × 2"),
        ("k-squid", 1.0, {"K.gmax_ns": 60.0}, "k-squid, K.gmax_ns = 60"),
        (None, 1.0, {"K.gmax_ns": 60.0}, "K.gmax_ns = 60"),
        (None, 0.0, {"K.gmax_ns": 60.0}, "× 0, K.gmax_ns = 60"),
    ],
)
def test_a_condition_says_what_is_different(model, scale, parameters, label):
    """Sweeps with different conductances are never one condition, unless both have none."""
    assert condition_of(model, scale, parameters) == label


def test_all_faults_are_told_at_once_with_place_and_what_is_allowed():
    """Contract of files: file, key, found, allowed, for each fault of the file."""
    text = """
title = "x"
[plan]
order = "sorted"
repeat = 3
[[sweep]]
name = "a"
duration_ms = 0.5
scale = [1, "x"]
[sweep.parameters]
"K.gmax_ns" = [1, true]
[[sweep.stimulus]]
kind = "stop"
[[sweep.stimulus]]
kind = "step"
current_pa = 2e6
[[sweep]]
name = "b"
duration_ms = 100
[[sweep.stimulus]]
kind = "step"
frequency_hz = 3
"""
    with pytest.raises(FileError) as fault:
        plan_of(text)
    lines = str(fault.value).splitlines()
    assert all(line.startswith(f"{PLACE}: ") for line in lines)
    told = [line.removeprefix(f"{PLACE}: ") for line in lines]
    assert told[0] == "plan.order: found \"sorted\"; must be 'listed', 'interleaved' or 'shuffled'"
    assert told[1].startswith("plan.repeat: unknown key (did you mean repeats?)")
    assert told[2] == 'sweep "a": duration_ms: found 0.5; must be greater than or equal to 1'
    assert told[3] == 'sweep "a", scale number 2: found "x"; must be a valid number'
    assert told[4].startswith('sweep "a", parameters.K.gmax_ns number 2: found true; must be')
    assert told[5].startswith('sweep "a", stimulus number 1: kind: found "stop"; must be')
    assert told[6].startswith('sweep "a", stimulus number 2: current_pa: found 2000000.0; must be')
    assert told[7] == (
        'sweep "b", stimulus number 1: kind = "step": current_pa is missing, '
        "frequency_hz is not for it; its keys are start_ms, stop_ms, current_pa"
    )
    assert len(told) == 8


@pytest.mark.parametrize(
    ("was", "wrong", "said"),
    [
        ("stop_ms = 60.0", "stop_ms = 5.0", "stop_ms must be after start_ms"),
        ("stop_ms = 60.0", "stop_ms = 101.0", "beyond the sweep's end at duration_ms = 100"),
        ("start_ms = 10.0\nstop_ms = 60.0", "start_ms = 100.0", "beyond the sweep's end"),
        ('name = "b"', 'name = "a"', "sweep named twice: a"),
        ("duration_ms = 50.0", "duration_ms = 1.9e6", "less than or equal to 1800000"),
        ("[plan]", "[plan]\nrepeats = 3334", "10,002 sweeps with lists and repeats"),
        ("current_pa = [10.0, 20.0]", "current_pa = []", "must hold at least 1"),
        ("current_pa = [10.0, 20.0]", "current_pa = nan", "current_pa: found"),
        ("duration_ms = 50.0", "duration_ms = 50.0\nparameters.K.gmax = 1", "CONDUCTANCE.gmax_ns"),
        ("duration_ms = 50.0", "duration_ms = 50.0\nparameters.K.gmax_ns = 2e6", "found 2e+06"),
        ("duration_ms = 50.0", 'duration_ms = 50.0\nmodel = "k-squit"', "Close: k-squid"),
        (
            "duration_ms = 50.0",
            'duration_ms = 50.0\nmodel = "k-squid"\nparameters.Na.gmax_ns = 1',
            "k-squid has no such conductance; it has K",
        ),
    ],
)
def test_an_impossible_plan_is_refused(was, wrong, said):
    """Each limit, with words that say what is wrong."""
    assert was in ladder()
    with pytest.raises(FileError) as fault:
        plan_of(ladder().replace(was, wrong, 1))
    assert said in str(fault.value)


@pytest.mark.parametrize("start", [10.5, 59.9])
def test_parts_that_may_add_up_to_too_much_are_refused(start):
    """Only while they overlap: two of 0.6 uA are too much together, not one after the other."""
    other = f'[[sweep.stimulus]]\nkind = "ramp"\nstart_ms = {start}\nfrom_pa = 0\nto_pa = -6e5'
    text = ladder(stimulus=other).replace("[10.0, 20.0]", "6e5")
    with pytest.raises(FileError, match=r"may add up to 1.2e\+06 pA"):
        plan_of(text)
    plan_of(text.replace(f"start_ms = {start}", "start_ms = 60.0"))


def test_unquoted_parameters_are_the_same_as_quoted_ones():
    """TOML reads ``K.gmax_ns`` without quotes as a table; a person means the same."""
    plain = plan_of(ladder(sweep="parameters.K.gmax_ns = 5.0"))
    quoted = plan_of(ladder(sweep='parameters."K.gmax_ns" = [5.0]'))
    assert plain.expand() == quoted.expand()
    assert plain.expand()[0].parameters == {"K.gmax_ns": 5.0}


def test_a_file_of_ones_own_is_found_beside_the_plan(tmp_path):
    """Relative paths start from the plan's folder, and the record has whole ones."""
    model = 'title = "x"\nsource = "x"\ntemperature_c = 20\n[[conductance]]\nname = "g"\n'
    (tmp_path / "mine.toml").write_text(model + "gmax_ns = 1\nreversal_mv = -70\n")
    (tmp_path / "wave.csv").write_text("time,current\n0,1.5\n1,2.5\n")
    path = tmp_path / "plan.toml"
    more = '[[sweep.stimulus]]\nkind = "file"\npath = "wave.csv"\ninterval_us = 100\ncolumn = 2\n'
    path.write_text(ladder(sweep='model = "./mine.toml"', stimulus=more))
    sweep = load_plan(path).expand()[0]
    assert sweep.model == str(tmp_path / "mine.toml")
    assert sweep.condition == "mine"
    assert sweep.stimulus[1]["path"] == str(tmp_path / "wave.csv")


def test_missing_models_and_waves_are_told_together():
    """Faults of the files that a plan names come all at once, too."""
    more = '[[sweep.stimulus]]\nkind = "file"\npath = "wave.csv"\ninterval_us = 100\n'
    with pytest.raises(FileError) as fault:
        plan_of(ladder(sweep='model = ["nothing", "./nothing.toml"]', stimulus=more))
    assert len(str(fault.value).splitlines()) == 3


WORDS = st.text("aZ_9.-µ \\'\"", max_size=8)
ANYTHING = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | WORDS,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(WORDS, inner, max_size=3),
    max_leaves=5,
)


def some_keys(spec):
    """A table with some of a spec's keys, each with a likely value or anything."""
    likely = st.sampled_from([1.0, 10.0, "step", "a", [1.0, 2.0], 3])
    return st.dictionaries(st.sampled_from(list(spec.model_fields)), likely | ANYTHING, max_size=5)


@st.composite
def tables(draw):
    """A plan file's content, of which much is wrong."""
    data = draw(some_keys(PlanSpec)) | {"title": "x", "plan": draw(some_keys(OrderSpec))}
    sweeps = draw(st.lists(some_keys(SweepSpec), max_size=3))
    for sweep in sweeps:
        sweep["stimulus"] = draw(st.lists(some_keys(StimulusSpec), max_size=2))
        sweep["parameters"] = draw(
            st.dictionaries(st.sampled_from(["K.gmax_ns", "K", "x.y"]), ANYTHING)
        )
    return data | draw(st.sampled_from([{}, {"sweep": sweeps}]))


@settings(max_examples=40)
@given(data=tables())
def test_whatever_a_file_holds_it_is_a_plan_or_a_fault_with_words(data):
    """No content of a plan file ends in anything but a plan or a FileError that names the file."""
    try:
        said = ""
        assert isinstance(parse(PlanSpec, data, PLACE), PlanSpec)
    except FileError as fault:
        said = str(fault)
    assert all(line.startswith(f"{PLACE}: ") for line in said.splitlines())
