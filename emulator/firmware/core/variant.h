/* Deliberately broken variants: PB_VARIANT(name) is 0 in every normal build, so that the compiler drops the wrong
 * branch. A build with -DPB_WITH_VARIANTS compares with the one that was chosen when the program started. */
#ifndef PB_VARIANT_H
#define PB_VARIANT_H

#ifdef PB_WITH_VARIANTS
#include "variants.h"
#define PB_VARIANT(name) (pb_variant_chosen == PB_VARIANT_##name)
#else
#define PB_VARIANT(name) 0
#endif

#endif
