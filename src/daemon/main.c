/* brinkd: the battery daemon. */
#include "daemon/config.h"
#include "daemon/manager.h"
#include "daemon/options.h"
#include "util/cleanup.h"
#include "util/version.h"

#include <errno.h>
#include <stdio.h>
#include <sysexits.h>

static void say_problems(const struct config_problems *problems) {
    fputs(problems->text, stderr);
    fprintf(stderr, "brinkd: %zu problem%s\n", problems->n, problems->n == 1 ? "" : "s");
}

/* --verify and --effective: nothing is opened but the config and its cell tables. */
static int look_at_config(const struct options *options) {
    scoped(free_p) struct config_problems *problems = malloc(sizeof(*problems));
    scoped(free_p) struct config *config = malloc(sizeof(*config));

    if (!problems || !config)
        return EX_OSERR;
    int r = config_load(options->config_path, config, problems);
    if (r != 0) {
        say_problems(problems);
        return r == -ENOENT || r == -EACCES ? EX_NOINPUT : EX_CONFIG;
    }
    if (options->task == OPTIONS_EFFECTIVE)
        config_print(config, stdout);
    else
        printf("%s is good\n", options->config_path);
    return fflush(stdout) == 0 ? EX_OK : EX_IOERR;
}

static int run(const struct options *options) {
    scoped(manager_free_p) struct manager *manager = NULL;

    int r = manager_new(&manager, options->config_path);
    return r != 0 ? r : manager_run(manager);
}

int main(int argc, char **argv) {
    struct options options;

    if (options_parse(argc, argv, &options) != 0)
        return EX_USAGE;
    switch (options.task) {
    case OPTIONS_HELP:
        fputs(options_help, stdout);
        return EX_OK;
    case OPTIONS_VERSION:
        puts("brinkd " BRINK_VERSION);
        return EX_OK;
    case OPTIONS_RUN:
        return run(&options);
    default:
        return look_at_config(&options);
    }
}
