"""The device library builds anywhere: strict C99, C++, nothing from libc, no state of its own."""

from __future__ import annotations

import shlex
import shutil
import subprocess

import pytest
from firmware_build import BRIDGE, ROOT, SOURCES, STRICT, compiler, run, software_rig

PARTS = {
    "messages": ["gsb_message"],
    "ZMTP": ["gsb_zmtp", "gsb_link"],
    "serial framing": ["gsb_serial", "gsb_frame", "gsb_link"],
    "rig and guard": ["gsb_rig", "gsb_guard"],
    "device": ["gsb_device"],
    "converter": ["gsb_converter"],
}
MEMORY = {"memcpy", "memset", "memcmp"}


def _nm():
    found = shutil.which("nm")
    if not found:
        pytest.skip("needs nm (Debian: apt install binutils)")
    return found


@pytest.fixture(scope="module")
def objects(tmp_path_factory):
    """Each source compiled by itself for size, as a microcontroller's would be."""
    folder = tmp_path_factory.mktemp("objects")
    # No code that is relocated at run time: what is constant then stays in read-only sections.
    plain = ["-Os", "-fno-pic", "-fno-stack-protector", "-ffreestanding"]
    for source in SOURCES:
        target = folder / f"{source.stem}.o"
        run([*compiler(), *STRICT, *plain, "-I", BRIDGE / "include", "-c", source, "-o", target])
    return folder


def _symbols(folder):
    """(object, kind, name) of every symbol."""
    for path in sorted(folder.glob("*.o")):
        for line in run([_nm(), "-P", path]).stdout.splitlines():
            name, kind, *_ = line.split()
            yield path.stem, kind, name


def test_it_is_strict_c99_even_with_conversions_watched(tmp_path):
    """Every source, the template, the examples and the fuzzer compile without a warning."""
    more = [
        *(BRIDGE / "fuzz").glob("*.c"),
        *(BRIDGE / "vectors").glob("*.c"),
        *(BRIDGE / "examples" / "template").glob("*.c"),
        *(BRIDGE / "examples" / "posix_rig").glob("*.c"),
        ROOT / "tests" / "firmware_shim.c",
    ]
    assert len(more) > 6
    include = ["-I", BRIDGE / "include"]
    watched = ["-Wconversion", "-Wshadow", "-Wstrict-prototypes", "-Wcast-qual"]
    for source in SOURCES:
        run([*compiler(), *STRICT, *watched, *include, "-c", source, "-o", tmp_path / "x.o"])
    for source in more:
        run([*compiler(), *STRICT, *include, "-c", source, "-o", tmp_path / "x.o"])


def test_it_is_cpp_as_well(tmp_path):
    """The library and the template compile as C++, and a C++ program can call them."""
    found = shutil.which("g++") or shutil.which("c++")
    if not found:
        pytest.skip("needs a C++ compiler (Debian: apt install g++)")
    strict = [found, "-pedantic", "-Wall", "-Wextra", "-Werror", "-I", BRIDGE / "include"]
    template = sorted((BRIDGE / "examples" / "template").glob("*.c"))
    for source in [*SOURCES, *template, ROOT / "tests" / "firmware_shim.c"]:
        run([*strict, "-x", "c++", "-c", source, "-o", tmp_path / f"{source.stem}.o"])
    caller = tmp_path / "caller.cpp"
    caller.write_text(
        '#include "gatestep_bridge.h"\n'
        'int main() { return gsb_crc16(GSB_CRC_INITIAL, (const uint8_t *)"123456789", 9) '
        "!= 0x29B1; }\n"
    )
    c = [*compiler(), *STRICT, "-I", BRIDGE / "include", "-c", BRIDGE / "src" / "gsb_frame.c"]
    run([*c, "-o", tmp_path / "c.o"])
    run([*strict, caller, tmp_path / "c.o", "-o", tmp_path / "caller"])
    run([tmp_path / "caller"])


def test_each_header_stands_alone(tmp_path):
    """Any header can be included first, and twice."""
    for header in sorted((BRIDGE / "include").glob("*.h")):
        source = tmp_path / "alone.c"
        source.write_text(f'#include "{header.name}"\n#include "{header.name}"\nextern int none;\n')
        command = [*compiler(), *STRICT, "-I", BRIDGE / "include", "-c", source]
        run([*command, "-o", tmp_path / "x.o"])


def test_nothing_is_taken_from_libc_but_three_functions(objects):
    """What the objects lack is in other objects, or memcpy, memset and memcmp."""
    symbols = list(_symbols(objects))
    defined = {name for _, kind, name in symbols if kind in "TRDB"}
    missing = {name for _, kind, name in symbols if kind == "U"} - defined
    assert missing <= MEMORY


def test_there_is_no_state_of_its_own(objects):
    """No object has a writable variable, initialised or not."""
    writable = [(part, name) for part, kind, name in _symbols(objects) if kind in "DdBbC"]
    assert writable == []


def test_every_public_name_has_the_prefix(objects):
    """Nothing else can clash with a program's own names."""
    public = [name for _, kind, name in _symbols(objects) if kind in "TRDB"]
    assert public
    assert all(name.startswith("gsb_") for name in public)


def test_code_sizes_are_printed(objects, capsys):
    """Bytes of code and constants of each part; the whole is under 16 KiB on this machine."""
    size = shutil.which("size")
    if not size:
        pytest.skip("needs size (Debian: apt install binutils)")
    lines = run([size, *sorted(objects.glob("*.o"))]).stdout.splitlines()[1:]
    bytes_of = {line.split()[5].rsplit("/", 1)[-1][:-2]: int(line.split()[0]) for line in lines}
    with capsys.disabled():
        parts = ", ".join(f"{p} {sum(bytes_of[n] for n in ns)}" for p, ns in PARTS.items())
        print(f"\ndevice library, cc -Os, bytes: {parts}; all {sum(bytes_of.values())}")
    assert sum(bytes_of.values()) < 16_384


def test_the_makefile_builds_the_software_rig(tmp_path):
    """The README's own way, which must warn of nothing."""
    make = shutil.which("make")
    if not make:
        pytest.skip("needs make (Debian: apt install make)")
    copy = tmp_path / "firmware_bridge"
    shutil.copytree(BRIDGE, copy, ignore=shutil.ignore_patterns("cortex_m4f", "model"))
    folder = copy / "examples" / "posix_rig"
    run([make, "-s", f"CC={shlex.join(compiler())}"], cwd=folder)
    told = subprocess.run([folder / "posix_rig"], capture_output=True, text=True, check=False)
    assert told.returncode == 2
    assert "usage" in told.stderr


@pytest.mark.parametrize("given", ["nonsense=1", "seconds=x", "step=1,2", "seconds"])
def test_the_software_rig_refuses_what_it_does_not_know(given):
    """A key or value that cannot be is named, with exit status 2."""
    command = [software_rig(), "ipc:///nowhere", given]
    told = subprocess.run(command, capture_output=True, text=True, check=False)
    assert told.returncode == 2
    assert given.split("=")[0] in told.stderr
