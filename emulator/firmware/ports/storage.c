#include "storage.h"

#include <fcntl.h>
#include <string.h>
#include <unistd.h>

bool port_storage_open(struct port_storage *storage, const char *path)
{
    memset(storage, 0, sizeof *storage);
    storage->file = -1;
    if (path != NULL)
        storage->file = open(path, O_RDWR | O_CREAT, 0644);
    return path == NULL || storage->file >= 0;
}

static off_t offset_of(unsigned slot)
{
    return (off_t)slot * PB_STORAGE_RECORD_SIZE;
}

bool port_storage_read(struct port_storage *storage, unsigned slot, uint8_t *record)
{
    if (storage->file >= 0)
        return pread(storage->file, record, PB_STORAGE_RECORD_SIZE, offset_of(slot)) == PB_STORAGE_RECORD_SIZE;
    memcpy(record, storage->records[slot], PB_STORAGE_RECORD_SIZE);
    return storage->has_record[slot];
}

bool port_storage_write(struct port_storage *storage, unsigned slot, const uint8_t *record)
{
    if (storage->file >= 0)
        return pwrite(storage->file, record, PB_STORAGE_RECORD_SIZE, offset_of(slot)) == PB_STORAGE_RECORD_SIZE &&
               fsync(storage->file) == 0;
    memcpy(storage->records[slot], record, PB_STORAGE_RECORD_SIZE);
    storage->has_record[slot] = true;
    return true;
}
