/* JSON-RPC 2.0 over one line of text. jansson parses; what jansson would have to recurse into too
 * deeply is turned away before. */
#include "publish/rpc.h"

#include "publish/jsonw.h"
#include "util/cleanup.h"

#include <jansson.h>
#include <string.h>

#define COUNT(array) (sizeof(array) / sizeof((array)[0]))

struct call {
    const char *status;
    size_t status_length;
    bool follow;
    bool no_memory;
};

static const struct {
    enum rpc_code code;
    const char *message, *data;
} errors[] = {
    {RPC_PARSE, "Parse error",
     "write one JSON object, or one array of them, a line; nested at most 16 deep"},
    {RPC_REQUEST, "Invalid Request",
     "a request looks like {\"jsonrpc\":\"2.0\",\"method\":\"status\",\"id\":1}, a batch holds 1 "
     "to 16 of them"},
    {RPC_METHOD, "Method not found", "methods are status and follow"},
    {RPC_PARAMS, "Invalid params", "status and follow take no parameters: leave params out"},
    {RPC_INTERNAL, "Internal error", "the daemon is short of memory: ask again later"},
    {RPC_BUSY, "Too many clients", "no more can be served: try again when others have left"},
    {RPC_EARLY, "No report yet", "the daemon has just started: ask again, or follow"},
    {RPC_LENGTH, "Too long", "shorten the line, or ask for less in one batch"},
};

static void put_error(struct jsonw *w, enum rpc_code code) {
    size_t i = 0;

    while (i < COUNT(errors) - 1 && errors[i].code != code)
        i++;
    jsonw_open(w, "error", '{');
    jsonw_int(w, "code", errors[i].code);
    jsonw_text(w, "message", errors[i].message);
    jsonw_text(w, "data", errors[i].data);
    jsonw_close(w, '}');
}

static int run_status(struct call *call) {
    return call->status ? 0 : RPC_EARLY;
}

static void put_status(struct jsonw *w, const struct call *call) {
    jsonw_raw(w, "result", call->status, call->status_length);
}

static int run_follow(struct call *call) {
    call->follow = true;
    return 0;
}

static void put_follow(struct jsonw *w, const struct call *call) {
    (void)call;
    jsonw_open(w, "result", '{');
    jsonw_bool(w, "following", true);
    jsonw_close(w, '}');
}

struct method {
    const char *name;
    int (*run)(struct call *call); /* 0 or an enum rpc_code */
    void (*put_result)(struct jsonw *w, const struct call *call);
};

static const struct method methods[] = {
    {"status", run_status, put_status},
    {"follow", run_follow, put_follow},
};

/* By length as well: a string may hold a NUL. */
static bool text_is(const json_t *text, const char *want) {
    return json_is_string(text) && json_string_length(text) == strlen(want) &&
           memcmp(json_string_value(text), want, strlen(want)) == 0;
}

static const struct method *find_method(const json_t *name) {
    for (size_t i = 0; i < COUNT(methods); i++)
        if (text_is(name, methods[i].name))
            return &methods[i];
    return NULL;
}

static bool id_is_valid(const json_t *id) {
    return json_is_string(id) || json_is_number(id) || json_is_null(id);
}

static bool request_is_valid(const json_t *request) {
    const json_t *params = json_object_get(request, "params"), *id = json_object_get(request, "id");

    return text_is(json_object_get(request, "jsonrpc"), "2.0") &&
           json_is_string(json_object_get(request, "method")) &&
           (!params || json_is_array(params) || json_is_object(params)) && (!id || id_is_valid(id));
}

static bool has_params(const json_t *request) {
    const json_t *params = json_object_get(request, "params");

    return json_array_size(params) > 0 || json_object_size(params) > 0;
}

/* Returns 0 or an enum rpc_code; ret_method is set with 0. */
static int run(const json_t *request, struct call *call, const struct method **ret_method) {
    if (!request_is_valid(request))
        return RPC_REQUEST;
    const struct method *method = find_method(json_object_get(request, "method"));
    if (!method)
        return RPC_METHOD;
    if (has_params(request))
        return RPC_PARAMS;
    int code = method->run(call);
    if (code == 0)
        *ret_method = method;
    return code;
}

static void put_id(struct jsonw *w, const json_t *id, struct call *call) {
    if (!id_is_valid(id)) {
        jsonw_null(w, "id");
        return;
    }
    scoped(free_p) char *text = json_dumps(id, JSON_ENCODE_ANY | JSON_COMPACT);
    if (text)
        jsonw_raw(w, "id", text, strlen(text));
    else
        call->no_memory = true;
}

/* Runs one request and writes its response, if it is to have one. */
static void answer_one(const json_t *request, struct call *call, struct jsonw *w) {
    const struct method *method = NULL;
    int code = run(request, call, &method);
    const json_t *id = json_object_get(request, "id");

    if (!id && code != RPC_REQUEST)
        return; /* a notification */
    jsonw_open(w, NULL, '{');
    jsonw_text(w, "jsonrpc", "2.0");
    if (method)
        method->put_result(w, call);
    else
        put_error(w, code);
    put_id(w, id, call);
    jsonw_close(w, '}');
}

static size_t end_line(struct jsonw *w) {
    size_t length = jsonw_finish(w);

    if (length > 0)
        w->buf[length++] = '\n';
    return length;
}

/* One byte is kept back for end_line. */
static struct jsonw writer(char *buf, size_t size) {
    struct jsonw w;

    jsonw_init(&w, buf, size > 0 ? size - 1 : 0);
    return w;
}

size_t rpc_error(enum rpc_code code, char *buf, size_t size) {
    struct jsonw w = writer(buf, size);

    jsonw_open(&w, NULL, '{');
    jsonw_text(&w, "jsonrpc", "2.0");
    put_error(&w, code);
    jsonw_null(&w, "id");
    jsonw_close(&w, '}');
    return end_line(&w);
}

/* Returns the answer's length, 0 when there is nothing to answer. */
static size_t answer_root(const json_t *root, struct call *call, char *buf, size_t size) {
    struct jsonw w = writer(buf, size);
    size_t n = json_array_size(root);

    if (!json_is_array(root)) {
        answer_one(root, call, &w);
    } else if (n == 0 || n > RPC_BATCH_MAX) {
        return rpc_error(RPC_REQUEST, buf, size);
    } else {
        jsonw_open(&w, NULL, '[');
        for (size_t i = 0; i < n; i++)
            answer_one(json_array_get(root, i), call, &w);
        if (!w.overflow && w.length == 1)
            return 0; /* notifications only */
        jsonw_close(&w, ']');
    }
    if (w.overflow || call->no_memory) {
        call->follow = false;
        return rpc_error(call->no_memory ? RPC_INTERNAL : RPC_LENGTH, buf, size);
    }
    return w.length > 0 ? end_line(&w) : 0;
}

static bool too_deep(const char *line, size_t length) {
    bool text = false;
    int depth = 0;

    for (size_t i = 0; i < length && depth <= RPC_DEPTH_MAX; i++) {
        char c = line[i];
        if (text && c == '\\')
            i++;
        else if (c == '"')
            text = !text;
        else if (!text && (c == '{' || c == '['))
            depth++;
        else if (!text && (c == '}' || c == ']'))
            depth--;
    }
    return depth > RPC_DEPTH_MAX;
}

static void decref_p(json_t **json) {
    json_decref(*json);
}

struct rpc_answer rpc_answer(const char *line, size_t length, const char *status,
                             size_t status_length, char *buf, size_t size) {
    const size_t flags = JSON_DECODE_ANY | JSON_ALLOW_NUL | JSON_REJECT_DUPLICATES;
    struct call call = {.status = status, .status_length = status_length};
    json_error_t error;

    if (too_deep(line, length))
        return (struct rpc_answer){.length = rpc_error(RPC_PARSE, buf, size)};
    scoped(decref_p) json_t *root = json_loadb(line, length, flags, &error);
    if (!root) {
        /* jansson names no reason for most of its failed allocations. */
        enum rpc_code code = error.text[0] ? RPC_PARSE : RPC_INTERNAL;
        return (struct rpc_answer){.length = rpc_error(code, buf, size)};
    }
    size_t answered = answer_root(root, &call, buf, size);
    return (struct rpc_answer){.length = answered, .follow = call.follow};
}
