/* What tests need of the device library beyond its own functions: sizes and a look inside. */
#include <string.h>

#include "gatestep_bridge.h"

#ifdef __cplusplus
extern "C" {
#endif

size_t shim_size(int what);
int shim_make(struct gsb_device *device, const struct gsb_rig_config *config,
              const struct gsb_port *port, int serial, uint8_t *in, uint8_t *out, size_t room,
              struct gsb_taken *taken, uint32_t count);
int shim_state(const struct gsb_device *device);
int shim_broken(const struct gsb_device *device);
int shim_error(const struct gsb_device *device);
uint32_t shim_counter(const struct gsb_device *device, int which);

size_t shim_size(int what)
{
    const size_t sizes[] = {sizeof(struct gsb_device), sizeof(struct gsb_link),
                            sizeof(struct gsb_rig_config), sizeof(struct gsb_taken),
                            sizeof(struct gsb_sample), sizeof(struct gsb_answer),
                            sizeof(struct gsb_rig)};
    return sizes[what];
}

int shim_make(struct gsb_device *device, const struct gsb_rig_config *config,
              const struct gsb_port *port, int serial, uint8_t *in, uint8_t *out, size_t room,
              struct gsb_taken *taken, uint32_t count)
{
    struct gsb_link link;
    int outcome = gsb_link_init(&link, serial ? &gsb_serial : &gsb_zmtp, config->cells, in, room,
                                out, room);
    return outcome ? outcome : gsb_device_init(device, config, port, &link, taken, count);
}

int shim_state(const struct gsb_device *device)
{
    return (int)gsb_rig_state(&device->rig);
}

int shim_broken(const struct gsb_device *device)
{
    return device->link.broken;
}

int shim_error(const struct gsb_device *device)
{
    return device->rig.last_error;
}

uint32_t shim_counter(const struct gsb_device *device, int which)
{
    uint32_t counters[sizeof(struct gsb_counters) / sizeof(uint32_t)];
    memcpy(counters, &device->rig.counters, sizeof counters);
    return counters[which];
}

#ifdef __cplusplus
}
#endif
