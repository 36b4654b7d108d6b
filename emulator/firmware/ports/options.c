#include "options.h"

#include <errno.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "bytes.h"
#include "variant.h"

static void fail(const struct options *options, const char *option, const char *value, const char *rule)
{
    fprintf(stderr, "%s: %s %s: %s\n", options->program, option, value, rule);
    exit(2);
}

static void print_help(const struct options *options, const char *purpose, bool takes_port)
{
    printf("Usage: %s [options]\n%s\n\n", options->program, purpose);
    if (takes_port)
        printf("  --port N          port to listen on; 0 lets the system choose (default 0)\n"
               "  --bind ADDRESS    IPv4 address to listen on (default 127.0.0.1)\n");
    printf("  --address N       module address, 0 for none (default 1); a stored one goes before it\n"
           "  --hardware-id HEX sixteen digits (default: a1500000 and the address)\n"
           "  --seed N          seed of the random numbers (default 1)\n"
           "  --storage FILE    keep epoch, address and groups there (default: until the process ends)\n"
#ifdef PB_WITH_VARIANTS
           "  --variant NAME    be this deliberately broken module\n"
           "  --variants        list them\n"
#endif
           "  --verbose         tell on standard error what happens\n"
           "  --help            show this\n\n"
           "The module is emulated: it moves nothing. Ends at the end of its input, on SIGINT and on SIGTERM.\n");
}

static uint64_t read_number(const struct options *options, const char *option, const char *value, uint64_t last)
{
    char *end;
    errno = 0;
    const unsigned long long number = strtoull(value, &end, 0);
    if (value[0] < '0' || value[0] > '9' || *end != '\0' || errno != 0 || number > last) {
        char rule[64];
        snprintf(rule, sizeof rule, "a number from 0 to %llu is needed", (unsigned long long)last);
        fail(options, option, value, rule);
    }
    return number;
}

static void read_hardware_id(struct options *options, const char *value)
{
    static const char RULE[] = "sixteen hexadecimal digits are needed";
    if (strlen(value) != 2 * PB_HARDWARE_ID_SIZE || strspn(value, "0123456789abcdefABCDEF") != strlen(value))
        fail(options, "--hardware-id", value, RULE);
    for (unsigned i = 0; i < PB_HARDWARE_ID_SIZE; i++) {
        const char pair[] = {value[2 * i], value[2 * i + 1], '\0'};
        options->hardware_id[i] = (uint8_t)strtoul(pair, NULL, 16);
    }
    options->has_hardware_id = true;
}

#ifdef PB_WITH_VARIANTS
static void choose_variant(const struct options *options, const char *value)
{
    if (!pb_variant_by_name(value, &pb_variant_chosen))
        fail(options, "--variant", value, "no such variant; --variants lists them");
}
#endif

/* True: the option and its value were taken. */
static bool take_valued(struct options *options, const char *option, const char *value, bool takes_port)
{
    if (strcmp(option, "--address") == 0)
        options->address = (uint32_t)read_number(options, option, value, PB_ADDRESS_UNICAST_LAST);
    else if (strcmp(option, "--hardware-id") == 0)
        read_hardware_id(options, value);
    else if (strcmp(option, "--seed") == 0)
        options->seed = read_number(options, option, value, UINT64_MAX);
    else if (strcmp(option, "--storage") == 0)
        options->storage_path = value;
#ifdef PB_WITH_VARIANTS
    else if (strcmp(option, "--variant") == 0)
        choose_variant(options, value);
#endif
    else if (takes_port && strcmp(option, "--port") == 0)
        options->port = (uint16_t)read_number(options, option, value, UINT16_MAX);
    else if (takes_port && strcmp(option, "--bind") == 0)
        options->bind_address = value;
    else
        return false;
    return true;
}

void options_read(struct options *options, int argc, char **argv, const char *purpose, bool takes_port)
{
    memset(options, 0, sizeof *options);
    options->program = argc > 0 ? argv[0] : "module";
    options->address = 1;
    options->seed = 1;
    options->bind_address = "127.0.0.1";
    for (int i = 1; i < argc; i++) {
        if (strcmp(argv[i], "--help") == 0) {
            print_help(options, purpose, takes_port);
            exit(0);
        }
#ifdef PB_WITH_VARIANTS
        if (strcmp(argv[i], "--variants") == 0) {
            pb_variants_print();
            exit(0);
        }
#endif
        if (strcmp(argv[i], "--verbose") == 0) {
            options->verbose = true;
            continue;
        }
        if (!take_valued(options, argv[i], i + 1 < argc ? argv[i + 1] : "0", takes_port))
            fail(options, "argument", argv[i], "not known; --help shows what is");
        if (++i == argc)
            fail(options, argv[i - 1], "(nothing)", "a value is needed");
    }
}

void options_configure(const struct options *options, struct pb_config *config)
{
    pb_default_config(config);
    config->address = options->address;
    if (options->has_hardware_id)
        memcpy(config->hardware_id, options->hardware_id, PB_HARDWARE_ID_SIZE);
    else
        pb_put(config->hardware_id + 4, 4, options->address);
}
