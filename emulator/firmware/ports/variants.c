/* Names of the deliberately broken variants. */
#include <stdio.h>
#include <string.h>

#include "variant.h"

#define NAME(name) #name,
static const char *const NAMES[] = {PB_VARIANTS(NAME)};

int pb_variant_chosen = PB_VARIANT_none;

bool pb_variant_by_name(const char *name, int *variant)
{
    for (int i = PB_VARIANT_none + 1; i < PB_VARIANT_COUNT; i++)
        if (strcmp(NAMES[i - 1], name) == 0) {
            *variant = i;
            return true;
        }
    return false;
}

void pb_variants_print(void)
{
    for (int i = PB_VARIANT_none + 1; i < PB_VARIANT_COUNT; i++)
        puts(NAMES[i - 1]);
}
