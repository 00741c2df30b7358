/* The decoders under libFuzzer, which searches by coverage. README.md says how to run it. */
#include "decoders.h"

int LLVMFuzzerTestOneInput(const uint8_t *bytes, size_t size);

int LLVMFuzzerTestOneInput(const uint8_t *bytes, size_t size)
{
    gsb_fuzz_one(bytes, size);
    return 0;
}
