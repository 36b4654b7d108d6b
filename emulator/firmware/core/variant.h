/* Deliberately broken variants: PB_VARIANT(name) is 0 in every normal build, so that the compiler drops the wrong
 * branch. A build with -DPB_WITH_VARIANTS chooses one variant for each module at run time. */
#ifndef PB_VARIANT_H
#define PB_VARIANT_H

#ifdef PB_WITH_VARIANTS
#include "variants.h" /* enum pb_variant { PB_VARIANT_NONE, PB_VARIANT_name, ... }; pb_variant_by_name() */
#define PB_VARIANT(module, name) ((module)->variant == PB_VARIANT_##name)
#else
#define PB_VARIANT(module, name) 0
#endif

#endif
