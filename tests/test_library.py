"""Finding, reading and checking model files."""

import hashlib

import pytest

from gatestep.errors import FileError
from gatestep.library import find_model, load_model, shipped_folder, shipped_models, shipped_names

OWN = """
title = "mine"
source = "me"
temperature_c = 22
[parameters]
half = -40
[[conductance]]
name = "K"
gmax_ns = 5
reversal_mv = -80
[[conductance.gate]]
name = "n"
inf = "1/(1 + exp(-(V - half)/8))"
tau = 3
"""


def test_a_shipped_model_is_found_by_name():
    """The name of a shipped model is its file's name without the suffix."""
    loaded = load_model("squid-axon")
    assert loaded.name == "squid-axon"
    assert loaded.path == shipped_folder() / "squid-axon.toml"
    assert [c.name for c in loaded.spec.conductance] == ["Na", "K", "leak"]


def test_text_and_hash_are_the_files_own():
    """The record holds the file byte for byte, and its SHA-256 (hashlib)."""
    loaded = load_model("squid-axon")
    content = loaded.path.read_bytes()
    assert loaded.text.encode() == content
    assert loaded.sha256 == hashlib.sha256(content).hexdigest()


def test_a_file_is_found_by_path_relative_to_the_rig_file(tmp_path, monkeypatch):
    """A path has a separator or ends in .toml; a rig file's own folder is where it starts."""
    (tmp_path / "sub").mkdir()
    (tmp_path / "sub" / "mine.toml").write_text(OWN)
    for path, base in [
        ("mine.toml", tmp_path / "sub"),
        ("sub/mine.toml", tmp_path),
        ("../sub/mine.toml", tmp_path / "sub"),
        (str(tmp_path / "sub" / "mine.toml"), tmp_path / "elsewhere"),
    ]:
        assert load_model(path, relative_to=base).name == "mine"
    monkeypatch.chdir(tmp_path / "sub")
    assert load_model("mine.toml").spec.title == "mine"
    assert load_model("./mine.toml").spec.parameters == {"half": -40.0}


def test_a_file_named_like_a_shipped_model_does_not_shadow_it(tmp_path, monkeypatch):
    """A bare name always means the shipped model, whatever lies in the working folder."""
    (tmp_path / "squid-axon.toml").write_text(OWN)
    monkeypatch.chdir(tmp_path)
    assert load_model("squid-axon").spec.title.startswith("Squid")
    assert load_model("squid-axon.toml").spec.title == "mine"


def test_an_unknown_name_lists_close_ones():
    """A misspelt name is answered with what it may have been, and where to look."""
    with pytest.raises(FileError) as refusal:
        find_model("squid-axn")
    for words in ("'squid-axn'", "squid-axon", "gatestep models", "./mine.toml"):
        assert words in str(refusal.value)
    with pytest.raises(FileError, match="no model is named 'qqqq'"):
        load_model("qqqq")


def test_a_missing_file_is_an_error(tmp_path):
    """A path that leads nowhere names itself."""
    with pytest.raises(FileError, match=r"none\.toml: no such file"):
        load_model("none.toml", relative_to=tmp_path)


def test_every_bad_formula_is_told_at_once_with_its_place(tmp_path):
    """Formulas are read when the file is, not when the cell is armed."""
    text = OWN.replace("exp(", "expp(").replace("tau = 3", 'tau = "3 +"')
    (tmp_path / "bad.toml").write_text(text)
    with pytest.raises(FileError) as refusal:
        load_model("bad.toml", relative_to=tmp_path)
    lines = str(refusal.value).splitlines()
    assert len(lines) == 2
    for line, words in zip(
        lines, ["inf: not plain arithmetic: 'expp(", "tau: cannot read"], strict=True
    ):
        assert line.startswith(f'{tmp_path / "bad.toml"}: conductance "K", gate "n": {words}')


def test_a_line_ending_changes_the_hash_and_nothing_else(tmp_path):
    """Files from other systems are read; the record keeps their bytes."""
    (tmp_path / "a.toml").write_bytes(OWN.encode())
    (tmp_path / "b.toml").write_bytes(OWN.replace("\n", "\r\n").encode())
    a, b = (load_model(f"{name}.toml", relative_to=tmp_path) for name in "ab")
    assert a.spec == b.spec
    assert a.sha256 != b.sha256


def test_all_shipped_models_load_in_order():
    """The list holds every file of the folder, alphabetical, each a valid model."""
    models = shipped_models()
    assert [m.name for m in models] == shipped_names() == sorted(shipped_names())
    assert len(models) == len(list(shipped_folder().glob("*.toml")))
