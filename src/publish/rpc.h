/* The socket's protocol, without the socket: one request line in, one answer line out. JSON-RPC 2.0
 * (specification of 2010-03-26, updated 2013-01-04) with its standard errors, batches and
 * notifications; one object or batch a line.
 *
 * Methods, neither takes parameters:
 *   status   the newest report, see brink-status(7)
 *   follow   {"following":true}; from then on the peer is sent a `report` notification at each
 * report
 */
#pragma once

#include <stdbool.h>
#include <stddef.h>

enum {
    RPC_DEPTH_MAX = 16,  /* arrays and objects within each other */
    RPC_BATCH_MAX = 16,  /* requests in one batch */
    RPC_ERROR_MAX = 512, /* an answer of rpc_error fits into this */
};

/* Error codes: the specification's, and ours out of the range it leaves to servers. */
enum rpc_code {
    RPC_PARSE = -32700,
    RPC_REQUEST = -32600,
    RPC_METHOD = -32601,
    RPC_PARAMS = -32602,
    RPC_INTERNAL = -32603,
    RPC_BUSY = -32000,   /* too many clients */
    RPC_EARLY = -32001,  /* no report yet */
    RPC_LENGTH = -32002, /* the request line or its answer is too long */
};

struct rpc_answer {
    size_t length; /* of the answer in buf with its newline; 0 = nothing to answer */
    bool follow;   /* the peer asked to follow */
};

/* line: without its newline, any bytes. status: the newest report, NULL before the first. An answer
 * longer than size is replaced by the error RPC_LENGTH, one for which memory ran out by
 * RPC_INTERNAL; size >= RPC_ERROR_MAX. */
struct rpc_answer rpc_answer(const char *line, size_t length, const char *status,
                             size_t status_length, char *buf, size_t size);

/* An error line with id null, as for what never became a request. Returns its length. */
size_t rpc_error(enum rpc_code code, char *buf, size_t size);
