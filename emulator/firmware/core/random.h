/* A seeded generator (xorshift64*): one to a module, so that a run can be repeated. */
#ifndef PB_RANDOM_H
#define PB_RANDOM_H

#include <stdint.h>

struct pb_random {
    uint64_t state;
};

void pb_random_seed(struct pb_random *random, uint64_t seed);

/* Uniform over 0 .. limit, both included. */
uint32_t pb_random_up_to(struct pb_random *random, uint32_t limit);

#endif
