/* One input through every decoder, with what must hold whatever the input is. */
#ifndef GSB_DECODERS_H
#define GSB_DECODERS_H

#include <stddef.h>
#include <stdint.h>

/* Aborts when something does not hold. */
void gsb_fuzz_one(const uint8_t *bytes, size_t size);

#endif
