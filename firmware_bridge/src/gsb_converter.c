#include "gsb_converter.h"

#include "gsb_bits.h"
#include "gsb_error.h"
#include "gsb_guard.h"

#define BITS_MAX 24

static uint32_t top_code(const struct gsb_converter *converter)
{
    return ((uint32_t)1 << (converter->bits < BITS_MAX ? converter->bits : BITS_MAX)) - 1;
}

int gsb_converter_check(const struct gsb_converter *converter)
{
    if (converter->bits < 1 || converter->bits > BITS_MAX ||
        !gsb_is_finite(converter->per_code) || !gsb_is_finite(converter->code_at_zero) ||
        (converter->per_code <= 0.0f && converter->per_code >= 0.0f))
        return GSB_ERROR_ARGUMENT;
    return GSB_OK;
}

static float value_of(const struct gsb_converter *converter, uint32_t code)
{
    return ((float)code - converter->code_at_zero) * converter->per_code;
}

float gsb_adc_mv(const struct gsb_converter *adc, uint32_t code)
{
    if (gsb_converter_check(adc) || code == 0 || code >= top_code(adc))
        return gsb_float_of(GSB_NAN_BITS);
    return value_of(adc, code);
}

/* The code nearest to a place on the converter's scale, held within it. */
static uint32_t nearest(const struct gsb_converter *dac, float place)
{
    uint32_t top = top_code(dac);

    if (!(place > 0.0f))
        return 0;
    if (place >= (float)top)
        return top;
    return (uint32_t)(place + 0.5f);
}

uint32_t gsb_dac_code(const struct gsb_converter *dac, float i_pa)
{
    if (!gsb_is_finite(dac->code_at_zero))
        return top_code(dac) / 2;
    if (gsb_converter_check(dac) || !gsb_is_finite(i_pa))
        return nearest(dac, dac->code_at_zero);
    return nearest(dac, i_pa / dac->per_code + dac->code_at_zero);
}

float gsb_dac_pa(const struct gsb_converter *dac, uint32_t code)
{
    if (gsb_converter_check(dac))
        return 0.0f;
    return value_of(dac, code < top_code(dac) ? code : top_code(dac));
}

/* Whether what flows for a current is that current, to one code. */
static int given(const struct gsb_converter *dac, float i_pa)
{
    float off = gsb_dac_pa(dac, gsb_dac_code(dac, i_pa)) - i_pa;
    float code = dac->per_code < 0.0f ? -dac->per_code : dac->per_code;

    return off <= code && off >= -code;
}

int gsb_dac_check(const struct gsb_converter *dac, float current_pa)
{
    if (gsb_converter_check(dac) || !(current_pa > 0.0f) || !gsb_is_finite(current_pa) ||
        dac->code_at_zero < 0.0f || dac->code_at_zero > (float)top_code(dac) ||
        !given(dac, current_pa) || !given(dac, -current_pa))
        return GSB_ERROR_ARGUMENT;
    return GSB_OK;
}
