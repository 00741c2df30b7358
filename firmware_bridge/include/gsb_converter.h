/* Converter codes to mV and pA: the one place where gain, offset and bits are known.
 *
 * Measure both by calibration (README.md): the gain holds amplifier, divider and
 * reference together.
 */
#ifndef GSB_CONVERTER_H
#define GSB_CONVERTER_H

#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

/* value = (code - code_at_zero) * per_code, in mV for an ADC and pA for a DAC. */
struct gsb_converter {
    uint32_t bits;      /* 1 to 24; codes go from 0 to 2**bits - 1 */
    float per_code;     /* mV or pA a code; negative for an inverting stage; never 0 */
    float code_at_zero; /* code that stands for 0 mV or 0 pA; need not be whole */
};

/* GSB_OK, or GSB_ERROR_ARGUMENT for bits, gain or offset that cannot be. */
int gsb_converter_check(const struct gsb_converter *converter);

/* Whether a DAC can give every current up to current_pa, of both signs, within one code, and
 * has a code for 0 pA: GSB_OK or GSB_ERROR_ARGUMENT. Ask before anything is connected, with
 * the limit of the cell: a current beyond the converter's range would be cut in silence, and
 * samples would name an answer of which less flowed. */
int gsb_dac_check(const struct gsb_converter *dac, float current_pa);

/* An ADC's code in mV. A code at either end of the range means that the voltage is not
 * known: NaN, so that the rig goes to 0 pA. A code beyond the range likewise. */
float gsb_adc_mv(const struct gsb_converter *adc, uint32_t code);

/* The DAC's code nearest to a current, held within its range. NaN or infinite, or a
 * converter that gsb_converter_check refuses: the code nearest to 0 pA; the middle one when
 * even code_at_zero is no number. */
uint32_t gsb_dac_code(const struct gsb_converter *dac, float i_pa);

/* The current that a code gives, pA: what truly flows after rounding and saturation. */
float gsb_dac_pa(const struct gsb_converter *dac, uint32_t code);

#ifdef __cplusplus
}
#endif

#endif
