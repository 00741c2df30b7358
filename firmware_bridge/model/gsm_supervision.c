/* The poll: orders from the host, answers, thinned samples. SPEC.md has the frames. */
#include <string.h>

#include "gsm_device.h"

static void heard(struct gsm_device *device)
{
    device->heard_us = device->port.now_us(device->port.context);
}

static int send_done(struct gsm_device *device, uint64_t token, int32_t result)
{
    uint8_t payload[16];
    struct gsb_writer out = {0, sizeof payload, 0, 0};

    out.bytes = payload;
    gsb_write_array(&out, 2u);
    gsb_write_whole(&out, token);
    gsb_write_whole(&out, (uint64_t)(uint32_t)(result < 0 ? -result : result));
    return gsb_link_put_frame(device->link, GSB_KIND_DONE, payload, out.at);
}

/* The tick has carried out the order: tell the host. */
static void finish_order(struct gsm_device *device)
{
    if (device->token_open && device->orders_done == device->orders_put) {
        device->token_open = 0u;
        device->token_result = device->order_result;
        send_done(device, device->token, device->token_result);
    }
}

/* An order: to the tick with it, unless it is the last one again or cannot be read. */
static void take_order(struct gsm_device *device)
{
    struct gsb_reader in = {0, 0, 0, 0};
    const int parameter = device->link->kind == GSB_KIND_PARAMETER;
    uint64_t token, index = 0u;
    float value = 0.0f;
    uint32_t items;

    in.bytes = device->link->message;
    in.size = device->link->message_size;
    items = gsb_read_array(&in);
    token = gsb_read_whole(&in);
    if (parameter) {
        index = gsb_read_whole(&in);
        value = gsb_read_number(&in);
    }
    if (in.bad || items < (parameter ? 3u : 1u)) {
        return;
    }
    if (device->token_known && token == device->token) {
        send_done(device, token, device->token_result);
        return;
    }
    device->token = token;
    device->token_known = 1u;
    device->order.kind = device->link->kind;
    device->order.index = index < GSM_PARAMETERS ? (uint32_t)index : GSM_PARAMETERS;
    device->order.value = value;
    device->order.releases = device->releases;
    device->token_open = 1u;
    /* Last: the tick may come at any moment after. */
    device->orders_put = device->orders_put + 1u;
}

static float value_of(const struct gsm_device *device, uint32_t index)
{
    if (index == GSM_PARAMETERS - 1u) {
        return (float)device->every;
    }
    return (index & 1u) != 0u ? device->with.reversal_mv[index / 2u]
                              : device->with.gmax_ns[index / 2u];
}

/* A parameter's name; its size. Names of conductances are 32 bytes at most. */
static uint32_t name_of(uint32_t index, uint8_t *name)
{
    static const char every[] = "trace.every_ticks", gmax[] = ".gmax_ns",
                      reversal[] = ".reversal_mv";
    const char *from, *end;
    uint32_t size = 0u;

    if (index == GSM_PARAMETERS - 1u) {
        memcpy(name, every, sizeof every - 1u);
        return sizeof every - 1u;
    }
    for (from = gsm_conductance_names[index / 2u]; *from != '\0' && size < 32u; from++) {
        name[size++] = (uint8_t)*from;
    }
    end = (index & 1u) != 0u ? reversal : gmax;
    while (*end != '\0') {
        name[size++] = (uint8_t)*end++;
    }
    return size;
}

/* A name as MessagePack text: gsb_write_text takes 31 bytes, a name may have 44. */
static void write_name(struct gsb_writer *out, const uint8_t *name, uint32_t size)
{
    if (size < 32u) {
        gsb_write_text(out, name, size);
        return;
    }
    out->bytes[out->at] = 0xd9u;
    out->bytes[out->at + 1u] = (uint8_t)size;
    memcpy(out->bytes + out->at + 2u, name, size);
    out->at += 2u + size;
}

static void answer_ask(struct gsm_device *device)
{
    uint8_t payload[96], name[48];
    struct gsb_reader in = {0, 0, 0, 0};
    struct gsb_writer out = {0, sizeof payload, 0, 0};
    uint64_t token, index;
    uint32_t items;

    in.bytes = device->link->message;
    in.size = device->link->message_size;
    items = gsb_read_array(&in);
    token = gsb_read_whole(&in);
    index = gsb_read_whole(&in);
    if (in.bad || items < 2u) {
        return;
    }
    if (index >= GSM_PARAMETERS) {
        send_done(device, token, GSB_ERROR_ARGUMENT);
        return;
    }
    out.bytes = payload;
    gsb_write_array(&out, 5u);
    gsb_write_whole(&out, token);
    gsb_write_whole(&out, index);
    gsb_write_whole(&out, GSM_PARAMETERS);
    write_name(&out, name, name_of((uint32_t)index, name));
    gsb_write_float(&out, value_of(device, (uint32_t)index));
    gsb_link_put_frame(device->link, GSB_KIND_IS, payload, out.at);
}

static void control(struct gsm_device *device)
{
    switch (device->link->kind) {
    case GSB_KIND_PARAMETER:
    case GSB_KIND_ARM:
    case GSB_KIND_DISARM:
        heard(device);
        take_order(device);
        break;
    case GSB_KIND_ASK:
        answer_ask(device);
        break;
    case GSB_KIND_ALIVE:
        heard(device);
        break;
    default:
        break;
    }
}

/* Read on, up to an order that must wait for the tick. */
static int feed(struct gsm_device *device)
{
    int found, worst = GSB_OK;
    size_t used;

    while (device->bytes_at < device->bytes_size && !device->token_open) {
        found = gsb_link_feed(device->link, device->bytes + device->bytes_at,
                              (size_t)(device->bytes_size - device->bytes_at), &used);
        device->bytes_at = (uint8_t)(device->bytes_at + used);
        if (found < 0) {
            gsm_device_stop(device);
            worst = found;
        } else if (found == GSB_OPENED || found == GSB_CLOSED) {
            gsm_device_stop(device);
            device->token_known = 0u; /* another host may begin with the same token */
        } else if (found == GSB_CONTROL && device->link->opened) {
            control(device);
        }
    }
    return worst;
}

static int receive(struct gsm_device *device)
{
    int came;

    if (device->bytes_at < device->bytes_size) {
        return GSB_OK;
    }
    came = device->port.receive_bytes(device->port.context, device->bytes, sizeof device->bytes);
    device->bytes_at = device->bytes_size = 0u;
    if (came < 0 || came > (int)sizeof device->bytes) {
        return GSB_ERROR_LINK;
    }
    device->bytes_size = (uint8_t)came;
    return GSB_OK;
}

/* Thinned samples, as many as find room to be sent. */
static void send_traces(struct gsm_device *device)
{
    uint8_t payload[40];

    while (device->traces_sent != device->traces_put) {
        const struct gsm_trace *from = &device->trace[device->traces_sent % GSM_TRACES];
        struct gsb_writer out = {0, sizeof payload, 0, 0};

        out.bytes = payload;
        gsb_write_array(&out, 5u);
        gsb_write_whole(&out, from->seq);
        gsb_write_whole(&out, from->t_us);
        gsb_write_whole(&out, from->state);
        gsb_write_float(&out, from->v_mv);
        gsb_write_float(&out, from->i_pa);
        if (device->link->opened &&
            gsb_link_put_frame(device->link, GSB_KIND_TRACE, payload, out.at) != GSB_OK) {
            return;
        }
        device->traces_sent = device->traces_sent + 1u;
    }
}

static int send(struct gsm_device *device)
{
    const uint8_t *bytes;
    const size_t size = gsb_link_pending(device->link, &bytes);
    int went = 0;

    if (size > 0u) {
        went = device->port.send_bytes(device->port.context, bytes, size);
    }
    if (went < 0) {
        return GSB_ERROR_LINK;
    }
    gsb_link_sent(device->link, (size_t)went);
    return GSB_OK;
}

static void greet(struct gsm_device *device)
{
    const uint32_t now_us = device->port.now_us(device->port.context);

    if (!device->link->opened && now_us - device->greeted_us >= GSB_HELLO_US) {
        device->greeted_us = now_us;
        gsb_link_greet(device->link);
    }
}

int gsm_device_connect(struct gsm_device *device)
{
    if (!device->link) {
        return GSB_ERROR_ARGUMENT;
    }
    gsm_device_stop(device);
    device->bytes_at = device->bytes_size = 0u;
    device->token_known = 0u;
    device->greeted_us = device->port.now_us(device->port.context);
    return gsb_link_open(device->link);
}

/* Whether no tick has run for longer than a gap that it would forgive. */
static int ticks_have_ended(struct gsm_device *device)
{
    /* Before the clock: a tick in between must not be missed. */
    const uint32_t beats = device->beats;
    const uint32_t now_us = device->port.now_us(device->port.context);
    const float most_us = ((float)device->config.gap_ticks + 1.0f) * device->config.interval_us;

    if (!device->watching || beats != device->seen_beats) {
        device->watching = 1u;
        device->seen_beats = beats;
        device->seen_us = now_us;
    }
    return (float)(now_us - device->seen_us) > most_us;
}

int gsm_device_poll(struct gsm_device *device)
{
    int found, worst, ended;

    if (!device->link) {
        return GSB_ERROR_ARGUMENT;
    }
    ended = ticks_have_ended(device);
    finish_order(device);
    worst = receive(device);
    found = feed(device);
    if (worst == GSB_OK) {
        worst = found;
    }
    send_traces(device);
    greet(device);
    found = send(device);
    if (found == GSB_ERROR_LINK || worst == GSB_ERROR_LINK) {
        gsm_device_stop(device);
        worst = GSB_ERROR_LINK;
    }
    return ended ? GSB_ERROR_CLOCK : worst;
}
