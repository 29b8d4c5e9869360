/* brinkd's command line, see brinkd(8). */
#pragma once

enum options_task { OPTIONS_RUN, OPTIONS_VERIFY, OPTIONS_EFFECTIVE, OPTIONS_HELP, OPTIONS_VERSION };

struct options {
    enum options_task task;
    const char *config_path;
};

enum options_error { OPTIONS_E_USAGE = 1 };

/* Returns 0, or OPTIONS_E_USAGE after saying on stderr what is wrong. */
int options_parse(int argc, char **argv, struct options *ret);

extern const char options_help[];
