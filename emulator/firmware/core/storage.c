#include "storage.h"

#include "bytes.h"
#include "crc.h"
#include "module.h"

/* The record: form, serial, epoch, address, number of groups, groups, check value. */
enum {
    FORM = 1,
    GROUPS_STORED = 16,
    AT_SERIAL = 1,
    AT_EPOCH = 5,
    AT_ADDRESS = 9,
    AT_GROUP_COUNT = 13,
    AT_GROUPS = 14,
    AT_CHECK = AT_GROUPS + 4 * GROUPS_STORED
};

/* A build in which the record's parts and its size disagree does not compile. */
typedef char record_size_agrees[AT_CHECK + 4 == PB_STORAGE_RECORD_SIZE ? 1 : -1];
typedef char groups_fit[PB_MAX_GROUPS <= GROUPS_STORED ? 1 : -1];

static bool is_sound(const uint8_t *record)
{
    return record[0] == FORM && record[AT_GROUP_COUNT] <= PB_MAX_GROUPS &&
           pb_crc(record, AT_CHECK) == pb_get(record + AT_CHECK, 4);
}

static void unpack(struct pb_settings *settings, const uint8_t *record)
{
    settings->epoch = (uint32_t)pb_get(record + AT_EPOCH, 4);
    settings->address = (uint32_t)pb_get(record + AT_ADDRESS, 4);
    settings->group_count = record[AT_GROUP_COUNT];
    for (unsigned i = 0; i < settings->group_count; i++)
        settings->groups[i] = (uint32_t)pb_get(record + AT_GROUPS + 4u * i, 4);
}

static void pack(uint8_t *record, const struct pb_settings *settings, uint32_t serial)
{
    pb_clear(record, PB_STORAGE_RECORD_SIZE);
    record[0] = FORM;
    pb_put(record + AT_SERIAL, 4, serial);
    pb_put(record + AT_EPOCH, 4, settings->epoch);
    pb_put(record + AT_ADDRESS, 4, settings->address);
    record[AT_GROUP_COUNT] = settings->group_count;
    if (PB_VARIANT(one_group_kept) && settings->group_count > 1)
        record[AT_GROUP_COUNT] = 1;
    for (unsigned i = 0; i < settings->group_count; i++)
        pb_put(record + AT_GROUPS + 4u * i, 4, settings->groups[i]);
    pb_put(record + AT_CHECK, 4, pb_crc(record, AT_CHECK));
}

void pb_storage_load(struct pb_module *module)
{
    struct pb_storage *storage = &module->storage;
    uint8_t record[PB_STORAGE_RECORD_SIZE];
    pb_clear(&storage->kept, sizeof storage->kept);
    storage->serial = 0;
    storage->has_record = false;
    for (unsigned slot = 0; slot < PB_STORAGE_SLOTS; slot++) {
        if (!module->port.storage_read(module->port.context, slot, record) || !is_sound(record))
            continue;
        const uint32_t serial = (uint32_t)pb_get(record + AT_SERIAL, 4);
        if (storage->has_record && (int32_t)(serial - storage->serial) < 0)
            continue;
        storage->has_record = true;
        storage->serial = serial;
        storage->newest_slot = (uint8_t)slot;
        unpack(&storage->kept, record);
    }
}

bool pb_storage_commit(struct pb_module *module, const struct pb_settings *settings)
{
    struct pb_storage *storage = &module->storage;
    uint8_t record[PB_STORAGE_RECORD_SIZE];
    if (storage->cut_at > 0 && --storage->cut_at == 0)
        storage->power_failed = true;
    if (storage->power_failed && !PB_VARIANT(cut_write_is_made))
        return false;
    /* never over the newest record: a write that fails half-way must leave it sound */
    const unsigned slot = storage->has_record ? 1u - storage->newest_slot : 0u;
    pack(record, settings, storage->serial + 1);
    if (!module->port.storage_write(module->port.context, slot, record))
        return false;
    storage->kept = *settings;
    storage->serial++;
    storage->newest_slot = (uint8_t)slot;
    storage->has_record = true;
    return true;
}
