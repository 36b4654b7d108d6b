/* One module and nothing else, so that `make size` can tell what it takes. */
#include "module.h"

extern struct pb_module one_module;
struct pb_module one_module;
