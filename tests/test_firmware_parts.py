"""Guard, converters and configuration of the device library, each by its own law."""

from __future__ import annotations

import ctypes
import math

import numpy as np
import pytest
from firmware_build import CELLS_MAX, Config, Limits, library
from hypothesis import given
from hypothesis import strategies as st

from gatestep.guard import limited

ARGUMENT = -1
_ANY = st.floats(width=32)
_POSITIVE = st.floats(width=32, min_value=2.0**-60, max_value=2.0**60)


class Converter(ctypes.Structure):
    """``struct gsb_converter``."""

    _fields_ = (
        ("bits", ctypes.c_uint32),
        ("per_code", ctypes.c_float),
        ("code_at_zero", ctypes.c_float),
    )


def _f(value):
    return ctypes.c_float(value)


def _limit(i_pa, last_pa, limit_pa, step_pa):
    clipped = ctypes.c_int(0)
    got = library().gsb_limit_pa(
        _f(i_pa), _f(last_pa), _f(limit_pa), _f(step_pa), ctypes.byref(clipped)
    )
    return got, bool(clipped.value)


@given(_ANY, st.floats(-1, 1, width=32), _POSITIVE, _POSITIVE)
def test_the_guard_is_the_servers(i_pa, share, limit_pa, step_pa):
    """For every current: what gatestep.guard allows, to float32's rounding."""
    last_pa = float(np.float32(share) * np.float32(limit_pa))
    got, clipped = _limit(i_pa, last_pa, limit_pa, step_pa)
    want, theirs = limited(i_pa, last_pa, limit_pa, step_pa)
    assert got == pytest.approx(want, rel=1e-6, abs=1e-6 * max(abs(last_pa), step_pa))
    assert clipped == theirs or abs(got - i_pa) <= 1e-6 * max(abs(last_pa), step_pa)


@given(_ANY, _ANY, _ANY, _ANY)
def test_the_guard_holds_whatever_goes_in(i_pa, last_pa, limit_pa, step_pa):
    """Finite and within the limit always; 0 pA where the limit is no limit."""
    got, clipped = _limit(i_pa, last_pa, limit_pa, step_pa)
    assert math.isfinite(got)
    bound = limit_pa if math.isfinite(limit_pa) and limit_pa > 0 else 0.0
    assert abs(got) <= bound
    assert clipped or got == i_pa


@st.composite
def _converters(draw):
    bits = draw(st.integers(1, 24))
    per_code = draw(st.sampled_from([1.0, -1.0])) * draw(st.floats(2.0**-10, 2.0**6, width=32))
    zero = draw(st.floats(0, float(2**bits - 1), width=32))
    return Converter(bits, per_code, zero)


@given(_converters(), st.integers(0, 2**32 - 1))
def test_adc_codes_are_voltages_and_its_ends_are_none(adc, code):
    """Linear inside the range; at either end and beyond, the voltage is not known: NaN."""
    got = library().gsb_adc_mv(ctypes.byref(adc), ctypes.c_uint32(code))
    if 0 < code < 2**adc.bits - 1:
        scale = max(code, adc.code_at_zero) * abs(adc.per_code)
        want = (code - adc.code_at_zero) * adc.per_code
        assert got == pytest.approx(want, rel=1e-6, abs=1e-6 * scale)
    else:
        assert math.isnan(got)


@given(_converters(), _ANY)
def test_dac_codes_are_the_nearest_in_range(dac, i_pa):
    """Within half a code of the current where the range allows, at its end where not."""
    c = library()
    code = c.gsb_dac_code(ctypes.byref(dac), _f(i_pa))
    top = 2**dac.bits - 1
    assert 0 <= code <= top
    wanted = i_pa / dac.per_code + dac.code_at_zero if math.isfinite(i_pa) else dac.code_at_zero
    slack = 0.5 + 1e-6 * (abs(wanted) + dac.code_at_zero)
    assert abs(code - min(max(wanted, 0.0), top)) <= slack
    flows = c.gsb_dac_pa(ctypes.byref(dac), ctypes.c_uint32(code))
    scale = max(code, dac.code_at_zero) * abs(dac.per_code)
    assert flows == pytest.approx(
        (code - dac.code_at_zero) * dac.per_code, rel=1e-6, abs=1e-6 * scale
    )


@pytest.mark.parametrize(
    ("wrong", "nearest_to_zero"),
    [
        ((0, 1.0, 0.0), 0),
        ((25, 1.0, 0.0), 0),
        ((25, 1.0, 2048.0), 2048),
        ((12, 0.0, 0.0), 0),
        ((12, 0.0, 2048.0), 2048),
        ((12, math.nan, 2047.75), 2048),
        ((12, math.inf, 5000.0), 4095),
        ((12, 1.0, math.nan), 2047),
        ((12, 1.0, math.inf), 2047),
    ],
)
def test_converters_that_cannot_be_are_refused(wrong, nearest_to_zero):
    """An error; and used all the same, no voltage and the code nearest to 0 pA."""
    c, converter = library(), Converter(*wrong)
    assert c.gsb_converter_check(ctypes.byref(converter)) == ARGUMENT
    assert math.isnan(c.gsb_adc_mv(ctypes.byref(converter), ctypes.c_uint32(5)))
    for i_pa in (5.0, -1e6, math.nan):
        assert c.gsb_dac_code(ctypes.byref(converter), _f(i_pa)) == nearest_to_zero
    assert c.gsb_dac_check(ctypes.byref(converter), _f(1e-3)) == ARGUMENT
    assert c.gsb_dac_pa(ctypes.byref(converter), ctypes.c_uint32(5)) == 0.0
    sound = Converter(12, 1.0, 2048.0)
    assert c.gsb_converter_check(ctypes.byref(sound)) == 0


@given(_converters(), st.floats(2.0**-8, 2.0**30, width=32))
def test_a_dac_is_taken_if_it_can_give_every_current_of_the_limit(dac, current_pa):
    """Refused where a current within the limit would be cut by the range; else within a code.

    By the range in float64; a case at its very edge, to a code and float32's rounding, is
    left open.
    """
    c = library()
    ends = [(code - dac.code_at_zero) * dac.per_code for code in (0, 2**dac.bits - 1)]
    spare = min(max(ends), -min(ends)) - current_pa
    taken = c.gsb_dac_check(ctypes.byref(dac), _f(current_pa)) == 0
    edge = abs(dac.per_code) + 1e-6 * (current_pa + max(map(abs, ends)))
    if abs(spare) > edge:
        assert taken == (spare > 0)
    if taken:
        for i_pa in (current_pa, -current_pa, current_pa / 3):
            code = c.gsb_dac_code(ctypes.byref(dac), _f(i_pa))
            assert abs(c.gsb_dac_pa(ctypes.byref(dac), code) - i_pa) <= edge


@pytest.mark.parametrize(
    ("dac", "current_pa"),
    [
        ((12, 1.0, -1.0), 1.0),
        ((12, 1.0, 4096.0), 1.0),
        ((12, 1.0, 0.0), 500.0),
        ((12, 1.0, 2048.0), 2050.0),
        ((12, -1.0, 2048.0), 3000.0),
        ((12, 1.0, 2048.0), 0.0),
        ((12, 1.0, 2048.0), -5.0),
        ((12, 1.0, 2048.0), math.nan),
        ((12, 1.0, 2048.0), math.inf),
    ],
)
def test_a_dac_that_cannot_give_the_limit_is_refused(dac, current_pa):
    """No code for 0 pA, one sign only, too narrow, or a limit that is none."""
    c = library()
    assert c.gsb_dac_check(ctypes.byref(Converter(*dac)), _f(current_pa)) == ARGUMENT
    for per_code in (1.0, -1.0):
        sound = Converter(12, per_code, 2048.0)
        assert c.gsb_dac_check(ctypes.byref(sound), _f(2000.0)) == 0


def _config(**changes):
    config = Config(2, 50.0, 0, 1000, 0)
    for k in range(2):
        config.cell[k] = Limits(1000.0, 1e5, -120.0, 90.0)
    for key, value in changes.items():
        if key in ("cells", "interval_us", "silence_us"):
            setattr(config, key, value)
        else:
            setattr(config.cell[1], key, value)
    return config


def _init(config, count=8, taken=True):
    c = library()
    rig = ctypes.create_string_buffer(c.shim_size(6))
    memory = ctypes.create_string_buffer(64 * c.shim_size(3))
    given_memory = memory if taken else None
    outcome = c.gsb_rig_init(ctypes.byref(rig), ctypes.byref(config), given_memory, count)
    return c, rig, memory, outcome


def test_a_sound_configuration_is_taken():
    """So that the refusals below are for the one thing changed."""
    assert _init(_config())[3] == 0


@pytest.mark.parametrize(
    "wrong",
    [
        {"cells": 0},
        {"cells": CELLS_MAX + 1},
        {"interval_us": 0.5},
        {"interval_us": 2e6},
        {"interval_us": math.nan},
        {"silence_us": 0},
        {"silence_us": 20_000_000},
        *(
            {key: value}
            for key in ("current_pa", "slew_pa_per_ms")
            for value in (0.0, -1.0, math.inf, math.nan)
        ),
        {"window_low_mv": 90.0},
        {"window_low_mv": math.nan},
        {"window_high_mv": math.inf},
    ],
)
def test_a_configuration_that_cannot_be_never_runs(wrong):
    """Refused; and a rig that was told to run all the same stays idle at 0 pA."""
    c, rig, memory, outcome = _init(_config(**wrong))
    assert memory
    assert outcome == ARGUMENT
    place = ctypes.byref(rig)
    for call in (c.gsb_rig_greet, c.gsb_rig_run):
        assert call(place, ctypes.c_uint64(10)) == ARGUMENT
    assert c.gsb_rig_state(place) == 0
    c.gsb_rig_current_pa.restype = ctypes.POINTER(ctypes.c_float)
    assert list(c.gsb_rig_current_pa(place)[:CELLS_MAX]) == [0.0] * CELLS_MAX


@pytest.mark.parametrize("count", [0, 1, 3, 12])
def test_memory_for_samples_is_a_power_of_two(count):
    """Else refused, as is none at all."""
    assert _init(_config(), count)[3] == ARGUMENT
    assert _init(_config(), taken=False)[3] == ARGUMENT


def test_states_have_names():
    """Those of the diagram in gsb_rig.h, and a mark for anything else."""
    c = library()
    c.gsb_state_name.restype = ctypes.c_char_p
    names = [c.gsb_state_name(k) for k in range(5)]
    assert names == [b"idle", b"greeting", b"running", b"silent", b"?"]


def test_a_linked_buffer_that_is_too_small_is_refused():
    """Room below the least that gsb_link.h names, no cells or too many: an error."""
    c = library()
    link = ctypes.create_string_buffer(c.shim_size(1))
    memory = ctypes.create_string_buffer(512)
    kind = ctypes.addressof(ctypes.c_char.in_dll(c, "gsb_zmtp"))

    def init(cells=1, in_room=253, out_room=256):
        sizes = ctypes.c_size_t(in_room), ctypes.c_size_t(out_room)
        return c.gsb_link_init(
            link, ctypes.c_void_p(kind), cells, memory, sizes[0], memory, sizes[1]
        )

    assert init() == 0
    wrong = [init(cells=0), init(cells=9), init(in_room=252), init(out_room=255)]
    assert wrong == [ARGUMENT] * 4
