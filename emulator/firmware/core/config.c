#include "config.h"

#include <stddef.h>

static const char *sizes_problem(const struct pb_config *config)
{
    const bool has_groups = pb_config_has(config, PB_CAPABILITY_GROUPS);
    const bool has_schedule = pb_config_has(config, PB_CAPABILITY_SCHEDULE);
    if (config->sessions < PB_SIZE_SESSIONS_MIN || config->sessions > PB_MAX_SESSIONS)
        return "sessions: from the contract's least number to PB_MAX_SESSIONS";
    if (config->numbers < PB_SIZE_NUMBERS_MIN || config->numbers > PB_MAX_NUMBERS ||
        PB_MAX_NUMBERS > PB_LIMIT_NUMBER_WINDOW)
        return "numbers: from the contract's least number to PB_MAX_NUMBERS, at most the number window";
    if (config->outcomes < PB_SIZE_OUTCOMES_MIN || config->outcomes > PB_MAX_OUTCOMES)
        return "outcomes: from the contract's least number to PB_MAX_OUTCOMES";
    if (config->faults < PB_SIZE_FAULTS_MIN || config->faults > PB_MAX_FAULTS)
        return "faults: from the contract's least number to PB_MAX_FAULTS";
    if (pb_config_has(config, PB_CAPABILITY_QUEUE) != (config->queue > 0))
        return "queue: above 0 with the capability, 0 without";
    if (has_schedule != (config->scheduled > 0))
        return "scheduled: above 0 with the capability schedule, 0 without";
    if (has_groups ? config->groups < 1 || config->groups > PB_MAX_GROUPS : config->groups != 0)
        return "groups: 1 to PB_MAX_GROUPS with the capability, 0 without";
    if (config->face_count > PB_MAX_FACES)
        return "face_count: at most PB_MAX_FACES";
    if (config->temperature_count > PB_MAX_TEMPERATURES)
        return "temperature_count: at most PB_MAX_TEMPERATURES";
    return NULL;
}

static const char *times_problem(const struct pb_config *config)
{
    if (config->receipt_ms < 1 || config->receipt_ms > PB_LIMIT_RECEIPT_TIME_MAX ||
        config->receipt_delay_us > 1000u * config->receipt_ms)
        return "receipt_ms: 1 to the contract's limit, and not below the real delay";
    if (config->starting_ms < 1 || config->starting_ms > PB_LIMIT_STARTING_TIME_MAX ||
        config->starting_delay_us > 1000u * config->starting_ms)
        return "starting_ms: 1 to the contract's limit, and not below the real delay";
    if (config->stop_ms > PB_LIMIT_STOP_TIME_MAX || config->stop_delay_us > 1000u * config->stop_ms)
        return "stop_ms: at most the contract's limit, and not below the real delay";
    if (config->turnaround_us > config->receipt_delay_us)
        return "turnaround_us: at most receipt_delay_us";
    return NULL;
}

static const char *motion_problem(const struct pb_motion_config *motion)
{
    if (motion->motion < PB_MOTION_PIVOT || motion->motion > PB_MOTION_UNBOND)
        return "motions: one of the contract's";
    if (motion->magnitude_min > motion->magnitude_max)
        return "motions: magnitude_min above magnitude_max";
    if (motion->typical_ms < 1 || motion->typical_ms > motion->longest_ms ||
        motion->longest_ms > PB_LIMIT_MOTION_TIME_LONGEST_MAX || motion->no_return_ms > motion->typical_ms)
        return "motions: no_return_ms <= typical_ms <= longest_ms <= the contract's limit";
    return NULL;
}

const char *pb_config_problem(const struct pb_config *config)
{
    const char *problem = sizes_problem(config);
    if (problem == NULL)
        problem = times_problem(config);
    for (unsigned i = 0; i < config->motion_count && problem == NULL; i++)
        problem = motion_problem(&config->motions[i]);
    if (problem == NULL && config->address > PB_ADDRESS_UNICAST_LAST)
        problem = "address: a unicast address or 0";
    return problem;
}

const struct pb_motion_config *pb_config_motion(const struct pb_config *config, int64_t motion)
{
    for (unsigned i = 0; i < config->motion_count; i++)
        if (config->motions[i].motion == motion)
            return &config->motions[i];
    return NULL;
}

bool pb_config_has(const struct pb_config *config, unsigned capability)
{
    return (config->capabilities >> capability & 1u) != 0;
}
