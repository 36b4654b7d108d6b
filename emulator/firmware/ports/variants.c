/* Names of the deliberately broken variants, outside with hyphens. */
#include <stdio.h>

#include "variant.h"

#define NAME(name) #name,
static const char *const NAMES[] = {PB_VARIANTS(NAME)};

int pb_variant_chosen = PB_VARIANT_none;

static char shown(char letter)
{
    return letter == '_' ? '-' : letter;
}

static bool is_called(const char *entry, const char *name)
{
    while (*entry != '\0' && shown(*entry) == *name) {
        entry++;
        name++;
    }
    return *entry == '\0' && *name == '\0';
}

bool pb_variant_by_name(const char *name, int *variant)
{
    for (int i = PB_VARIANT_none + 1; i < PB_VARIANT_COUNT; i++)
        if (is_called(NAMES[i - 1], name)) {
            *variant = i;
            return true;
        }
    return false;
}

void pb_variants_print(void)
{
    for (int i = PB_VARIANT_none + 1; i < PB_VARIANT_COUNT; i++) {
        for (const char *at = NAMES[i - 1]; *at != '\0'; at++)
            putchar(shown(*at));
        putchar('\n');
    }
}
