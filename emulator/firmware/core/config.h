/* What a build is: identity, declared capabilities, sizes, times, motions, faces. Constant while the module runs. */
#ifndef PB_CONFIG_H
#define PB_CONFIG_H

#include <stdbool.h>
#include <stdint.h>

#include "contract.h"
#include "sizes.h"

#define PB_HARDWARE_ID_SIZE 8
#define PB_BUILD_SIZE 8

/* One motion, with the stop categories of the actuator that makes it. */
struct pb_motion_config {
    uint8_t motion;
    uint8_t actuator;
    int32_t magnitude_min;
    int32_t magnitude_max;
    uint16_t typical_ms;
    uint16_t longest_ms;
    uint16_t no_return_ms; /* 0: can be stopped throughout */
    uint8_t halt_category;
    uint8_t lease_end_category;
    uint8_t fault_category;
};

/* One face as the module finds it at power-up. */
struct pb_face_config {
    bool bonded;
    uint32_t neighbour; /* within reach, bonded or not; 0: nothing there */
    uint8_t orientation;
};

enum pb_link { PB_LINK_STREAM, PB_LINK_DATAGRAM };

struct pb_config {
    enum pb_link link;
    uint8_t hardware_id[PB_HARDWARE_ID_SIZE];
    uint8_t build[PB_BUILD_SIZE];
    uint8_t nature;
    uint32_t capabilities;
    uint32_t address; /* until another is assigned; 0: none */

    /* declared sizes, each at most what sizes.h has room for */
    uint8_t sessions;
    uint8_t numbers;
    uint8_t queue;
    uint8_t scheduled;
    uint8_t outcomes;
    uint8_t faults;
    uint8_t groups;

    /* declared times, and the ones the module really takes */
    uint8_t receipt_ms;
    uint16_t starting_ms;
    uint16_t stop_ms;
    uint16_t turnaround_us;
    uint32_t receipt_delay_us;
    uint32_t starting_delay_us;
    uint32_t stop_delay_us;

    uint8_t motion_count;
    const struct pb_motion_config *motions;
    uint8_t face_count;
    const struct pb_face_config *faces;

    /* readings of the simple plant */
    uint16_t supply_mv;
    uint16_t battery_permille;
    uint8_t temperature_count;
    int16_t temperatures[PB_MAX_TEMPERATURES]; /* 0.1 degC, windings first, then shell */
    uint16_t power_mw;                         /* drawn while moving */
};

/* Fills in the configuration of the shipped ports. The build's identity comes from PB_BUILD_ID of the Makefile. */
void pb_default_config(struct pb_config *config);

/* Null when the configuration keeps the contract's limits and fits sizes.h, else the rule it breaks. */
const char *pb_config_problem(const struct pb_config *config);

const struct pb_motion_config *pb_config_motion(const struct pb_config *config, int64_t motion);
bool pb_config_has(const struct pb_config *config, unsigned capability);

#endif
