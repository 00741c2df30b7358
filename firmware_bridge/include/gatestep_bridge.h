/* The device side of gatestep: everything a rig of one's own needs, in portable C99.
 *
 * Include this, or only the parts that are used. gsb_device.h is where to begin: five
 * callbacks and two functions make a rig. SPEC.md has every byte of what goes over the
 * link. Nothing here allocates, waits, or keeps state of its own: all memory is the
 * caller's, all time is passed in. memcpy, memset and memcmp are all it takes from libc.
 */
#ifndef GATESTEP_BRIDGE_H
#define GATESTEP_BRIDGE_H

#include "gsb_error.h"
#include "gsb_message.h"
#include "gsb_frame.h"
#include "gsb_link.h"
#include "gsb_guard.h"
#include "gsb_rig.h"
#include "gsb_converter.h"
#include "gsb_device.h"

/* Version of this library's API; the wire has its own, see gsb_frame.h and SPEC.md. */
#define GSB_VERSION_MAJOR 1
#define GSB_VERSION_MINOR 0

#endif
