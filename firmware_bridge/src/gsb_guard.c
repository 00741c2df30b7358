#include "gsb_guard.h"

#include "gsb_bits.h"

int gsb_is_finite(float value)
{
    return (gsb_bits_of(value) & GSB_INFINITY_BITS) != GSB_INFINITY_BITS;
}

/* A bound as it counts: 0 when it is none. */
static float bound(float value)
{
    return gsb_is_finite(value) && value > 0.0f ? value : 0.0f;
}

float gsb_limit_pa(float i_pa, float last_pa, float limit_pa, float step_pa, int *clipped)
{
    float limit = bound(limit_pa), step = bound(step_pa);
    float last = gsb_is_finite(last_pa) && last_pa <= limit && last_pa >= -limit ? last_pa : 0.0f;
    float low = last - step, high = last + step, allowed = i_pa;

    if (!gsb_is_finite(i_pa)) {
        *clipped = 1;
        return 0.0f;
    }
    if (low < -limit)
        low = -limit;
    if (high > limit)
        high = limit;
    if (allowed < low)
        allowed = low;
    if (allowed > high)
        allowed = high;
    if (allowed < i_pa || allowed > i_pa)
        *clipped = 1;
    return allowed;
}
