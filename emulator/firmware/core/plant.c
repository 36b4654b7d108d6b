#include "plant.h"

#include "bytes.h"
#include "variant.h"

void pb_plant_build(struct pb_plant *plant, const struct pb_config *config)
{
    pb_clear(plant, sizeof *plant);
    plant->face_count = config->face_count;
    for (unsigned i = 0; i < config->face_count; i++) {
        plant->faces[i].bonded = config->faces[i].bonded;
        plant->faces[i].neighbour = config->faces[i].neighbour;
        plant->faces[i].orientation = config->faces[i].orientation;
    }
}

void pb_plant_power_up(struct pb_plant *plant)
{
    if (!PB_VARIANT(restart_keeps_power))
        plant->powered = false;
    plant->active = false;
    plant->frozen = false;
    plant->position = 0;
}

void pb_plant_power(struct pb_plant *plant, bool on)
{
    plant->powered = on;
}

void pb_plant_begin(struct pb_plant *plant, uint64_t now_us, const struct pb_motion_config *motion, int32_t magnitude)
{
    plant->active = true;
    plant->frozen = false;
    plant->begun_us = now_us;
    plant->travel_us = 1000u * (uint64_t)motion->typical_ms;
    plant->magnitude = magnitude;
    if (PB_VARIANT(magnitude_clamped) && magnitude > motion->magnitude_max)
        plant->magnitude = motion->magnitude_max;
    if (PB_VARIANT(motion_stops_short))
        plant->magnitude = magnitude / 20 * 19;
}

void pb_plant_freeze(struct pb_plant *plant, uint64_t now_us)
{
    plant->progress_us = pb_plant_progress_us(plant, now_us);
    plant->frozen = true;
}

void pb_plant_resume(struct pb_plant *plant, uint64_t now_us)
{
    if (plant->frozen)
        plant->begun_us = now_us - plant->progress_us;
    plant->frozen = false;
}

uint64_t pb_plant_progress_us(const struct pb_plant *plant, uint64_t now_us)
{
    if (!plant->active)
        return 0;
    const uint64_t progress_us = plant->frozen ? plant->progress_us : now_us - plant->begun_us;
    return progress_us < plant->travel_us ? progress_us : plant->travel_us;
}

int32_t pb_plant_displacement(const struct pb_plant *plant, uint64_t now_us)
{
    if (!plant->active)
        return 0;
    const int64_t progress_us = (int64_t)pb_plant_progress_us(plant, now_us);
    return (int32_t)((int64_t)plant->magnitude * progress_us / (int64_t)plant->travel_us);
}

/* The sum of two 32-bit numbers, kept within 32 bits: a real axis ends somewhere, too. */
static int32_t sum(int32_t a, int32_t b)
{
    const int64_t total = (int64_t)a + b;
    if (total > INT32_MAX)
        return INT32_MAX;
    return total < INT32_MIN ? INT32_MIN : (int32_t)total;
}

int32_t pb_plant_position(const struct pb_plant *plant, uint64_t now_us)
{
    return sum(plant->position, pb_plant_displacement(plant, now_us));
}

void pb_plant_rest(struct pb_plant *plant, uint64_t now_us)
{
    plant->position = pb_plant_position(plant, now_us);
    plant->active = false;
    plant->frozen = false;
}

bool pb_plant_bond(struct pb_plant *plant, uint8_t face)
{
    plant->faces[face].bonded = plant->faces[face].neighbour != 0;
    return plant->faces[face].bonded;
}

void pb_plant_unbond(struct pb_plant *plant, uint8_t face)
{
    plant->faces[face].bonded = false;
}

unsigned pb_plant_bonds(const struct pb_plant *plant)
{
    unsigned bonds = 0;
    for (unsigned i = 0; i < plant->face_count; i++)
        if (plant->faces[i].bonded)
            bonds++;
    return bonds;
}
