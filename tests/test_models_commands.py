"""``gatestep models`` and ``gatestep curves``: what they print and draw."""

import json
import struct
import subprocess
import sys
import xml.etree.ElementTree as ET

import pytest

from gatestep.commands.models import list_models, parse_voltages, show_curves
from gatestep.errors import FileError, GatestepError
from gatestep.library import shipped_names


def test_the_list_names_every_model_with_its_source(capsys):
    """A person sees each name with title, source, temperature and confidence."""
    assert list_models(json_output=False) == 0
    printed = capsys.readouterr().out
    for name in shipped_names():
        assert f" {name} " in printed
    assert "Hodgkin" in printed
    assert "6.3" in printed
    assert "uncertain" in printed


def test_the_list_is_also_json(capsys):
    """A program gets the same and the caveats, one object a model."""
    list_models(json_output=True)
    models = json.loads(capsys.readouterr().out)["models"]
    assert [m["name"] for m in models] == shipped_names()
    squid = next(m for m in models if m["name"] == "squid-axon")
    assert squid["temperature_c"] == 6.3
    assert squid["confidence"] == "agreed"
    assert [(c["name"], c["gmax_ns"], c["gates"]) for c in squid["conductances"]] == [
        ("Na", 3600, ["m", "h"]),
        ("K", 1080, ["n"]),
        ("leak", 9, []),
    ]


def test_curves_as_json_hold_the_gates_at_the_voltages_asked_for(capsys):
    """Names, instances, voltages, steady states and time constants of the squid's gates.

    At -65 mV: n 0.31768 and 5.4586 ms, m 0.052932 and 0.23677 ms (computed from the
    equations of Hodgkin and Huxley 1952).
    """
    assert show_curves("squid-axon", "-65,-40", None, json_output=True) == 0
    printed = json.loads(capsys.readouterr().out)
    assert printed["model"] == "squid-axon"
    gates = {g["name"]: g for g in printed["gates"]}
    assert {n: g["instances"] for n, g in gates.items()} == {"Na.m": 3, "Na.h": 1, "K.n": 4}
    assert gates["K.n"]["v_mv"] == [-65.0, -40.0]
    assert gates["K.n"]["inf"][0] == pytest.approx(0.31767691, rel=1e-7)
    assert gates["K.n"]["tau_ms"][0] == pytest.approx(5.4585847, rel=1e-7)
    assert gates["Na.m"]["inf"][0] == pytest.approx(0.052932485, rel=1e-7)
    assert gates["Na.m"]["tau_ms"][0] == pytest.approx(0.23676688, rel=1e-7)


def test_voltages_have_a_default(capsys):
    """Without --at: -100 to 40 mV in steps of 10; an instantaneous gate has tau 0."""
    show_curves("na-p-hippocampal", None, None, json_output=True)
    (gate,) = json.loads(capsys.readouterr().out)["gates"]
    assert gate["v_mv"] == list(range(-100, 41, 10))
    assert gate["tau_ms"] == [0.0] * 15


def test_curves_are_printed_for_a_person(capsys):
    """A table for each gate, with what is uncertain about the model; a leak says so."""
    show_curves("na-p-cortical", "-40", None, json_output=False)
    printed = capsys.readouterr().out
    for words in ("Hay et al. 2011", "Uncertain", "NaP.m, 3 instances", "NaP.h, 1 instance", "-40"):
        assert words in printed
    show_curves("fast-spiking", "-40", None, json_output=False)
    assert "instantaneous" in capsys.readouterr().out
    show_curves("leak", None, None, json_output=False)
    assert "no gates" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("at", "words"),
    [
        ("-65,x", "'x' is not a voltage"),
        ("", "'' is not a voltage"),
        ("-65,,3", "'' is not a voltage"),
        ("300", "300 mV is outside"),
        ("nan", "outside"),
        ("-inf", "outside"),
    ],
)
def test_voltages_that_cannot_be_read_are_told(at, words):
    """The piece at fault is named, with an example of what is meant."""
    with pytest.raises(GatestepError, match=words):
        parse_voltages(at)


def test_voltages_may_have_spaces():
    """A quoted list reads as it looks."""
    assert parse_voltages("-65, -40 ,0.5") == (-65.0, -40.0, 0.5)


def test_a_figure_is_drawn_to_png(tmp_path, capsys):
    """The file is a PNG of readable size, and nothing else is left beside it."""
    path = tmp_path / "squid.png"
    show_curves("squid-axon", None, path, json_output=False)
    content = path.read_bytes()
    assert content[:8] == b"\x89PNG\r\n\x1a\n"  # PNG specification, section 5.2
    width, height = struct.unpack(">II", content[16:24])
    assert width >= 1200
    assert height >= 600
    assert list(tmp_path.iterdir()) == [path]
    assert str(path) in capsys.readouterr().out


def test_a_figure_is_drawn_to_svg_with_units_and_source(tmp_path, capsys, monkeypatch):
    """The SVG holds labels with units, the title and the source, as text."""
    import matplotlib as mpl

    monkeypatch.setitem(mpl.rcParams, "svg.fonttype", "none")
    path = tmp_path / "crab.svg"
    show_curves("crab-axon", "-90,30", path, json_output=True)
    assert json.loads(capsys.readouterr().out)["figure"] == str(path)
    drawn = " ".join(ET.parse(path).getroot().itertext())
    for words in ("membrane potential (mV)", "time constant (ms)", "steady state", "Crab axon",
                  "Connor", "A.a (3 instances)"):  # fmt: skip
        assert words in drawn


@pytest.mark.parametrize("name", ["na-p-hippocampal", "low-threshold-spiking"])
def test_any_mixture_of_gates_can_be_drawn(name, tmp_path):
    """Instantaneous gates have no time constant to draw, and one voltage no width."""
    show_curves(name, "-40,-40", tmp_path / "a.PNG", json_output=False)
    assert (tmp_path / "a.PNG").stat().st_size > 10_000


def test_a_figure_that_cannot_be_drawn_is_told(tmp_path):
    """Another suffix, a folder that is not there, a model without gates."""
    with pytest.raises(GatestepError, match=r"neither \.png nor \.svg"):
        show_curves("squid-axon", None, tmp_path / "a.pdf", json_output=False)
    with pytest.raises(FileError, match="cannot be written"):
        show_curves("squid-axon", None, tmp_path / "none" / "a.png", json_output=False)
    with pytest.raises(GatestepError, match="nothing to draw"):
        show_curves("leak", None, tmp_path / "a.png", json_output=False)
    assert list(tmp_path.iterdir()) == []


def test_a_figure_below_a_file_is_told(tmp_path):
    """A file where a folder should be is a clear error, also when nothing is left to remove."""
    (tmp_path / "file").write_text("mine")
    with pytest.raises(FileError, match="cannot be written"):
        show_curves("k-squid", None, tmp_path / "file" / "x.png", False)


def test_without_matplotlib_the_extra_is_named(tmp_path, monkeypatch):
    """A missing optional package is an error that says what to install."""
    monkeypatch.setitem(sys.modules, "matplotlib.figure", None)
    with pytest.raises(GatestepError, match=r"gatestep\[figure\]"):
        show_curves("squid-axon", None, tmp_path / "a.png", json_output=False)


def test_importing_the_commands_loads_nothing_heavy():
    """Help must come at once: numpy and the like wait until a body runs."""
    heavy = "[m for m in ('numpy', 'pydantic', 'rich', 'matplotlib', 'numba') if m in sys.modules]"
    script = f"import sys, gatestep.commands.models; print({heavy})"
    done = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, check=True
    )
    assert done.stdout.strip() == "[]"
