"""The benchmark of the device's round trip runs and compares what it says; no time is judged."""

from __future__ import annotations

import json
import subprocess
import sys

import pytest
from firmware_build import ROOT, compiler

from gatestep.errors import LinkError


def test_the_benchmark_measures_both_sides():
    """Each contestant has its trips, and each ratio is of paired rounds."""
    compiler()
    sys.path.insert(0, str(ROOT / "bench"))
    try:
        import contestants

        contestants.find_libzmq(None)
    except LinkError as missing:
        pytest.skip(f"needs a libzmq to link with: {missing}")
    finally:
        sys.path.pop(0)
    command = [sys.executable, str(ROOT / "bench" / "device_roundtrip.py"), "--json"]
    command += ["--rounds", "2", "--trips", "40", "--transport", "ipc"]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    found = json.loads(done.stdout)["transports"]["ipc"]
    names = {"device library", "device library, spinning", "libzmq to libzmq echo"}
    assert set(found["costs_us"]) == names
    assert all(one["trips"] == 80 for one in found["costs_us"].values())
    assert set(found["ratios"]) == names - {"libzmq to libzmq echo"}
    assert all(one["p50"]["median"] > 0 for one in found["ratios"].values())
