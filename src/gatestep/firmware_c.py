"""The C text of a model for the device: header, tables and step, and the self-test.

The step is straight-line code: each gate's column, power and place are literals. What
all models share is in ``firmware_bridge/model`` and comes along as it is.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable

import numpy as np

from .firmware import LOW_MV, SPAN_MV, DeviceTables, Singles
from .firmware_errors import walk_mv
from .firmware_twin import steps_compiled

SELFTEST_STEPS = 512
"""Ticks of the self-test: 32 goals of :func:`gatestep.firmware_errors.walk_mv`."""

# Instructions of gsm_model_step on a Cortex-M4F beyond those of an empty function, gcc 12.2
# -O2: linear in gates and conductances, fitted to counts under QEMU; a test holds it to new
# counts. Each sort of gates, where there are any, finds its row once.
_DYNAMIC, _PER_DYNAMIC, _INSTANT, _PER_INSTANT, _PER_CONDUCTANCE = 28.0, 25.0, 14.0, 13.0, 7.5


def digest(tables: DeviceTables) -> str:
    """SHA-256 of all that decides what the device computes from its parameters."""
    parts = hashlib.sha256(f"{tables.interval_us!r} {tables.rows} {LOW_MV} {SPAN_MV}".encode())
    for array in (tables.counts, tables.state, tables.power, tables.table):
        parts.update(array.tobytes())
    return parts.hexdigest()


def instructions(tables: DeviceTables) -> int:
    """Estimated instructions of one step on a Cortex-M4F, when no tick is missing."""
    count = _PER_CONDUCTANCE * tables.counts.size
    if tables.dynamic:
        count += _DYNAMIC + _PER_DYNAMIC * tables.dynamic
    if tables.instant:
        count += _INSTANT + _PER_INSTANT * tables.instant
    return round(count)


def code_bytes(tables: DeviceTables) -> int:
    """Estimated bytes of code of ``model.c`` on a Cortex-M4F, fitted like the instructions."""
    size = 80 + (400 + 210 * tables.dynamic if tables.dynamic else 0)
    return size + (90 + 150 * tables.instant if tables.instant else 0)


def ram_bytes(tables: DeviceTables) -> int:
    """RAM of gates and parameters, bytes."""
    gates = max(tables.dynamic + tables.instant, 1) + max(tables.dynamic, 1) + 1
    return 4 * (gates + 2 * tables.counts.size)


def header(tables: DeviceTables, name: str) -> str:
    """``model.h``: sizes, names and functions."""
    conductances = tables.spec.conductance
    order = ", ".join(f"{k} {c.name}" for k, c in enumerate(conductances))
    return _HEADER.format(
        title=_comment(tables.spec.title),
        source=_comment(tables.spec.source),
        table_bytes=tables.table_bytes,
        code_bytes=code_bytes(tables),
        ram_bytes=ram_bytes(tables),
        instructions=instructions(tables),
        name=json.dumps(name),
        digest=digest(tables),
        interval=_number(tables.interval_us),
        rows=tables.rows,
        low=_number(LOW_MV),
        high=_number(LOW_MV + SPAN_MV),
        dynamic=tables.dynamic,
        instant=tables.instant,
        conductances=len(conductances),
        order=order,
        gates=max(tables.dynamic + tables.instant, 1),
        rest=max(tables.dynamic, 1),
    )


def source(tables: DeviceTables) -> str:
    """``model.c``: the table, the usual parameters, and the step."""
    names = ", ".join(json.dumps(c.name) for c in tables.spec.conductance)
    functions = [_settle(tables), _current(tables), _step(tables)]
    if tables.dynamic:
        functions[2:2] = [_tick(tables), _LEAP]
    return _SOURCE.format(
        stride=2 * tables.dynamic + tables.instant,
        table=_table(tables),
        names=names,
        gmax=", ".join(map(_number, tables.gmax_ns)),
        reversal=", ".join(map(_number, tables.reversal_mv)),
        functions="\n".join(functions),
    )


def selftest(tables: DeviceTables) -> str:
    """``selftest.c``: voltages in, currents out as bits, and the function that compares.

    Every 61st voltage is off the grid, and every 37th step crosses several
    ticks, so that those paths are tested as well.
    """
    v_mv = walk_mv(SELFTEST_STEPS)
    v_mv[61::61] = np.resize(np.array([-170.0, 120.0, -1e6, 1e6]), v_mv[61::61].size)
    ticks = np.ones(v_mv.size, dtype=np.int64)
    ticks[37::37] = 2 + np.arange(ticks[37::37].size)
    i_pa = steps_compiled(tables, v_mv, ticks).i_pa
    return _SELFTEST.format(
        steps=v_mv.size, v_mv=_bits(v_mv), i_pa=_bits(i_pa), ticks=_wrapped(map(str, ticks), 24)
    )


def _comment(text: str) -> str:
    """Text that cannot end a comment or begin another, join lines or be a trigraph."""
    for found, instead in (("*/", "* /"), ("/*", "/ *"), ("\\", "/"), ("??", "? ?")):
        text = text.replace(found, instead)
    return " ".join(text.split())


def _number(value: float) -> str:
    """A float32 literal; nine digits give back the same bits."""
    return f"{np.float32(value):.8e}f"


def _wrapped(items: Iterable[str], per_line: int) -> str:
    every = list(items)
    lines = (every[k : k + per_line] for k in range(0, len(every), per_line))
    return ",\n    ".join(", ".join(line) for line in lines)


def _bits(values: Singles) -> str:
    return _wrapped((f"0x{int(bits):08x}u" for bits in values.view(np.uint32)), 6)


def _table(tables: DeviceTables) -> str:
    if tables.table.size == 0:
        return ""  # leaks alone: no gate, no table
    last = np.nextafter(np.float32(tables.rows - 1), np.float32(0.0))
    return _TABLE.format(
        numbers=_wrapped((f"{value:.8e}f" for value in tables.table.ravel().tolist()), 6),
        places=", ".join(map(_number, (LOW_MV, tables.rows_per_mv, float(last)))),
    )


def _between(column: int) -> str:
    return f"gsm_between(low + {column}, low + GSM_STRIDE + {column}, at.f)"


def _settle(tables: DeviceTables) -> str:
    lines = []
    for k in range(tables.dynamic):
        lines += [f"gates->x[{k}] = {_between(2 * k)};", f"gates->rest[{k}] = 0.0f;"]
    body = _at_row("v_mv", lines + _followed(tables))
    head = "void gsm_model_settle(struct gsm_gates *gates, float v_mv)"
    return _function(head, [*body, "gates->v_mv = v_mv;"])


def _followed(tables: DeviceTables) -> list[str]:
    """Statements that put the instantaneous gates at their steady state."""
    first, column = tables.dynamic, 2 * tables.dynamic
    return [f"gates->x[{first + k}] = {_between(column + k)};" for k in range(tables.instant)]


def _at_row(v_mv: str, lines: list[str]) -> list[str]:
    """Statements with ``at`` and ``low`` for a voltage before them, if there are any."""
    if not lines:
        return []
    head = f"const gsm_place at = gsm_place_of({v_mv});"
    return [head, "const float *low = gsm_table + at.row * GSM_STRIDE;", "", *lines]


def _tick(tables: DeviceTables) -> str:
    lines = []
    for k in range(tables.dynamic):
        lines += [f"gsm_cross(&gates->x[{k}], &gates->rest[{k}],"]
        lines += [f"          {_between(2 * k)},", f"          {_between(2 * k + 1)});"]
    head = "static void gsm_tick(struct gsm_gates *gates, float v_mv)"
    return _function(head, _at_row("v_mv", lines))


def _current(tables: DeviceTables) -> str:
    lines = ["float g, total = 0.0f;", ""]
    gate = 0
    for c, count in enumerate(tables.counts):
        lines += [f"g = with->gmax_ns[{c}]; /* {tables.spec.conductance[c].name} */"]
        for _ in range(count):
            x, n = f"gates->x[{tables.state[gate]}]", tables.power[gate]
            lines += [f"g = g * gsm_power({x}, {n}u); /* {tables.gates[gate]} */"]
            gate += 1
        lines += [f"total = total + g * (with->reversal_mv[{c}] - v_mv);"]
    head = (
        "float gsm_model_current(const struct gsm_gates *gates,\n"
        "                        const struct gsm_parameters *with, float v_mv)"
    )
    unused = [] if tables.gates else ["(void)gates;"]
    return _function(head, [*lines[:2], *unused, *lines[2:], "return total;"])


def _step(tables: DeviceTables) -> str:
    head = (
        "float gsm_model_step(struct gsm_gates *gates, const struct gsm_parameters *with,"
        " float v_mv,\n                     uint32_t ticks)"
    )
    crossed = _CROSSED if tables.dynamic else ["(void)ticks;"]
    followed = _at_row("v_mv", _followed(tables))
    if followed:
        followed = ["{", *(f"    {line}".rstrip() for line in followed), "}"]
    ended = ["gates->v_mv = v_mv;", "return gsm_model_current(gates, with, v_mv);"]
    return _function(head, [*crossed, *followed, *ended])


_CROSSED = [
    "const float middle_mv = 0.5f * (gates->v_mv + v_mv);",
    "",
    "if (ticks == 1u) {",
    "    gsm_tick(gates, middle_mv);",
    "} else {",
    "    gsm_leap(gates, middle_mv, ticks);",
    "}",
]


_LEAP = """\
/* A loop, so that what is seldom needed stands there once and not for each gate. */
static void gsm_leap(struct gsm_gates *gates, float v_mv, uint32_t ticks)
{
    const gsm_place at = gsm_place_of(v_mv);
    const float *low = gsm_table + at.row * GSM_STRIDE;
    uint32_t k;

    for (k = 0u; k < GSM_DYNAMIC; k++, low += 2) {
        const float inf = gsm_between(low, low + GSM_STRIDE, at.f);
        const float gain = gsm_between(low + 1, low + GSM_STRIDE + 1, at.f);

        gsm_cross(&gates->x[k], &gates->rest[k], inf, gsm_over(gain, ticks));
    }
}
"""


def _function(head: str, lines: list[str]) -> str:
    body = "\n".join(f"    {line}".rstrip() for line in lines)
    return f"{head}\n{{\n{body}\n}}\n"


_HEADER = """\
/* {title}
 * {source}
 *
 * Made by `gatestep firmware`; make it anew rather than edit it.
 *
 * Flash   {table_bytes} bytes of tables, about {code_bytes} of code on a Cortex-M4F (estimated)
 * RAM     {ram_bytes} bytes of gates and parameters
 * Step    about {instructions} instructions on a Cortex-M4F (estimated)
 *
 * What is estimated is for gcc at -O2; README.md says how.
 */
#ifndef GSM_MODEL_H
#define GSM_MODEL_H

#include <stdint.h>

#ifdef __cplusplus
extern "C" {{
#endif

#define GSM_MODEL_NAME {name}
/* SHA-256 of tables and layout, whatever the parameters are. */
#define GSM_MODEL_SHA256 "{digest}"
/* The tick that the tables are for, us. Another needs another build. */
#define GSM_INTERVAL_US {interval}
/* The table's grid, mV: a voltage beyond counts as its nearest end. */
#define GSM_LOW_MV ({low})
#define GSM_HIGH_MV {high}
#define GSM_ROWS {rows}u
#define GSM_DYNAMIC {dynamic}u
#define GSM_INSTANT {instant}u
#define GSM_CONDUCTANCES {conductances}u

/* What may change while the model runs, in this order: {order}. */
struct gsm_parameters {{
    float gmax_ns[{conductances}];     /* largest conductance, nS; may be negative */
    float reversal_mv[{conductances}]; /* reversal potential, mV */
}};

/* The gates of one cell. */
struct gsm_gates {{
    float x[{gates}];    /* from 0 to 1; dynamic gates first */
    float rest[{rest}]; /* what the last addition rounded away */
    float v_mv;    /* voltage of the last step */
}};

/* The parameters of the model file, and the conductances' names. */
extern const struct gsm_parameters gsm_usual;
extern const char *const gsm_conductance_names[{conductances}];

/* Put every gate at its steady state for a voltage, mV. */
void gsm_model_settle(struct gsm_gates *gates, float v_mv);

/* The current that the model injects now, pA, not limited in any way. */
float gsm_model_current(const struct gsm_gates *gates,
                        const struct gsm_parameters *with, float v_mv);

/* Carry the gates over so many ticks (1 unless some were missed; 0 leaves them) on the mean
 * of the voltages at their two ends; then as gsm_model_current. Any voltage may be given,
 * NaN too: the gates stay within 0 and 1, the current may then be no number. */
float gsm_model_step(struct gsm_gates *gates, const struct gsm_parameters *with, float v_mv,
                     uint32_t ticks);

/* 0 when this build computes every bit as it should; else the number, from 1, of the first
 * step of the self-test that it does not. */
uint32_t gsm_selftest(void);

#ifdef __cplusplus
}}
#endif

#endif
"""

_SOURCE = """\
/* Tables and step; see model.h. Made by `gatestep firmware`; make it anew rather than edit it. */
#include "model.h"

#include "gsm_step.h"

#define GSM_STRIDE {stride}u

{table}const struct gsm_parameters gsm_usual = {{
    {{{gmax}}},
    {{{reversal}}}}};

const char *const gsm_conductance_names[GSM_CONDUCTANCES] = {{{names}}};

{functions}"""

_TABLE = """\
/* A row: steady state and gain of each dynamic gate, then steady states of the others. */
static const float gsm_table[GSM_ROWS * GSM_STRIDE] = {{
    {numbers}}};

static inline gsm_place gsm_place_of(float v_mv)
{{
    return gsm_locate(v_mv, {places});
}}

"""

_SELFTEST = """\
/* Self-test of a build: voltages in, currents out, as the bits of float32 numbers.
 * Made by `gatestep firmware`; make it anew rather than edit it. */
#include "model.h"

#include <string.h>

#define GSM_STEPS {steps}u

static const uint32_t gsm_v_mv[GSM_STEPS] = {{
    {v_mv}}};

static const uint32_t gsm_i_pa[GSM_STEPS] = {{
    {i_pa}}};

static const uint8_t gsm_ticks[GSM_STEPS] = {{
    {ticks}}};

uint32_t gsm_selftest(void)
{{
    struct gsm_gates gates;
    float v_mv, i_pa;
    uint32_t step, bits;

    for (step = 0u; step < GSM_STEPS; step++) {{
        memcpy(&v_mv, &gsm_v_mv[step], sizeof v_mv);
        if (step == 0u) {{
            gsm_model_settle(&gates, v_mv);
            i_pa = gsm_model_current(&gates, &gsm_usual, v_mv);
        }} else {{
            i_pa = gsm_model_step(&gates, &gsm_usual, v_mv, gsm_ticks[step]);
        }}
        memcpy(&bits, &i_pa, sizeof bits);
        if (bits != gsm_i_pa[step]) {{
            return step + 1u;
        }}
    }}
    return 0u;
}}
"""
