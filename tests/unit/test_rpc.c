/* The protocol of the socket, without the socket. */
#include "publish/rpc.h"

#include <jansson.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

#define COUNT(array)  (sizeof(array) / sizeof((array)[0]))
#define STATUS        "{\"brink\":1}"
#define RESULT(id)    "{\"jsonrpc\":\"2.0\",\"result\":" STATUS ",\"id\":" id "}"
#define FOLLOWING(id) "{\"jsonrpc\":\"2.0\",\"result\":{\"following\":true},\"id\":" id "}"
#define REQUEST(id)   "{\"jsonrpc\":\"2.0\",\"method\":\"status\",\"id\":" id "}"
#define ERROR(code, message, id)                                                                   \
    "{\"jsonrpc\":\"2.0\",\"error\":{\"code\":" code ",\"message\":\"" message "\"},\"id\":" id "}"
#define PARSE       ERROR("-32700", "Parse error", "null")
#define INVALID(id) ERROR("-32600", "Invalid Request", id)

static struct rpc_answer ask(const char *line, char *buf, size_t size) {
    struct rpc_answer answer = rpc_answer(line, strlen(line), STATUS, strlen(STATUS), buf, size);

    if (answer.length > 0) {
        assert_int_equal(buf[answer.length - 1], '\n');
        buf[answer.length - 1] = '\0';
        assert_null(strchr(buf, '\n'));
    } else {
        buf[0] = '\0';
    }
    return answer;
}

/* `data` is ours, for people; the specification leaves it open. Every error must carry it. */
static void take_data(json_t *response) {
    json_t *error = json_object_get(response, "error");

    if (!error)
        return;
    assert_true(json_string_length(json_object_get(error, "data")) > 0);
    json_object_del(error, "data");
}

static void assert_answer(const char *line, const char *want) {
    char buf[8192];

    ask(line, buf, sizeof(buf));
    if (!want) {
        assert_string_equal(buf, "");
        return;
    }
    json_t *got = json_loads(buf, JSON_REJECT_DUPLICATES | JSON_ALLOW_NUL, NULL),
           *expected = json_loads(want, JSON_ALLOW_NUL, NULL);
    assert_non_null(got);
    assert_non_null(expected);
    if (json_is_object(got))
        take_data(got);
    for (size_t i = 0; i < json_array_size(got); i++)
        take_data(json_array_get(got, i));
    if (!json_equal(got, expected))
        fail_msg("%s\n  gives  %s\n  not    %s", line, buf, want);
    json_decref(got);
    json_decref(expected);
}

struct exchange {
    const char *line, *want; /* NULL: no answer */
};

static void check(const struct exchange *exchanges, size_t n) {
    for (size_t i = 0; i < n; i++)
        assert_answer(exchanges[i].line, exchanges[i].want);
}

/* JSON-RPC 2.0 Specification (2010-03-26, updated 2013-01-04), section 7 "Examples", from memory,
 * with `status` and `follow` for the methods there, and without parameters, which ours do not take.
 */
static void test_examples_of_the_specification(void **state) {
    static const struct exchange exchanges[] = {
        /* rpc call with positional parameters; with named parameters */
        {"{\"jsonrpc\": \"2.0\", \"method\": \"status\", \"params\": [], \"id\": 1}", RESULT("1")},
        {"{\"jsonrpc\": \"2.0\", \"method\": \"status\", \"params\": {}, \"id\": 3}", RESULT("3")},
        /* a notification; of a method that does not exist */
        {"{\"jsonrpc\": \"2.0\", \"method\": \"status\", \"params\": [1,2,3,4,5]}", NULL},
        {"{\"jsonrpc\": \"2.0\", \"method\": \"foobar\"}", NULL},
        /* rpc call of non-existent method */
        {"{\"jsonrpc\": \"2.0\", \"method\": \"foobar\", \"id\": \"1\"}",
         ERROR("-32601", "Method not found", "\"1\"")},
        /* rpc call with invalid JSON */
        {"{\"jsonrpc\": \"2.0\", \"method\": \"foobar, \"params\": \"bar\", \"baz]", PARSE},
        /* rpc call with invalid Request object */
        {"{\"jsonrpc\": \"2.0\", \"method\": 1, \"params\": \"bar\"}", INVALID("null")},
        /* rpc call Batch, invalid JSON */
        {"[{\"jsonrpc\": \"2.0\", \"method\": \"sum\", \"params\": [1,2,4], \"id\": \"1\"},"
         "{\"jsonrpc\": \"2.0\", \"method\"]",
         PARSE},
        /* rpc call with an empty Array */
        {"[]", INVALID("null")},
        /* rpc call with an invalid Batch (but not empty); with invalid Batch */
        {"[1]", "[" INVALID("null") "]"},
        {"[1,2,3]", "[" INVALID("null") "," INVALID("null") "," INVALID("null") "]"},
        /* rpc call Batch */
        {"[{\"jsonrpc\": \"2.0\", \"method\": \"status\", \"id\": \"1\"},"
         "{\"jsonrpc\": \"2.0\", \"method\": \"status\", \"params\": [7]},"
         "{\"jsonrpc\": \"2.0\", \"method\": \"follow\", \"id\": \"2\"},"
         "{\"foo\": \"boo\"},"
         "{\"jsonrpc\": \"2.0\", \"method\": \"foo.get\", \"params\": {\"name\": \"myself\"}, "
         "\"id\": \"5\"},"
         "{\"jsonrpc\": \"2.0\", \"method\": \"status\", \"id\": \"9\"}]",
         "[" RESULT("\"1\"") "," FOLLOWING("\"2\"") "," INVALID("null") "," ERROR(
             "-32601", "Method not found", "\"5\"") "," RESULT("\"9\"") "]"},
        /* rpc call Batch (all notifications) */
        {"[{\"jsonrpc\": \"2.0\", \"method\": \"notify_sum\", \"params\": [1,2,4]},"
         "{\"jsonrpc\": \"2.0\", \"method\": \"status\"}]",
         NULL},
    };

    (void)state;
    check(exchanges, COUNT(exchanges));
}

/* Section 4: id is a string, a number or null, told back as it came; anything else is invalid. */
static void test_ids(void **state) {
    static const struct exchange exchanges[] = {
        {REQUEST("0"), RESULT("0")},
        {REQUEST("-9007199254740991"), RESULT("-9007199254740991")},
        {REQUEST("1.5"), RESULT("1.5")},
        {REQUEST("null"), RESULT("null")},
        {REQUEST("\"\""), RESULT("\"\"")},
        {REQUEST("\"a\\u0000b\""), RESULT("\"a\\u0000b\"")},
        {REQUEST("\"\\ud834\\udd1e \\\" \\\\ \xc3\xa9\""),
         RESULT("\"\xf0\x9d\x84\x9e \\\" \\\\ \xc3\xa9\"")},
        {REQUEST("true"), INVALID("null")},
        {REQUEST("[1]"), INVALID("null")},
        {REQUEST("{}"), INVALID("null")},
        {REQUEST("1e999"), PARSE},
        {REQUEST("99999999999999999999999"), PARSE},
        /* an invalid request whose id can be told */
        {"{\"jsonrpc\":\"1.0\",\"method\":\"status\",\"id\":7}", INVALID("7")},
    };

    (void)state;
    check(exchanges, COUNT(exchanges));
}

static void test_what_is_no_request(void **state) {
    static const struct exchange exchanges[] = {
        {"1", INVALID("null")},
        {"null", INVALID("null")},
        {"\"status\"", INVALID("null")},
        {"{}", INVALID("null")},
        {"{\"method\":\"status\",\"id\":1}", INVALID("1")},
        {"{\"jsonrpc\":2.0,\"method\":\"status\",\"id\":1}", INVALID("1")},
        {"{\"jsonrpc\":\"2.0\\u0000\",\"method\":\"status\",\"id\":1}", INVALID("1")},
        {"{\"jsonrpc\":\"2.0\",\"id\":1}", INVALID("1")},
        {"{\"jsonrpc\":\"2.0\",\"method\":null,\"id\":1}", INVALID("1")},
        {"{\"jsonrpc\":\"2.0\",\"method\":\"status\",\"params\":null,\"id\":1}", INVALID("1")},
        {"{\"jsonrpc\":\"2.0\",\"method\":\"status\",\"params\":1,\"id\":1}", INVALID("1")},
        {"{\"jsonrpc\":\"2.0\",\"method\":\"status\\u0000\",\"id\":1}",
         ERROR("-32601", "Method not found", "1")},
        {"{\"jsonrpc\":\"2.0\",\"method\":\"Status\",\"id\":1}",
         ERROR("-32601", "Method not found", "1")},
        {"{\"jsonrpc\":\"2.0\",\"method\":\"status\",\"params\":[1],\"id\":1}",
         ERROR("-32602", "Invalid params", "1")},
        {"{\"jsonrpc\":\"2.0\",\"method\":\"follow\",\"params\":{\"a\":1},\"id\":1}",
         ERROR("-32602", "Invalid params", "1")},
        {"{\"jsonrpc\":\"2.0\",\"method\":\"status\",\"id\":1}{", PARSE},
        {"{\"jsonrpc\":\"2.0\",\"method\":\"status\",\"id\":1,\"id\":2}", PARSE},
        {"{'jsonrpc':'2.0'}", PARSE},
        {"\xff\xfe", PARSE},
        {"{\"jsonrpc\":\"2.0\",\"method\":\"\xff\",\"id\":1}", PARSE},
        {"{\"jsonrpc\":\"2.0\",\"method\":\"status\",\"id\":1}\r", RESULT("1")},
        {" \t{\"jsonrpc\":\"2.0\",\"method\":\"status\",\"more\":[{}],\"id\":1}", RESULT("1")},
        {"", PARSE},
    };

    (void)state;
    check(exchanges, COUNT(exchanges));
}

static void test_follow_is_told_to_the_server(void **state) {
    static const struct {
        const char *line;
        bool follow, answered;
    } cases[] = {
        {"{\"jsonrpc\":\"2.0\",\"method\":\"follow\",\"id\":1}", true, true},
        {"{\"jsonrpc\":\"2.0\",\"method\":\"follow\"}", true, false},
        {"[{\"jsonrpc\":\"2.0\",\"method\":\"follow\"}," REQUEST("1") "]", true, true},
        {REQUEST("1"), false, true},
        {"{\"jsonrpc\":\"2.0\",\"method\":\"follow\",\"params\":[1],\"id\":1}", false, true},
        {"{\"jsonrpc\":\"2.0\",\"method\":\"follow\",\"id\":[]}", false, true},
        {"{\"jsonrpc\":\"2.0\",\"method\":\"follow\"", false, true},
    };
    char buf[1024];

    (void)state;
    for (size_t i = 0; i < COUNT(cases); i++) {
        struct rpc_answer answer = ask(cases[i].line, buf, sizeof(buf));
        assert_int_equal(answer.follow, cases[i].follow);
        assert_int_equal(answer.length > 0, cases[i].answered);
    }
}

static void test_before_the_first_report(void **state) {
    static const char line[] = REQUEST("1");
    char buf[1024];
    struct rpc_answer answer = rpc_answer(line, sizeof(line) - 1, NULL, 0, buf, sizeof(buf));

    (void)state;
    buf[answer.length] = '\0';
    assert_non_null(strstr(buf, "\"code\":-32001,"));
    assert_non_null(strstr(buf, "\"id\":1}"));
}

/* Exactly RPC_DEPTH_MAX deep is taken, one more is not; brackets inside strings do not count. */
static void test_depth(void **state) {
    char line[4096];

    (void)state;
    for (int extra = 0; extra < 2; extra++) {
        int depth = RPC_DEPTH_MAX - 1 + extra;
        size_t n = (size_t)sprintf(line, "{\"jsonrpc\":\"2.0\",\"method\":\"status\",\"x\":");
        for (int i = 0; i < depth; i++)
            line[n++] = '[';
        for (int i = 0; i < depth; i++)
            line[n++] = ']';
        strcpy(line + n, ",\"id\":1}");
        assert_answer(line, extra ? PARSE : RESULT("1"));
    }
    assert_answer(REQUEST("\"[[[[[[[[[[[[[[[[[[[[[[[[[[\\\"[[[{{{\""),
                  RESULT("\"[[[[[[[[[[[[[[[[[[[[[[[[[[\\\"[[[{{{\""));
    memset(line, '[', sizeof(line));
    char buf[1024];
    struct rpc_answer answer = rpc_answer(line, sizeof(line), NULL, 0, buf, sizeof(buf));
    assert_true(answer.length > 0);
    assert_non_null(memmem(buf, answer.length, "-32700", 6));
}

static void test_batch_size(void **state) {
    char line[4096] = "[", want[4096] = "[";

    (void)state;
    for (int i = 0; i < RPC_BATCH_MAX; i++) {
        strcat(line, i ? "," REQUEST("1") : REQUEST("1"));
        strcat(want, i ? "," RESULT("1") : RESULT("1"));
    }
    size_t n = strlen(line);
    strcat(line, "]");
    strcat(want, "]");
    assert_answer(line, want);
    strcpy(line + n, ",1]");
    assert_answer(line, INVALID("null"));
}

/* An answer that does not fit is replaced by an error that does, whatever the size. */
static void test_answer_too_long(void **state) {
    char status[2000], buf[4096], line[256];

    (void)state;
    memset(status, '1', sizeof(status));
    snprintf(line, sizeof(line), "[%s,%s]", "{\"jsonrpc\":\"2.0\",\"method\":\"follow\"}",
             REQUEST("1"));
    for (size_t size = RPC_ERROR_MAX; size < sizeof(buf); size += 7) {
        struct rpc_answer answer =
            rpc_answer(line, strlen(line), status, sizeof(status), buf, size);
        assert_true(answer.length > 0 && answer.length <= size);
        assert_int_equal(buf[answer.length - 1], '\n');
        bool whole = answer.length > sizeof(status);
        assert_int_equal(whole, size >= sizeof(status) + 38);
        assert_int_equal(answer.follow, whole);
        assert_int_equal(!whole, memmem(buf, answer.length, "-32002", 6) != NULL);
    }
}

static void test_every_error_line_fits_and_is_json(void **state) {
    static const enum rpc_code codes[] = {RPC_PARSE,    RPC_REQUEST, RPC_METHOD, RPC_PARAMS,
                                          RPC_INTERNAL, RPC_BUSY,    RPC_EARLY,  RPC_LENGTH};
    char buf[RPC_ERROR_MAX];

    (void)state;
    for (size_t i = 0; i < COUNT(codes); i++) {
        size_t length = rpc_error(codes[i], buf, sizeof(buf));
        assert_true(length > 0);
        json_t *root = json_loadb(buf, length, 0, NULL);
        assert_non_null(root);
        assert_int_equal(
            json_integer_value(json_object_get(json_object_get(root, "error"), "code")), codes[i]);
        assert_true(json_is_null(json_object_get(root, "id")));
        json_decref(root);
    }
}

static int budget;

static void *scarce_malloc(size_t size) {
    return budget-- > 0 ? malloc(size) : NULL;
}

/* Memory runs out at each place in turn: one error or the whole answer, nothing between. Within a
 * string or number jansson calls it bad syntax, so a parse error must do for some of them. */
static void test_memory_runs_out(void **state) {
    static const char line[] = "[" REQUEST("\"one\"") "," REQUEST("2.5") "]";
    char buf[4096];
    int internal = 0;
    bool whole = false;

    (void)state;
    for (int most = 0; !whole; most++) {
        budget = most;
        json_set_alloc_funcs(scarce_malloc, free);
        struct rpc_answer answer = ask(line, buf, sizeof(buf));
        json_set_alloc_funcs(malloc, free);
        assert_true(answer.length > 0);
        whole = budget >= 0;
        internal += strstr(buf, "\"code\":-32603,") != NULL;
        if (whole)
            assert_answer(line, "[" RESULT("\"one\"") "," RESULT("2.5") "]");
        else if (!strstr(buf, "\"code\":-32603,") && !strstr(buf, "\"code\":-32700,"))
            fail_msg("after %d allocations: %s", most, buf);
        assert_true(most < 1000);
    }
    assert_true(internal > 5);
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_examples_of_the_specification),
        cmocka_unit_test(test_ids),
        cmocka_unit_test(test_what_is_no_request),
        cmocka_unit_test(test_follow_is_told_to_the_server),
        cmocka_unit_test(test_before_the_first_report),
        cmocka_unit_test(test_depth),
        cmocka_unit_test(test_batch_size),
        cmocka_unit_test(test_answer_too_long),
        cmocka_unit_test(test_every_error_line_fits_and_is_json),
        cmocka_unit_test(test_memory_runs_out),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
