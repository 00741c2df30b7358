"""Reading TOML files, and the one message that tells all that is wrong."""

import os

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from gatestep.errors import FileError
from gatestep.files import MAX_BYTES, parse, parse_toml, read_toml
from gatestep.specs import ModelSpec, RigSpec


def faults(spec_class, text, tmp_path):
    """The lines of the error that a file's text gives."""
    path = tmp_path / "it.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(FileError) as refusal:
        parse(spec_class, read_toml(path), path)
    lines = str(refusal.value).splitlines()
    assert all(line.startswith(f"{path}: ") for line in lines)
    return [line.removeprefix(f"{path}: ") for line in lines]


HEAD = 'title = "x"\nsource = "y"\ntemperature_c = 20\n'


def gate_faults(gate, tmp_path):
    text = f'{HEAD}[[conductance]]\nname = "K"\ngmax_ns = 1\nreversal_mv = 0\n'
    return faults(ModelSpec, f"{text}gate = [{{ name = 'n', {gate} }}]\n", tmp_path)


def test_a_good_file_is_read(tmp_path):
    """Whole numbers may stand for decimal ones, and lists for fixed tuples."""
    path = tmp_path / "rig.toml"
    path.write_text(
        "[loop]\ninterval_us = 50\n[[cell]]\nname = 'a'\nmodel = 'b'\n"
        "limits.window_mv = [-90, 40]\n"
    )
    rig = parse(RigSpec, read_toml(path), path)
    assert rig.loop.interval_us == 50.0
    assert rig.cell[0].limits.window_mv == (-90.0, 40.0)


def test_every_fault_is_told_at_once_with_names(tmp_path):
    """One line a fault: the key by its conductance's and gate's names, found, allowed."""
    text = """
        title = "x"
        temperature_c = 70
        sauce = "y"
        [[conductance]]
        name = "K"
        gmax = 12
        gmax_ns = "120 nS"
        reversal_mv = true
        [[conductance.gate]]
        name = "n"
        instances = 99
        alpha = 1.0
        beta = 2.0
        [[conductance]]
        gmax_ns = 1e99
        nernst = { valence = 3, inside_mmolar = 0, outside = 2 }
    """
    assert faults(ModelSpec, text, tmp_path) == [
        "source: missing; this key is required",
        "temperature_c: found 70; must be less than or equal to 60",
        'conductance "K": gmax_ns: found "120 nS"; must be a valid number',
        'conductance "K": reversal_mv: found true; must be a valid number',
        'conductance "K", gate "n": instances: found 99; must be less than or equal to 15',
        'conductance "K": gmax: unknown key (did you mean gmax_ns?); known here: '
        "name, gmax_ns, reversal_mv, nernst, q10, q10_temperature_c, note, gate",
        "conductance number 2: name: missing; this key is required",
        "conductance number 2: gmax_ns: found 1e+99; must be less than or equal to 1000000",
        "conductance number 2: nernst.valence: found 3; must be -2, -1, 1 or 2",
        "conductance number 2: nernst.inside_mmolar: found 0; must be greater than 0",
        "conductance number 2: nernst.outside_mmolar: missing; this key is required",
        "conductance number 2: nernst.outside: unknown key (did you mean outside_mmolar?); "
        "known here: valence, inside_mmolar, outside_mmolar",
        "sauce: unknown key (did you mean source?); known here: title, source, temperature_c, "
        "version, confidence, caveats, parameters, conductance",
    ]


KINDS = (
    "a formula in quotes, a number, {form, rate, midpoint, scale}, "
    "or {v_mv = [...], values = [...]}"
)


@pytest.mark.parametrize(
    ("beta", "expected"),
    [
        ("[1, 2]", [f"beta: found [1, 2]; allowed is {KINDS}"]),
        ("true", [f"beta: found true; allowed is {KINDS}"]),
        ("{ a = 1 }", [f"beta: found a table with a; allowed is {KINDS}"]),
        ("''", ['beta: found ""; must have at least 1 character']),
        ("inf", ["beta: found Infinity; must be a finite number"]),
        (
            "{ form = 'expo', rate = 1, midpoint = 2, skale = 3 }",
            [
                "beta.form: found \"expo\"; must be 'exp', 'sigmoid' or 'exp_linear'",
                "beta.scale: missing; this key is required",
                "beta.skale: unknown key (did you mean scale?); known here: "
                "form, rate, midpoint, scale",
            ],
        ),
        (
            "{ form = 'exp', rate = 1, midpoint = 2, scale = 0 }",
            ["beta.scale: scale must not be 0 (mV per e-fold)"],
        ),
        (
            "{ v_mv = [1], values = [1, 'x'] }",
            [
                "beta.v_mv: found [1]; must hold at least 2",
                'beta.values number 2: found "x"; must be a valid number',
            ],
        ),
        (
            "{ v_mv = [1, 1], values = [1, 2] }",
            ["beta: v_mv must rise from each point to the next"],
        ),
        (
            "{ v_mv = [1, 2], values = [1, 2, 3] }",
            ["beta: v_mv has 2 entries and values has 3; they must pair up"],
        ),
    ],
)
def test_a_faulty_rate_is_told_in_terms_of_the_kind_it_was_meant_to_be(beta, expected, tmp_path):
    """A rate may be of four kinds; its faults are told for one, not for four."""
    found = gate_faults(f"alpha = 1, beta = {beta}", tmp_path)
    place = 'conductance "K", gate "n"'
    assert all(line.startswith(place) for line in found)
    assert [line.removeprefix(place).lstrip(":, ") for line in found] == expected


@pytest.mark.parametrize(
    ("gate", "words"),
    [
        ("alpha = 1", "give alpha and beta (per ms), or inf and tau (ms); found alpha"),
        ("tau = 1, beta = 1", "found beta, tau"),
        ("instances = 2", "found neither"),
        ("alpha = 1, beta = 1, q10 = 3", "q10 needs q10_temperature_c"),
    ],
)
def test_faults_of_a_whole_table_are_told(gate, words, tmp_path):
    """What no single key can be blamed for is told of the table it belongs to."""
    (line,) = gate_faults(gate, tmp_path)
    assert line.startswith('conductance "K"')
    assert words in line


def test_faults_of_rig_files_read_alike(tmp_path):
    """Choices of kinds and of fixed lengths are told in one line each, in plain words."""
    text = """
        [loop]
        interval_us = "50 us"
        endpont = "x"
        anticipate = 3
        [[cell]]
        name = "a"
        model = "b"
        limits.window_mv = [1, 2, 3]
        [[cell]]
        model = 1
    """
    assert faults(RigSpec, text, tmp_path) == [
        'loop.interval_us: found "50 us"; must be a valid number',
        "loop.anticipate: found 3; must be 'auto', or must be a valid boolean",
        "loop.endpont: unknown key (did you mean endpoint?); known here: "
        "endpoint, interval_us, budget_us, apply, anticipate, lane",
        'cell "a": limits.window_mv: found [1, 2, 3]; must hold at most 2',
        "cell number 2: name: missing; this key is required",
        "cell number 2: model: found 1; must be a valid string",
    ]


def test_an_empty_list_is_too_short_but_a_faulty_member_makes_no_list_short(tmp_path):
    """Only a list that is short itself is told to be."""
    assert faults(ModelSpec, HEAD + "conductance = []", tmp_path) == [
        "conductance: found []; must hold at least 1"
    ]
    assert faults(ModelSpec, HEAD + "conductance = [3]", tmp_path) == [
        "conductance number 1: found 3; must be a table"
    ]


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"title = \n", ["not valid TOML", "line 1"]),
        (b"a = 1\nb = 2\na = 3\n", ["not valid TOML", "line 3"]),
        (b"a = 1\ntitle = 'caf\xe9'\n", ["line 2", "not UTF-8"]),
        (b"# " + b"x" * MAX_BYTES, ["1,000,000 bytes", "too large"]),
        (b"a = " + b"[" * 100_000, ["not valid TOML"]),
        (b"a = " + b"9" * 10_000, ["not valid TOML"]),
        (b"\x00", ["not valid TOML"]),
    ],
)
def test_what_is_no_toml_is_refused_with_its_line(content, words, tmp_path):
    """Broken, foreign and oversized files give a FileError that names the file."""
    path = tmp_path / "it.toml"
    path.write_bytes(content)
    with pytest.raises(FileError) as refusal:
        read_toml(path)
    for word in [str(path), *words]:
        assert word in str(refusal.value)


def test_what_is_no_file_is_refused(tmp_path):
    """Missing files, folders and impossible names are told apart from broken ones."""
    with pytest.raises(FileError, match="no such file"):
        read_toml(tmp_path / "none.toml")
    with pytest.raises(FileError, match="not a file"):
        read_toml(tmp_path)
    with pytest.raises(FileError):
        read_toml(tmp_path / "a\0b.toml")
    os.mkfifo(tmp_path / "pipe.toml")
    with pytest.raises(FileError, match="not a file"):
        read_toml(tmp_path / "pipe.toml")


_PLAIN = st.recursive(
    st.one_of(st.integers(), st.floats(), st.booleans(), st.text(max_size=8), st.dates()),
    lambda inner: st.one_of(
        st.lists(inner, max_size=3), st.dictionaries(st.text(max_size=8), inner, max_size=3)
    ),
    max_leaves=6,
)
_KEYS = ["title", "source", "temperature_c", "parameters", "conductance", "name", "gmax_ns"]
_KEYS += ["gate", "alpha", "beta", "inf", "tau", "form", "v_mv", "values", "nernst", "q10"]


@settings(max_examples=200, deadline=None, derandomize=True)
@given(
    st.dictionaries(
        st.sampled_from(_KEYS),
        st.one_of(_PLAIN, st.lists(st.dictionaries(st.sampled_from(_KEYS), _PLAIN), max_size=2)),
    )
)
def test_any_data_gives_a_spec_or_a_file_error(data):
    """Invariant: whatever a file holds, the outcome is a description or a FileError with lines."""
    path = "it.toml"
    try:
        spec = parse(ModelSpec, data, path)
    except FileError as refusal:
        lines = str(refusal).splitlines()
    else:
        lines = [f"it.toml: {spec.title}"]
    assert lines
    assert lines[0].startswith("it.toml: ")


@settings(max_examples=150, deadline=None, derandomize=True)
@given(st.binary(max_size=200))
def test_any_bytes_give_data_or_a_file_error(content):
    """Invariant: no bytes make the reader raise anything but a FileError."""
    try:
        data = parse_toml(content, "it.toml")
    except FileError:
        return
    assert isinstance(data, dict)
