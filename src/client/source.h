/* Where the status comes from: the file, or brinkd's socket. All return 0 or trouble's code. */
#pragma once

#include "client/trouble.h"

#include <jansson.h>
#include <stddef.h>

enum { SOURCE_MOST = 65536 }; /* bytes of a status or of an answer; brinkd stays far below */

/* One status: the object, the bytes it came as, and what to call its source in messages. */
struct source {
    char *text;       /* what was read; object_text points into it */
    json_t *envelope; /* what text holds; NULL = nothing */
    const json_t *object;
    const char *object_text;
    size_t object_length;
    const char *where; /* borrowed */
};

/* Reads the file. EX_NOINPUT absent, EX_NOPERM, EX_DATAERR damaged. */
int source_file(const char *path, struct source *ret, struct trouble *trouble);

/* Asks the socket. EX_UNAVAILABLE nobody there, EX_NOPERM, EX_PROTOCOL for an answer that is none.
 */
int source_socket(const char *path, struct source *ret, struct trouble *trouble);

/* An open connection that follows: the answer to a first `status`, then each report. */
struct follower;
int follower_open(const char *path, struct follower **ret, struct trouble *trouble);

/* Waits for the next status, at most wait_s. EX_UNAVAILABLE when brinkd has gone or fallen silent.
 */
int follower_next(struct follower *follower, double wait_s, struct source *ret,
                  struct trouble *trouble);

/* NULL and empty are fine. */
void follower_free(struct follower *follower);
void source_done(struct source *source);
