/* The arithmetic of a model's step on the device: float32, no libm, no division, no state.
 *
 * A generated model.c calls these in a fixed order. Every operation is rounded once, so a
 * PC and a Cortex-M4F give the same bits; compile with -ffp-contract=off and without
 * -ffast-math, and run the self-test, which fails if either was forgotten.
 *
 * Units: mV, nS, pA. Gates are from 0 to 1 and stay there, whatever the voltage.
 */
#ifndef GSM_STEP_H
#define GSM_STEP_H

#include <float.h>
#include <stdint.h>
#include <string.h>

#if defined(FLT_EVAL_METHOD) && FLT_EVAL_METHOD != 0
#error "float must be computed as float: on 32-bit x86 compile with -msse2 -mfpmath=sse"
#endif
#ifdef __FAST_MATH__
#error "compile without -ffast-math: it drops the checks for NaN"
#endif

/* Where a voltage lies on the grid. */
typedef struct {
    uint32_t row; /* the row below it, at most rows - 2 */
    float f;      /* from there to the next row, 0 up to but not with 1 */
} gsm_place;

/* Place of a voltage. Off the grid counts as its nearest end, NaN as the lowest.
 * last: the largest float below rows - 1. */
static inline gsm_place gsm_locate(float v_mv, float low_mv, float rows_per_mv, float last)
{
    gsm_place at;
    float place = (v_mv - low_mv) * rows_per_mv;

    /* Written so that NaN fails the first test. */
    place = place > 0.0f ? place : 0.0f;
    place = place < last ? place : last;
    at.row = (uint32_t)place;
    at.f = place - (float)at.row;
    return at;
}

/* A table's value between two rows. */
static inline float gsm_between(const float *low, const float *high, float f)
{
    return *low + f * (*high - *low);
}

/* Gain over several ticks, from that of one: 1 - (1 - gain)^ticks, by doubling. */
static inline float gsm_over(float gain, uint32_t ticks)
{
    float total = 0.0f;

    while (ticks != 0u) {
        if ((ticks & 1u) != 0u) {
            total = total + gain * (1.0f - total);
            total = total < 1.0f ? total : 1.0f;
        }
        gain = gain * (2.0f - gain);
        gain = gain < 1.0f ? gain : 1.0f;
        ticks >>= 1;
    }
    return total;
}

/* Carry one gate towards inf by gain. rest holds what the last addition rounded away,
 * without which a slow gate would stand still short of its steady state. */
static inline void gsm_cross(float *x, float *rest, float inf, float gain)
{
    const float old = *x;
    const float change = (inf - old) * gain - *rest;
    float now = old + change;
    float lost = (now - old) - change;
    uint32_t bits;

    memcpy(&bits, &now, sizeof bits);
    /* One test for all that is not above 0 and up to 1: the sign makes bits large, and
     * 0 wraps round. */
    if (bits - 1u >= 0x3f800000u) {
        now = now > 1.0f ? 1.0f : 0.0f;
        lost = 0.0f;
    }
    *x = now;
    *rest = lost;
}

/* y^n for n from 1 to 15. With n a constant only its multiplications remain. */
static inline float gsm_power(float y, unsigned n)
{
    const float square = y * y;
    const float fourth = square * square;
    float result = (n & 1u) != 0u ? y : 1.0f;

    if ((n & 2u) != 0u) {
        result = result * square;
    }
    if ((n & 4u) != 0u) {
        result = result * fourth;
    }
    if ((n & 8u) != 0u) {
        result = result * (fourth * fourth);
    }
    return result;
}

#endif
