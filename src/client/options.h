/* The command line of brink: one command, its FORMAT, and options in any order. */
#pragma once

#include "client/trouble.h"

#include <stdbool.h>

enum command { COMMAND_PAGE, COMMAND_LINE, COMMAND_CHECK, COMMAND_RAW };

struct options {
    enum command command;
    const char *format; /* of `line`; NULL = the default one */
    const char *status; /* path of the status file */
    const char *socket; /* path of the socket */
    bool from_socket;   /* ask the socket, not the file */
    bool follow, help, version;
};

/* ret borrows from argv. Returns 0 or trouble's code; also then ret->command is what was read so
 * far, because `check` tells its faults its own way. */
int options_read(int argc, char *const *argv, struct options *ret, struct trouble *trouble);

/* The help of `brink --help`. */
const char *brink_help(void);
