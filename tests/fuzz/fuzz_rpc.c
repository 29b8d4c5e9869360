/* Any line a client may send: what comes back is one line of valid JSON-RPC that fits, or nothing;
 * and nothing is followed that was not told so. */
#include "publish/rpc.h"

#include <jansson.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>

static const char status[] = "{\"brink\":1,\"charge\":0.6340}";

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

static void must(int holds) {
    if (!holds)
        abort();
}

static void check_response(const json_t *response) {
    const json_t *error = json_object_get(response, "error");
    const json_t *version = json_object_get(response, "jsonrpc");
    const json_t *id = json_object_get(response, "id");

    must(json_is_string(version) && strcmp(json_string_value(version), "2.0") == 0);
    must(!error != !json_object_get(response, "result"));
    must(json_is_null(id) || json_is_number(id) || json_is_string(id));
    must(!error || (json_is_integer(json_object_get(error, "code")) &&
                    json_is_string(json_object_get(error, "message"))));
}

static void check_line(const char *line, size_t length) {
    must(line[length - 1] == '\n' && memchr(line, '\n', length) == line + length - 1);
    json_t *root = json_loadb(line, length, JSON_REJECT_DUPLICATES | JSON_ALLOW_NUL, NULL);
    must(root != NULL);
    must(json_is_object(root) || json_array_size(root) > 0);
    if (json_is_object(root))
        check_response(root);
    for (size_t i = 0; i < json_array_size(root); i++)
        check_response(json_array_get(root, i));
    json_decref(root);
}

static struct rpc_answer ask(const char *line, size_t length, size_t room) {
    char *buf = malloc(room);

    must(buf != NULL);
    struct rpc_answer answer = rpc_answer(line, length, status, sizeof(status) - 1, buf, room);
    must(answer.length <= room);
    if (answer.length > 0)
        check_line(buf, answer.length);
    free(buf);
    return answer;
}

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size) {
    const char *line = (const char *)data;

    if (memchr(line, '\n', size))
        return -1; /* the server cuts at newlines */
    struct rpc_answer wide = ask(line, size, 65536);
    struct rpc_answer narrow = ask(line, size, RPC_ERROR_MAX);
    must(!narrow.follow || wide.follow);
    must(wide.length >= RPC_ERROR_MAX || narrow.length == wide.length);
    return 0;
}
