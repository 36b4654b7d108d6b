/* The simple plant: a motion takes its typical time and its displacement grows in proportion to time. A build for
 * real hardware replaces plant.c by one that drives actuators and reads sensors behind the same functions. */
#ifndef PB_PLANT_H
#define PB_PLANT_H

#include <stdbool.h>
#include <stdint.h>

#include "config.h"

struct pb_face {
    bool bonded;
    uint32_t neighbour;
    uint8_t orientation;
};

struct pb_plant {
    bool powered;
    int32_t position; /* at rest */
    uint8_t face_count;
    struct pb_face faces[PB_MAX_FACES];

    bool active;
    bool frozen;
    uint64_t begun_us;    /* while moving freely: when progress was 0 */
    uint64_t progress_us; /* while frozen */
    uint64_t travel_us;
    int32_t magnitude;
};

/* Faces as built; power-ups keep what bonds hold. */
void pb_plant_build(struct pb_plant *plant, const struct pb_config *config);
void pb_plant_power_up(struct pb_plant *plant);
void pb_plant_power(struct pb_plant *plant, bool on);

void pb_plant_begin(struct pb_plant *plant, uint64_t now_us, const struct pb_motion_config *motion, int32_t magnitude);

/* Holds the motion where it is, and lets it go on from there. */
void pb_plant_freeze(struct pb_plant *plant, uint64_t now_us);
void pb_plant_resume(struct pb_plant *plant, uint64_t now_us);

/* How far into its travel time the motion is. */
uint64_t pb_plant_progress_us(const struct pb_plant *plant, uint64_t now_us);
int32_t pb_plant_displacement(const struct pb_plant *plant, uint64_t now_us);

/* True position now, while moving too. */
int32_t pb_plant_position(const struct pb_plant *plant, uint64_t now_us);

/* At rest: the displacement becomes part of the position. */
void pb_plant_rest(struct pb_plant *plant, uint64_t now_us);

/* Closes a face's bond; false when nothing is within reach. */
bool pb_plant_bond(struct pb_plant *plant, uint8_t face);
void pb_plant_unbond(struct pb_plant *plant, uint8_t face);
unsigned pb_plant_bonds(const struct pb_plant *plant);

#endif
