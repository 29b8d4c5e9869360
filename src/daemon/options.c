/* The command line. */
#include "daemon/options.h"

#include <getopt.h>
#include <stdio.h>

const char options_help[] =
    "usage: brinkd [--config FILE]         run, in the foreground\n"
    "       brinkd --verify [FILE]         check the config, list every problem\n"
    "       brinkd --effective [FILE]      print the config as understood\n"
    "       brinkd --help | --version\n"
    "The config is /etc/brink.conf, see brink.conf(5). Signals: HUP reads it again, TERM ends.\n"
    "Exit codes: 0, 64 wrong usage, 66 no config, 69 another daemon runs, 71 system, 78 bad "
    "config.\n";

static int usage(const char *what, const char *which) {
    fprintf(stderr, "brinkd: %s%s; see brinkd --help\n", what, which);
    return OPTIONS_E_USAGE;
}

int options_parse(int argc, char **argv, struct options *ret) {
    static const struct option list[] = {{"config", required_argument, NULL, 'c'},
                                         {"verify", no_argument, NULL, OPTIONS_VERIFY},
                                         {"effective", no_argument, NULL, OPTIONS_EFFECTIVE},
                                         {"help", no_argument, NULL, OPTIONS_HELP},
                                         {"version", no_argument, NULL, OPTIONS_VERSION},
                                         {NULL, 0, NULL, 0}};
    struct options options = {OPTIONS_RUN, "/etc/brink.conf"};
    int option;

    while ((option = getopt_long(argc, argv, ":", list, NULL)) != -1) {
        if (option == 'c')
            options.config_path = optarg;
        else if (option == ':')
            return usage("a file must follow ", argv[optind - 1]);
        else if (option == '?')
            return usage("unknown option ", argv[optind - 1]);
        else if (options.task != OPTIONS_RUN)
            return usage("one task at a time, not also ", argv[optind - 1]);
        else
            options.task = (enum options_task)option;
    }
    if (optind < argc && options.task != OPTIONS_VERIFY && options.task != OPTIONS_EFFECTIVE)
        return usage("nothing is known to be done with ", argv[optind]);
    if (optind < argc)
        options.config_path = argv[optind++];
    if (optind < argc)
        return usage("one file at a time, not also ", argv[optind]);
    *ret = options;
    return 0;
}
