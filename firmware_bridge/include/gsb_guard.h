/* The last thing before a converter: what it returns is finite and within the limits. */
#ifndef GSB_GUARD_H
#define GSB_GUARD_H

#ifdef __cplusplus
extern "C" {
#endif

/* 1 when a number is neither NaN nor infinite; by its bits, so no compiler option that
 * assumes finite numbers can take the check away. */
int gsb_is_finite(float value);

/* The current that may flow, pA: within limit_pa of 0 and within step_pa of last_pa.
 *
 * i_pa      asked for, pA; NaN or infinite gives 0
 * last_pa   flowing now, pA; NaN or beyond the limit counts as 0
 * limit_pa  largest magnitude, pA; NaN, infinite or below 0 counts as 0
 * step_pa   largest change, pA; NaN, infinite or below 0 counts as 0
 * clipped   set to 1 when the result differs from i_pa, else left alone
 */
float gsb_limit_pa(float i_pa, float last_pa, float limit_pa, float step_pa, int *clipped);

#ifdef __cplusplus
}
#endif

#endif
