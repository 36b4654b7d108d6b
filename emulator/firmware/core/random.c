#include "random.h"

void pb_random_seed(struct pb_random *random, uint64_t seed)
{
    /* One round of mixing, so that neighbouring seeds part at once; zero would stay zero for ever. */
    seed += 0x9E3779B97F4A7C15u;
    seed = (seed ^ seed >> 30) * 0xBF58476D1CE4E5B9u;
    seed = (seed ^ seed >> 27) * 0x94D049BB133111EBu;
    seed ^= seed >> 31;
    random->state = seed != 0 ? seed : 1;
}

uint32_t pb_random_up_to(struct pb_random *random, uint32_t limit)
{
    uint64_t state = random->state;
    state ^= state >> 12;
    state ^= state << 25;
    state ^= state >> 27;
    random->state = state;
    const uint64_t drawn = (state * 0x2545F4914F6CDD1Du) >> 32;
    return (uint32_t)(drawn * ((uint64_t)limit + 1) >> 32);
}
