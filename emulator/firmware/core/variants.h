/* The deliberately broken variants, by name; tests/defects/c_variants.toml says what each does wrong. */
#ifndef PB_VARIANTS_H
#define PB_VARIANTS_H

#include <stdbool.h>

#define PB_VARIANTS(X) \
    X(copy_executed_again) \
    X(conflict_unseen) \
    X(overtaken_accepted) \
    X(window_half) \
    X(holder_pushed_out) \
    X(numbers_compared_plainly) \
    X(lease_number_stays) \
    X(lease_lasts_longer) \
    X(lease_end_moves_on) \
    X(grant_tells_nothing) \
    X(epoch_unchecked) \
    X(lease_number_unchecked) \
    X(anyone_commands) \
    X(clears_what_stands) \
    X(energizes_while_faulted) \
    X(reset_of_any_count) \
    X(late_start_runs) \
    X(drops_counted_twice) \
    X(silent_refusal_uncounted) \
    X(own_address_ignored) \
    X(copy_brings_no_outcome) \
    X(other_major_silent) \
    X(length_trusted) \
    X(halt_answered_to_nobody) \
    X(window_not_spread) \
    X(fault_events_crowd) \
    X(fault_told_once) \
    X(halt_keeps_queue) \
    X(halt_lets_motion_end) \
    X(predecessor_forgotten)

#define PB_VARIANT_NAME(name) PB_VARIANT_##name,
enum pb_variant { PB_VARIANT_none, PB_VARIANTS(PB_VARIANT_NAME) PB_VARIANT_COUNT };
#undef PB_VARIANT_NAME

/* The one that this program is; PB_VARIANT_none unless chosen. */
extern int pb_variant_chosen;

bool pb_variant_by_name(const char *name, int *variant);

/* Lists the names, one a line. */
void pb_variants_print(void);

#endif
