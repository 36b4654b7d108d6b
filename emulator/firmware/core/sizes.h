/* How much room a build has. The configuration declares at most this much; these set the memory a module takes. */
#ifndef PB_SIZES_H
#define PB_SIZES_H

#include "contract.h"

#ifdef PB_PROFILE_SMALLEST
#define PB_MAX_SESSIONS PB_SIZE_SESSIONS_MIN
#define PB_MAX_NUMBERS PB_SIZE_NUMBERS_MIN
#define PB_MAX_OUTCOMES PB_SIZE_OUTCOMES_MIN
#define PB_MAX_FAULTS PB_SIZE_FAULTS_MIN
#define PB_MAX_ANSWERS PB_SIZE_ANSWERS_MIN
#define PB_MAX_GROUPS 1
#define PB_MAX_FACES 1
#define PB_MAX_TRUTH 1
#else
#define PB_MAX_SESSIONS 5
#define PB_MAX_NUMBERS 10
#define PB_MAX_OUTCOMES 8
#define PB_MAX_FAULTS 10
#define PB_MAX_ANSWERS 32
#define PB_MAX_GROUPS 8
#define PB_MAX_FACES 4
#define PB_MAX_TRUTH 64
#endif

#define PB_MAX_TEMPERATURES 4

#endif
