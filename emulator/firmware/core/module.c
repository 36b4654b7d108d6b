#include "module.h"

#include "bytes.h"
#include "cobs.h"

/* ------------------------------------------------------------------------------------------------ starts */

static void forget(struct pb_module *module, uint8_t restart_cause)
{
    module->event_number = 0;
    pb_clear(module->drops, sizeof module->drops);
    module->silent_refusals = 0;
    pb_stream_reset(&module->stream);
    pb_plant_power_up(&module->plant);
    if (PB_VARIANT(restart_opens_bonds) && module->epoch > 1)
        for (uint8_t face = 0; face < module->plant.face_count; face++)
            pb_plant_unbond(&module->plant, face);
    pb_state_start(module, restart_cause);
    if (!PB_VARIANT(lease_survives_restart))
        pb_lease_start(module);
    if (!PB_VARIANT(history_survives_restart))
        pb_history_start(module);
    pb_motion_start(module);
    pb_slots_start(module);
    if (!PB_VARIANT(telemetry_survives_restart))
        pb_telemetry_off(module);
    pb_assist_start(module);
    pb_truth_start(module);
    pb_answers_start(module);
}

/* Reads what was kept and commits the new epoch. False: power failed during that. */
static bool take_epoch(struct pb_module *module)
{
    module->storage.power_failed = false;
    pb_storage_load(module);
    struct pb_settings settings = module->storage.kept;
    settings.epoch++;
    if (PB_VARIANT(epoch_not_kept))
        settings.epoch = 1;
    if (PB_VARIANT(epoch_skipped_by_power_cut) && module->epoch >= settings.epoch)
        settings.epoch = module->epoch + 1;
    if (PB_VARIANT(address_not_kept))
        settings.address = 0;
    module->epoch_unsaved = !pb_storage_commit(module, &settings);
    module->epoch = settings.epoch;
    module->address = settings.address != 0 ? settings.address : module->config->address;
    return !module->storage.power_failed;
}

void pb_module_start(struct pb_module *module, uint8_t restart_cause)
{
    while (!take_epoch(module)) /* fails once at most: only assist lets it */
        restart_cause = PB_VARIANT(cut_start_keeps_cause) ? restart_cause : PB_RESTART_CAUSE_POWER_ON;
    forget(module, restart_cause);
    if (PB_VARIANT(boot_text_on_link))
        module->port.send(module->port.context, (const uint8_t *)"starting\n", 9);
    pb_faults_start(module, PB_VARIANT(surviving_cause_forgotten) ? 0 : module->surviving);
    if (module->epoch_unsaved)
        pb_faults_raise(module, PB_FAULT_STORAGE_FAILED);
    if (restart_cause == PB_RESTART_CAUSE_BROWN_OUT)
        pb_faults_happen(module, PB_FAULT_BROWN_OUT);
    if (restart_cause == PB_RESTART_CAUSE_WATCHDOG && !PB_VARIANT(watchdog_restart_unnoticed))
        pb_faults_happen(module, PB_FAULT_WATCHDOG);
    pb_state_begin_changes(module);
    pb_state_note_change(module);
}

const char *pb_module_init(struct pb_module *module, const struct pb_config *config, const struct pb_port *port,
                           uint64_t seed, uint64_t time_us, uint8_t restart_cause)
{
    const char *problem = pb_config_problem(config);
    if (problem != NULL)
        return problem;
    pb_clear(module, sizeof *module);
    module->config = config;
    module->port = *port;
    module->now_us = time_us;
    module->wall_us = time_us;
    pb_random_seed(&module->random, seed);
    pb_plant_build(&module->plant, config);
    pb_module_start(module, restart_cause);
    return NULL;
}

/* ------------------------------------------------------------------------------------------------ time */

/* Takes the time as told; one that runs backwards counts as standing still. */
static uint64_t tell_time(struct pb_module *module, uint64_t time_us)
{
    if (time_us > module->wall_us)
        module->wall_us = time_us;
    return module->wall_us;
}

/* Before something that arrived at time_us is taken. */
static void arrive(struct pb_module *module, uint64_t time_us)
{
    pb_schedule_run(module, tell_time(module, time_us), false);
    module->now_us = module->wall_us;
}

void pb_module_after_input(struct pb_module *module)
{
    if (module->storage.power_failed)
        pb_module_start(module, PB_RESTART_CAUSE_POWER_ON);
    pb_state_note_change(module);
    pb_schedule_send(module);
}

void pb_module_advance(struct pb_module *module, uint64_t time_us)
{
    pb_schedule_run(module, tell_time(module, time_us), true);
    module->now_us = module->wall_us;
}

uint64_t pb_module_deadline(struct pb_module *module)
{
    const uint64_t due_us = pb_schedule_next_due(module);
    return due_us < module->wall_us ? module->wall_us : due_us;
}

/* ------------------------------------------------------------------------------------------------ the link */

static void take_block(struct pb_module *module)
{
    size_t size;
    if (pb_cobs_decode(module->stream.block, module->stream.size, &size))
        pb_intake_frame(module, module->stream.block, size);
    else
        pb_intake_drop(module, PB_DROP_STUFFING);
}

void pb_module_feed(struct pb_module *module, uint64_t time_us, const uint8_t *bytes, size_t size)
{
    arrive(module, time_us);
    if (size > 0 && pb_stream_expire(&module->stream, module->now_us))
        pb_intake_drop(module, PB_DROP_HALF_FRAME);
    const bool is_stamped_early = PB_VARIANT(stamped_at_first_byte) || PB_VARIANT(lease_counted_from_first_byte);
    if (is_stamped_early && pb_stream_is_inside(&module->stream))
        module->now_us = module->stream.last_byte_us;
    if (PB_VARIANT(each_piece_begins_anew))
        pb_stream_reset(&module->stream);
    if (PB_VARIANT(burst_is_cut) && size > 2048)
        size = 2048;
    for (size_t i = 0; i < size; i++) {
        switch (pb_stream_take(&module->stream, module->now_us, bytes[i])) {
        case PB_STREAM_BLOCK:
            take_block(module);
            if (PB_VARIANT(one_frame_a_piece))
                return;
            break;
        case PB_STREAM_TOO_LONG:
            pb_intake_drop(module, PB_DROP_TOO_LONG);
            break;
        default:
            break;
        }
    }
}

void pb_module_datagram(struct pb_module *module, uint64_t time_us, const uint8_t *bytes, size_t size)
{
    arrive(module, time_us);
    if (size > PB_FRAME_SIZE_MAX)
        pb_intake_drop(module, PB_DROP_TOO_LONG);
    else
        pb_intake_frame(module, bytes, size);
}

void pb_module_link_ready(struct pb_module *module)
{
    module->link_blocked = false;
}

void pb_module_link_lost(struct pb_module *module)
{
    if (pb_stream_is_inside(&module->stream) && !module->stream.too_long)
        pb_intake_drop(module, PB_DROP_HALF_FRAME);
    pb_stream_reset(&module->stream);
    module->any_sent = false;
}

/* ------------------------------------------------------------------------------------------------ the hardware */

void pb_module_halt(struct pb_module *module, uint64_t time_us)
{
    arrive(module, time_us);
    pb_state_halt(module, PB_HALT_CAUSE_LOCAL);
    pb_module_after_input(module);
}

bool pb_module_raise(struct pb_module *module, uint64_t time_us, uint8_t code)
{
    if (!pb_fault_is_known(code))
        return false;
    arrive(module, time_us);
    pb_faults_raise(module, code);
    pb_module_after_input(module);
    return true;
}

bool pb_module_withdraw(struct pb_module *module, uint64_t time_us, uint8_t code)
{
    if (!pb_fault_is_known(code))
        return false;
    arrive(module, time_us);
    pb_faults_withdraw(module, code);
    pb_module_after_input(module);
    return true;
}
