/* The supervised device under damaged and reordered frames, for the sanitizers.
 *
 * Arguments: streams, seed. Prints how often it was armed and what came of the rest; ends
 * with 1 when a current is out of bounds or a gate out of its range.
 */
#include <stdio.h>
#include <stdlib.h>

#include "firmware_model_shim.c"

#define LIMIT_PA 800.0f
#define STREAM_MAX 200u

static uint64_t state;

/* xorshift64 (Marsaglia 2003, J. Stat. Soft. 8:14). */
static uint32_t draw(uint32_t below)
{
    state ^= state << 13;
    state ^= state >> 7;
    state ^= state << 17;
    return (uint32_t)(state >> 33) % below;
}

/* A frame of any kind, most often one that a host would send. */
static uint32_t frame(uint8_t *to, uint32_t room)
{
    static const uint8_t kinds[] = {GSB_KIND_WELCOME, GSB_KIND_WELCOME, GSB_KIND_BYE,
                                    GSB_KIND_PARAMETER, GSB_KIND_ARM, GSB_KIND_ARM,
                                    GSB_KIND_DISARM, GSB_KIND_ALIVE, GSB_KIND_ASK, 0x77};
    uint8_t payload[GSB_PAYLOAD_MAX];
    struct gsb_writer out = {0, sizeof payload, 0, 0};
    const uint8_t kind = kinds[draw(sizeof kinds)];
    float value;
    uint32_t bits = draw(0xffffffffu);
    int size;

    out.bytes = payload;
    if (kind == GSB_KIND_WELCOME) {
        gsb_write_array(&out, 3u);
        gsb_write_whole(&out, 1u);
        gsb_write_whole(&out, 0u);
        gsb_write_whole(&out, 1u);
    } else {
        memcpy(&value, &bits, sizeof value);
        gsb_write_array(&out, draw(5u));
        gsb_write_whole(&out, draw(1000u));
        gsb_write_whole(&out, draw(8u));
        gsb_write_float(&out, draw(2u) ? value : (float)draw(4000u));
    }
    size = gsb_frame_encode(kind, payload, out.at, to, room);
    return size > 0 ? (uint32_t)size : 0u;
}

static uint32_t stream(uint8_t *bytes)
{
    uint32_t size = 0u, damages;

    do {
        size += frame(bytes + size, STREAM_MAX - size);
    } while (draw(3u) != 0u);
    for (damages = draw(2u) * draw(4u); size > 0u && damages > 0u; damages--) {
        bytes[draw(size)] ^= (uint8_t)(1u << draw(8u));
    }
    return size > 0u && draw(8u) == 0u ? draw(size) : size;
}

static float voltage(void)
{
    static const uint32_t odd[] = {0x7f800000u, 0xff800000u, 0x7fc00000u, 0x7f7fffffu, 1u};
    float v_mv;

    if (draw(200u) != 0u) {
        return -100.0f + 0.01f * (float)draw(16000u);
    }
    memcpy(&v_mv, &odd[draw(5u)], sizeof v_mv);
    return v_mv;
}

int main(int count, char **arguments)
{
    uint8_t bytes[STREAM_MAX], sent[4096];
    uint32_t streams = (uint32_t)atol(count > 1 ? arguments[1] : "1000");
    uint32_t k, gate, ticks, now_us = 0u, armed = 0u, flowed = 0u;

    state = (uint64_t)atol(count > 2 ? arguments[2] : "1") * 0x9e3779b97f4a7c15u;
    if (shim_start(GSM_INTERVAL_US, LIMIT_PA, 2e4f, -150.0f, 100.0f, 5000u, 20u) != 0) {
        return 2;
    }
    for (k = 0u; k < streams; k++) {
        shim_poll(bytes, stream(bytes), sent);
        for (ticks = draw(6u); ticks > 0u; ticks--) {
            now_us += draw(100u) == 0u ? draw(600u) : (uint32_t)GSM_INTERVAL_US;
            shim_tick(voltage(), draw(500u) == 0u ? -1 : 0, 0, now_us);
            armed += shim_state() == GSM_ARMED;
            flowed += shim_current_pa() < 0.0f || shim_current_pa() > 0.0f;
            if (!(shim_current_pa() <= LIMIT_PA && shim_current_pa() >= -LIMIT_PA) ||
                (shim_state() != GSM_ARMED && shim_current_pa() != 0.0f)) {
                printf("stream %u: %g pA in state %d\n", (unsigned)k,
                       (double)shim_current_pa(), shim_state());
                return 1;
            }
            for (gate = 0u; gate < GSM_DYNAMIC; gate++) {
                if (!(shim_gate(gate) >= 0.0f && shim_gate(gate) <= 1.0f)) {
                    return 1;
                }
            }
        }
    }
    printf("%u streams, armed at %u ticks, current at %u, %u faults\n", (unsigned)streams,
           (unsigned)armed, (unsigned)flowed, (unsigned)shim_counters()[4]);
    return 0;
}
