"""What the documents say must be what the program is, and the rig files must load."""

from __future__ import annotations

import ast
import json
import re
import subprocess
import sys
import time
from pathlib import Path

import pytest
import typer
from pydantic.fields import FieldInfo
from typer.core import TyperGroup

from gatestep import planspecs, specs
from gatestep.cli import app
from gatestep.config import load_rig, load_rig_models
from gatestep.library import shipped_models
from gatestep.plans import load_plan
from gatestep.states import diagram
from gatestep.wire import FLAG_NAMES

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text("utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text("utf-8")
CONFIGS = (ROOT / "configs" / "README.md").read_text("utf-8")
RIGS = sorted((ROOT / "configs" / "rigs").glob("*.toml"))
PLANS = sorted((ROOT / "configs" / "plans").glob("*.toml"))
TEMPLATE = ROOT / "configs" / "rigs" / "template.toml"

SPECS = {
    name: value
    for name, value in {**vars(specs), **vars(planspecs)}.items()
    if isinstance(value, type) and issubclass(value, specs.Spec) and value is not specs.Spec
}
RIG_SPECS = tuple(specs.RigSpec.model_json_schema()["$defs"])
RATES = {"alpha", "beta", "inf", "tau"}  # their limits are those of a rate, stated in one place


@pytest.mark.parametrize("path", RIGS, ids=lambda path: path.stem)
def test_every_rig_file_loads_with_its_models(path):
    """A rig file that ships is one that a server accepts."""
    rig = load_rig(path)
    assert len(load_rig_models(rig)) == len(rig.spec.cell)
    for cell in rig.spec.simulated.cell if rig.spec.simulated else ():
        assert set(cell.native) <= {m.name for m in shipped_models()}


def test_the_simulated_scenarios_say_that_they_are_invented():
    """No one may take a shipped scenario for a recording."""
    for path in RIGS:
        comments = re.sub(r"\n# ", " ", path.read_text("utf-8"))
        assert "gatestep's own inventions" in comments, path


@pytest.mark.parametrize("path", PLANS, ids=lambda path: path.stem)
def test_every_plan_loads_is_listed_and_says_that_it_is_invented(path):
    """A plan that ships is one that can be run, a short one, and its amplitudes are no advice."""
    plan = load_plan(path)
    assert plan.duration_ms() < 120_000
    assert f"(plans/{path.name})" in CONFIGS
    comments = re.sub(r"\n# ", " ", path.read_text("utf-8"))
    assert "gatestep's own inventions" in comments


def _switched_on(text: str) -> str:
    """The template with every key in force that is off."""
    return re.sub(r"^#(?=[a-z\[])", "", text, flags=re.MULTILINE)


def test_the_template_has_every_key_and_loads_with_all_of_them(tmp_path):
    """Each field of a rig's specs stands in the template, on or off, and is allowed."""
    everything = _switched_on(TEMPLATE.read_text("utf-8"))
    path = tmp_path / "everything.toml"
    path.write_text(everything, "utf-8")
    assert load_rig(path).spec.record is not None
    keys = set(re.findall(r"^([a-z_]+) = ", everything, re.MULTILINE))
    tables = set(re.findall(r"^\[+([a-z_.]+)\]", everything, re.MULTILINE))
    keys |= {table.rpartition(".")[2] for table in tables}
    wanted = {field for name in RIG_SPECS for field in SPECS[name].model_fields}
    assert wanted - keys == set()


def test_the_template_stands_at_the_defaults():
    """What the template has switched on is what a rig file has without it."""
    spec = load_rig(TEMPLATE).spec
    plain = {"loop": {"interval_us": spec.loop.interval_us}}
    plain["cell"] = [{"name": spec.cell[0].name, "model": spec.cell[0].model}]
    assert specs.RigSpec.model_validate(plain) == spec


def documented_keys(text: str) -> dict[str, dict[str, list[str]]]:
    """For each spec with a heading, its table's rows by key: unit, default, limits, meaning."""
    found: dict[str, dict[str, list[str]]] = {}
    for part in re.split(r"^#+ ", text, flags=re.MULTILINE):
        heading = re.match(r"`(\w+)`:", part)
        if heading:
            rows = re.findall(r"^\| `(\w+)` \|(.*)\|$", part, re.MULTILINE)
            found[heading[1]] = {key: [c.strip() for c in row.split("|")] for key, row in rows}
    return found


def default_of(field: FieldInfo) -> str:
    """A field's default as the tables write it."""
    if field.is_required():
        return "required"
    default = field.get_default(call_default_factory=True)
    if default is None:
        return "none"
    if isinstance(default, specs.Spec):
        return "its defaults"
    if isinstance(default, tuple) and len(default) == 1:
        default = default[0]  # where a list may stand for one value, one value may be written
    return f"`{json.dumps(default)}`"


def limits_of(schema: dict) -> set:
    """Every bound and choice that a field's JSON schema states, not those of inner tables."""
    found = set(schema.get("enum", ()))
    pair = schema.get("minItems") == schema.get("maxItems")
    for key, value in schema.items():
        counted = key.endswith("Items") and not pair
        if key.lower().endswith(("minimum", "maximum", "length")) or counted:
            found.add(value)
    for inner in schema.get("anyOf", ()):
        found |= limits_of(inner)
    return found - {True, False} if schema.get("type") == "boolean" else found


def key_faults(text: str) -> list[str]:
    """Where the tables of keys differ from the specs."""
    faults = []
    tables = documented_keys(text)
    for name, spec in SPECS.items():
        rows = tables.get(name, {})
        if list(rows) != list(spec.model_fields):
            faults.append(f"{name}: {list(rows)} documented, {list(spec.model_fields)} exist")
            continue
        schema = spec.model_json_schema()["properties"]
        for key, field in spec.model_fields.items():
            _, default, limits, _ = rows[key]
            if default != default_of(field):
                faults.append(f"{name}.{key}: default {default}, is {default_of(field)}")
            numbers = re.findall(r"2\*\*63 - 1|-?\d+(?:\.\d+)?(?:e\d+)?", limits)
            stated = {2**63 - 1 if n.startswith("2**") else float(n) for n in numbers}
            stated |= set(re.findall(r'"(.*?)"', limits))
            if key not in RATES and not limits_of(schema[key]) <= stated:
                faults.append(f"{name}.{key}: limits {limits!r}, are {limits_of(schema[key])}")
    return faults


def test_every_key_is_documented_with_its_default_and_limits():
    """configs/README.md cannot drift from specs.py: keys, order, defaults and bounds agree."""
    assert key_faults(CONFIGS) == []


@pytest.mark.parametrize(
    ("was", "wrong"),
    [("`250.0`", "`300.0`"), ("5 to 100000", "5 to 10000"), ("| `drop` ", "| `dropped` ")],
)
def test_a_key_documented_wrongly_is_found(was, wrong):
    """The check itself: a wrong default, a wrong bound and a wrong name are faults."""
    assert key_faults(CONFIGS.replace(was, wrong, 1)) != []


def test_the_list_of_what_ships_is_complete():
    """Every shipped model is listed with its title, temperature and confidence, no other is."""
    listed = CONFIGS.partition("## What ships")[2].partition("\n## ")[0]
    rows = re.findall(r"^\| `.*\|$", listed, re.MULTILINE)
    assert rows == [
        f"| `{m.name}` | {m.spec.title} | {m.spec.temperature_c:g} | {m.spec.confidence} |"
        for m in shipped_models()
    ]


def test_the_example_model_is_one_that_loads(tmp_path):
    """The model file printed in configs/README.md is read and tabulated."""
    block = re.search(r"^    title = .*?(?=^\S)", CONFIGS, re.MULTILINE | re.DOTALL)
    path = tmp_path / "example.toml"
    path.write_text(re.sub(r"^    ", "", block[0], flags=re.MULTILINE), "utf-8")
    done = _gatestep("curves", str(path), "--at=-30", "--json")
    gate = json.loads(done)["gates"][0]
    assert (gate["name"], gate["inf"], gate["tau_ms"]) == ("K.n", [0.5], [5.0])


def _gatestep(*arguments: str) -> str:
    command = [sys.executable, "-m", "gatestep", *arguments]
    return subprocess.run(command, capture_output=True, text=True, check=True).stdout


@pytest.mark.parametrize("text", [README, DEVELOPERS], ids=["README", "DEVELOPERS"])
def test_the_drawing_of_the_states_is_the_transition_table(text):
    """The drawing is what gatestep.states.diagram() draws."""
    assert f"```\n{diagram()}\n```" in text


def test_the_flags_are_those_of_the_wire():
    """README's table has every flag with its bit, in order."""
    rows = re.findall(r"^\| (\d+) \| `(\w+)` \|", README, re.MULTILINE)
    assert [(int(bit), name) for bit, name in rows] == list(FLAG_NAMES.items())


def _commands(text: str) -> list[str]:
    """Every 'gatestep COMMAND ...' that stands in a code span, a code block or a comment."""
    spans = re.findall(r"`(?:\.venv/bin/)?(gatestep [a-z][^`]*)`|'(gatestep [a-z][^']*)'", text)
    lines = re.findall(r"^[#$ ]*(?:\S*&& )?(?:\.venv/bin/)?(gatestep [a-z].*)$", text, re.MULTILINE)
    chained = re.findall(r"&& \.venv/bin/(gatestep [a-z]+)", text)
    return [a or b for a, b in spans] + lines + chained


def command_faults(text: str) -> list[str]:
    """Commands and options in a text that the command line does not have."""
    known = typer.main.get_command(app).commands
    faults = []
    for line in _commands(text):
        name, *rest = re.sub(r"  +.*", "", line).split()[1:]
        if name not in known:
            faults.append(f"{line!r}: no such command")
            continue
        command = known[name]
        if isinstance(command, TyperGroup):
            if not rest or rest[0] not in command.commands:
                faults.append(f"{line!r}: {name} has {', '.join(command.commands)}")
                continue
            command = command.commands[rest[0]]
        options = {option for p in command.params for option in p.opts} | {"--help"}
        given = {word.partition("=")[0] for word in rest if word.startswith("--")}
        faults += [f"{line!r}: no option {option}" for option in given - options]
    return faults


@pytest.mark.parametrize("path", ["README.md", "DEVELOPERS.md", "configs/README.md", *RIGS, *PLANS])
def test_every_command_in_the_documents_exists(path):
    """No document names a command or an option that the command line does not have."""
    assert command_faults((ROOT / path).read_text("utf-8")) == []


def test_a_command_that_does_not_exist_is_found():
    """The check itself: it sees commands in spans and blocks, and their options."""
    text = "Say `gatestep dance`, `gatestep bench dance` or\n\n    gatestep status --loudly\n"
    assert len(command_faults(text)) == 3
    assert len(_commands(README)) >= 10


@pytest.mark.parametrize("path", ["README.md", "DEVELOPERS.md", "configs/README.md"])
def test_links_lead_somewhere(path):
    """Every relative link's file exists, and every link within a page has its heading."""
    text = (ROOT / path).read_text("utf-8")
    heads = re.findall(r"^#+ (.*)$", text, re.MULTILINE)
    anchors = {re.sub(r"[^\w -]", "", head.lower()).replace(" ", "-") for head in heads}
    for target in re.findall(r"\]\(([^)]+)\)", text):
        if target.startswith("#"):
            assert target[1:] in anchors
        else:
            assert (ROOT / path).parent.joinpath(target.partition("#")[0]).exists(), target


def test_the_rig_loop_of_the_readme_runs(serving):
    """README's example, run against a server: armed, its cell is pulled to the leak's reversal.

    A leak of 3 nS at -75 mV and a virtual one of 1 nS at -60 mV meet at -71.25 mV (circuit law).
    """
    server = serving(loop={"interval_us": 50.0}, cell=[{"name": "cell", "model": "leak"}])
    server.control.set("leak.reversal_mv", -60.0)
    server.control.arm()
    example = re.search(r"```python\n(.*?)```", README, re.DOTALL)[1]
    assert example.count("\n") <= 23
    names: dict[str, object] = {}
    example = example.replace("tcp://127.0.0.1:5790", server.server.endpoints()["loop"])
    exec(example.replace("TIMEOUT_MS = 50, 100", "TIMEOUT_MS = 50, 20_000"), names)
    assert server.control.status()["state"] == "armed"
    names["rig"].context.destroy(linger=0)
    deadline = time.monotonic() + 20.0
    while (status := server.control.status())["rig"] != "none":  # until all is in the log
        assert time.monotonic() < deadline
        time.sleep(0.01)
    assert status["late"] == status["missed"] == status["malformed"] == 0
    assert status["answered"] == 20_000
    assert names["v_mv"] == pytest.approx(-71.25, abs=1e-6)


PACKAGE = ROOT / "src" / "gatestep"
SOURCES = {
    path.relative_to(PACKAGE).with_suffix("").as_posix(): path.read_text("utf-8")
    for path in sorted(PACKAGE.rglob("*.py"))
}
# Their [hot] functions are intrinsics, and twins of these in numpy that never run compiled.
INTRINSICS = ("bits", "simd")
HARMLESS = {"abs", "float", "int", "max", "min", "range"}
# numpy's own types, and the one of its functions that keeps a scalar a float.
SCALARS = {"floor", "ceil", "isnan"} | {
    f"{kind}{bits}" for kind in ("int", "uint", "float") for bits in (8, 16, 32, 64)
}


def _imported(module: str, statement: ast.ImportFrom) -> str:
    """The module that a relative import names, as a key of SOURCES."""
    folder = module.split("/")[:-1]
    up = folder[: len(folder) - (statement.level - 1)]
    return "/".join([*up, *(statement.module or "").split(".")]).rstrip("/")


def _is_hot(function: ast.FunctionDef) -> bool:
    return (ast.get_docstring(function) or "").startswith("[hot]")


def _callables(tree: ast.Module) -> dict[str, bool]:
    """Functions, classes and external symbols of a module, and whether hot code may call them."""
    found = {}
    for node in ast.walk(tree):
        if isinstance(node, ast.FunctionDef):
            found[node.name] = found.get(node.name, True) and _is_hot(node)
        elif isinstance(node, ast.ClassDef):
            found[node.name] = False
        elif isinstance(node, ast.Assign | ast.AnnAssign) and isinstance(node.value, ast.Call):
            external = ast.unparse(node.value.func).endswith("ExternalFunction")
            targets = node.targets if isinstance(node, ast.Assign) else [node.target]
            found |= {target.id: True for target in targets if external}
    return found


def _overloads(tree: ast.Module) -> dict[str, ast.FunctionDef]:
    """Functions of which compiled code takes an overload, each with the one that chooses it."""
    found = {}
    for node in ast.walk(tree):
        for mark in node.decorator_list if isinstance(node, ast.FunctionDef) else ():
            if isinstance(mark, ast.Call) and ast.unparse(mark.func) == "overload":
                found[ast.unparse(mark.args[0])] = node
    return found


def _calls(function: ast.FunctionDef, overloads: dict[str, ast.FunctionDef]) -> set[str]:
    """What a function calls when it is compiled."""
    body: list[ast.AST] = [function]
    if function.name in overloads:
        body = [n for n in ast.walk(overloads[function.name]) if isinstance(n, ast.Lambda)]
    calls = [n for part in body for n in ast.walk(part) if isinstance(n, ast.Call)]
    return {ast.unparse(call.func) for call in calls}


def _allowed(module: str, tree: ast.Module, callables: dict[str, dict[str, bool]]) -> set[str]:
    """The names that a hot function of a module may call."""
    allowed = HARMLESS | {name for name, hot in callables[module].items() if hot}
    for node in ast.walk(tree):
        if not isinstance(node, ast.ImportFrom):
            continue
        source = _imported(module, node) if node.level else node.module
        for alias in node.names:
            hot = source in INTRINSICS or source == "math"
            if hot or callables.get(source, {}).get(alias.name, False):
                allowed.add(alias.asname or alias.name)
    return allowed


def untagged_calls(sources: dict[str, str]) -> list[str]:
    """Every call in a [hot] function to something that is not known to be hot."""
    trees = {module: ast.parse(text) for module, text in sources.items()}
    callables = {module: _callables(tree) for module, tree in trees.items()}
    faults = []
    for module, tree in trees.items():
        if module in INTRINSICS:
            continue
        allowed = _allowed(module, tree, callables) | {f"np.{name}" for name in SCALARS}
        overloads = _overloads(tree)
        for function in ast.walk(tree):
            if isinstance(function, ast.FunctionDef) and _is_hot(function):
                called = _calls(function, overloads)
                faults += [f"{module}.{function.name} calls {c}" for c in called - allowed]
    return sorted(faults)


def test_hot_functions_call_only_hot_functions():
    """Nothing tagged [hot] leads out of the compiled loop: to Python, an allocation or a lock."""
    assert untagged_calls(SOURCES) == []
    hot = re.findall(r'"""\[hot\]', "".join(SOURCES.values()))
    assert len(hot) > 50


def test_a_call_that_is_not_hot_is_found():
    """The check itself: untagged, imported, numpy, method and class calls are faults."""
    kernel = """
def slow(x): "Not hot."
def fast(x):
    "[hot] Fine."
    return np.uint64(min(x, 1.0)) + _clock(x)
_clock = types.ExternalFunction("clock", 1)
"""
    lanes = """
from .kernel import fast, slow
def send(x):
    "[hot] Uncompiled it asks first, which is no fault; compiled it is one of two."
    return fast(x) if is_fast(x) else slow(x)
@overload(send)
def _send(x):
    return (lambda x: fast(x)) if is_fast(x) else (lambda x: slow(x))
"""
    loop = """
from .kernel import fast, slow
from .simd import relax
class Order: pass
def helper(x): "Not hot."
def run(x):
    "[hot] Calls six things that it must not."
    fast(x), relax(x), slow(x), helper(x), np.zeros(3), x.copy(), Order(x), print(x)
"""
    found = untagged_calls({"kernel": kernel, "lanes": lanes, "loop": loop})
    wrong = ("Order", "helper", "np.zeros", "print", "slow", "x.copy")
    assert found == ["lanes.send calls slow", *(f"loop.run calls {name}" for name in wrong)]


def _row(module: str) -> str:
    """The row of a module: the commands' bodies share one."""
    return "commands/*" if module.startswith("commands/") else module


def order_faults(order: list[str], sources: dict[str, str]) -> list[str]:
    """Modules that the order lacks, and imports that do not go up in it.

    The bodies of the commands may import each other.
    """
    place = {m: order.index(_row(m)) for m in sources if _row(m) in order}
    faults = [f"{m} is not in the order" for m in sources if m not in place]
    rows = {_row(m) for m in sources}
    faults += [f"{row} is in the order and does not exist" for row in order if row not in rows]
    for module, text in sources.items():
        for node in ast.walk(ast.parse(text)):
            if not isinstance(node, ast.ImportFrom) or not node.level:
                continue
            named = _imported(module, node)
            inside = [f"{named}/{alias.name}".lstrip("/") for alias in node.names]
            for source in [named] if named in sources else inside:
                found = source if source in sources else "__init__"
                if _row(module) == _row(found) == "commands/*":
                    continue
                if place.get(found, len(order)) >= place.get(module, -1):
                    faults.append(f"{module} imports {found}, which is not above it")
    return faults


def test_modules_import_only_from_modules_above_them():
    """DEVELOPERS.md's list of modules is complete, and imports go up in it.

    The package itself is left out: it imports what it offers when that is asked for.
    """
    order = re.findall(r"^\| `([\w/*]+)\.py` \|", DEVELOPERS, re.MULTILINE)
    sources = {m: text for m, text in SOURCES.items() if m != "__init__"}
    faults = order_faults(["__init__", *order], {**sources, "__init__": ""})
    assert faults == []


def test_an_import_that_goes_down_is_found():
    """The check itself: a later module, the same one, a missing one and one in a folder."""
    sources = {"units": "from .specs import A", "specs": "from . import units"}
    sources |= {"commands/serve": "from ..specs import A\nfrom ..cli import app", "cli": ""}
    sources["commands/steer"] = "from .serve import B"
    order = ["units", "specs", "commands/*", "cli"]
    faults = order_faults(order, sources)
    assert faults == [
        "units imports specs, which is not above it",
        "commands/serve imports cli, which is not above it",
    ]
    assert order_faults(["units"], {"units": "", "specs": ""}) == ["specs is not in the order"]
