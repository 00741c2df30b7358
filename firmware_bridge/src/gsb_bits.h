/* A float32's bits, and float64's bits as a float32, without any double. */
#ifndef GSB_BITS_H
#define GSB_BITS_H

#include <stdint.h>
#include <string.h>

#define GSB_INFINITY_BITS 0x7F800000u
#define GSB_NAN_BITS 0x7FC00000u

static inline uint32_t gsb_bits_of(float value)
{
    uint32_t bits;
    memcpy(&bits, &value, sizeof bits);
    return bits;
}

static inline float gsb_float_of(uint32_t bits)
{
    float value;
    memcpy(&value, &bits, sizeof value);
    return value;
}

/* The float32 nearest to a float64, ties to even, as IEEE 754 has it. */
static inline float gsb_narrow(uint64_t bits)
{
    uint32_t sign = (uint32_t)(bits >> 63) << 31;
    int32_t exponent = (int32_t)((bits >> 52) & 0x7FFu) - 1023 + 127;
    uint64_t fraction = bits & 0xFFFFFFFFFFFFFu;
    uint32_t shift = 29, kept;
    uint64_t rest, half;

    if (exponent >= 255) {
        int nan = exponent == 1024 + 127 && fraction != 0;
        return gsb_float_of(sign | (nan ? GSB_NAN_BITS : GSB_INFINITY_BITS));
    }
    if (exponent <= 0) {
        if (exponent < -24)
            return gsb_float_of(sign);
        fraction |= (uint64_t)1 << 52;
        shift += (uint32_t)(1 - exponent);
        exponent = 0;
    }
    kept = (uint32_t)(fraction >> shift);
    half = (uint64_t)1 << (shift - 1);
    rest = fraction & ((half << 1) - 1);
    if (rest > half || (rest == half && (kept & 1u)))
        kept++;
    /* A carry out of the fraction goes into the exponent, which is what rounding up means. */
    return gsb_float_of(sign | (((uint32_t)exponent << 23) + kept));
}

/* A float32's bits as those of the same float64. */
static inline uint64_t gsb_widen(float value)
{
    uint32_t bits = gsb_bits_of(value);
    uint64_t sign = (uint64_t)(bits >> 31) << 63;
    int32_t exponent = (int32_t)((bits >> 23) & 0xFFu);
    uint64_t fraction = bits & 0x7FFFFFu;

    if (exponent == 255)
        return sign | ((uint64_t)0x7FF << 52) | (fraction << 29);
    if (exponent == 0) {
        if (fraction == 0)
            return sign;
        exponent = 1;
        while (!(fraction & 0x800000u)) {
            fraction <<= 1;
            exponent--;
        }
        fraction &= 0x7FFFFFu;
    }
    return sign | ((uint64_t)(uint32_t)(exponent - 127 + 1023) << 52) | (fraction << 29);
}

/* The whole part of a float64 from 0, held at the top of the range. `ok` is cleared for a
 * negative, infinite or NaN one. */
static inline uint64_t gsb_whole_part(uint64_t bits, int *ok)
{
    int32_t exponent = (int32_t)((bits >> 52) & 0x7FFu) - 1023;
    uint64_t fraction = (bits & 0xFFFFFFFFFFFFFu) | ((uint64_t)1 << 52);

    if ((bits << 1) == 0)
        return 0;
    if ((bits >> 63) || exponent == 1024) {
        *ok = 0;
        return 0;
    }
    if (exponent < 0)
        return 0;
    if (exponent > 63)
        return UINT64_MAX;
    return exponent <= 52 ? fraction >> (52 - exponent) : fraction << (exponent - 52);
}

#endif
