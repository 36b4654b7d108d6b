/* Deliberately broken variants: PB_VARIANT(name) is 0 in every normal build, so that the compiler drops the wrong
 * branch. A build with -DPB_WITH_VARIANTS looks at the variant of the `module` in scope. Its core/variants.h holds
 * enum pb_variant { PB_VARIANT_none, PB_VARIANT_name, ... } and bool pb_variant_by_name(const char *, int *). */
#ifndef PB_VARIANT_H
#define PB_VARIANT_H

#ifdef PB_WITH_VARIANTS
#include "variants.h"
#define PB_VARIANT(name) (module->variant == PB_VARIANT_##name)
#else
#define PB_VARIANT(name) 0
#endif

#endif
