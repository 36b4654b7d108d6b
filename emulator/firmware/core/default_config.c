#include "bytes.h"
#include "config.h"
#include "variant.h"

#ifndef PB_BUILD_ID
#define PB_BUILD_ID 0
#endif

#define BIT(capability) (1u << (capability))

#ifdef PB_PROFILE_SMALLEST

static const struct pb_motion_config MOTIONS[] = {
    {PB_MOTION_SLIDE, 0, -40000, 40000, 110, 200, 0, PB_STOP_CATEGORY_CAT_1, PB_STOP_CATEGORY_CAT_1,
     PB_STOP_CATEGORY_CAT_1},
};

static void set_profile(struct pb_config *config)
{
    config->hardware_id[1] = 0x51; /* another build of another module */
    config->faces = NULL;
}

#else

static const struct pb_motion_config MOTIONS[] = {
    {PB_MOTION_SLIDE, 0, -40000, 40000, 110, 200, 0, PB_STOP_CATEGORY_CAT_1, PB_STOP_CATEGORY_CAT_1,
     PB_STOP_CATEGORY_CAT_1},
    {PB_MOTION_HOP, 1, -60000, 60000, 140, 250, 60, PB_STOP_CATEGORY_CAT_1, PB_STOP_CATEGORY_CAT_1,
     PB_STOP_CATEGORY_CAT_1},
    /* the hinge holds its load: its actuator keeps power when it is stopped */
    {PB_MOTION_HINGE, 2, -180000, 180000, 120, 220, 0, PB_STOP_CATEGORY_CAT_2, PB_STOP_CATEGORY_CAT_2,
     PB_STOP_CATEGORY_CAT_2},
    {PB_MOTION_BOND, 3, 0, 0, 30, 80, 0, PB_STOP_CATEGORY_CAT_1, PB_STOP_CATEGORY_CAT_1, PB_STOP_CATEGORY_CAT_1},
    {PB_MOTION_UNBOND, 3, 0, 0, 30, 80, 0, PB_STOP_CATEGORY_CAT_1, PB_STOP_CATEGORY_CAT_1, PB_STOP_CATEGORY_CAT_1},
};

/* An invented place in a lattice: one bond to module 2, module 3 within reach, nothing at the other faces. */
static const struct pb_face_config FACES[] = {{true, 2, 0}, {false, 3, 1}, {false, 0, 0}, {false, 0, 0}};

static void set_profile(struct pb_config *config)
{
    config->capabilities = BIT(PB_CAPABILITY_QUEUE) | BIT(PB_CAPABILITY_SCHEDULE) | BIT(PB_CAPABILITY_TELEMETRY) |
                           BIT(PB_CAPABILITY_GROUPS) | BIT(PB_CAPABILITY_IDENTIFY) | BIT(PB_CAPABILITY_ASSIST) |
                           BIT(PB_CAPABILITY_ENERGY);
    if (PB_VARIANT(identify_without_saying))
        config->capabilities &= ~BIT(PB_CAPABILITY_IDENTIFY);
    if (PB_VARIANT(assist_left_in))
        config->capabilities &= ~BIT(PB_CAPABILITY_ASSIST);
    if (PB_VARIANT(start_at_overlooked))
        config->capabilities &= ~BIT(PB_CAPABILITY_SCHEDULE);
    if (PB_VARIANT(halt_keeps_power) || PB_VARIANT(fault_keeps_power) || PB_VARIANT(lease_end_takes_no_power))
        config->motion_count = 2; /* no axis that holds */
    config->queue = 4;
    config->scheduled = PB_VARIANT(start_at_overlooked) ? 0 : 1;
    config->groups = PB_MAX_GROUPS;
    config->face_count = sizeof FACES / sizeof FACES[0];
    config->faces = FACES;
}

#endif

void pb_default_config(struct pb_config *config)
{
    pb_clear(config, sizeof *config);
    config->link = PB_LINK_STREAM;
    config->address = 1;
    config->hardware_id[0] = 0xA1;
    config->hardware_id[1] = 0x50;
    config->hardware_id[PB_HARDWARE_ID_SIZE - 1] = (uint8_t)config->address;
    pb_put(config->build, PB_BUILD_SIZE, PB_BUILD_ID);
    config->nature = PB_NATURE_EMULATED;
    config->sessions = PB_MAX_SESSIONS;
    config->numbers = PB_MAX_NUMBERS;
    config->outcomes = PB_MAX_OUTCOMES;
    config->faults = PB_MAX_FAULTS;
    config->receipt_ms = 10;
    config->starting_ms = 50;
    config->stop_ms = 40;
    config->receipt_delay_us = 1000;
    config->starting_delay_us = 20000;
    config->stop_delay_us = 15000;
    config->motion_count = sizeof MOTIONS / sizeof MOTIONS[0];
    config->motions = MOTIONS;
    config->supply_mv = 7400;
    config->battery_permille = 912;
    config->temperature_count = 2;
    config->temperatures[0] = 251;
    config->temperatures[1] = 236;
    config->power_mw = 1200;
    set_profile(config);
}
