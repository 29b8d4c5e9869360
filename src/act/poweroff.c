/* The stop request file. */
#include "act/poweroff.h"

#include "util/clock.h"
#include "util/files.h"
#include "util/text.h"

#include <errno.h>
#include <math.h>
#include <unistd.h>

enum { ORDER_SIZE = 1024 };

struct line {
    char text[ORDER_SIZE];
    size_t length;
};

static void put_text(struct line *line, const char *key, const char *value) {
    text_append(line->text, ORDER_SIZE, &line->length, ",\"%s\":%s%s%s", key, value ? "\"" : "",
                value ? value : "null", value ? "\"" : "");
}

static void put_number(struct line *line, const char *key, double value, int decimals) {
    if (isfinite(value))
        text_append(line->text, ORDER_SIZE, &line->length, ",\"%s\":%.*f", key, decimals, value);
    else
        text_append(line->text, ORDER_SIZE, &line->length, ",\"%s\":null", key);
}

int poweroff_request(const char *path, const struct poweroff_order *order) {
    struct line line = {.length = 0};
    char written[21];

    clock_rfc3339(order->t_real_us, written);
    text_append(line.text, ORDER_SIZE, &line.length, "{\"brink\":1,\"action\":\"poweroff\"");
    put_text(&line, "unit", order->unit);
    put_number(&line, "t_boot_s", (double)order->t_boot_us * 1e-6, 3);
    put_text(&line, "written", written);
    put_text(&line, "stage", order->stage);
    put_text(&line, "cause", order->cause);
    put_text(&line, "cause_pack", order->pack);
    put_number(&line, "charge", order->charge, 4);
    put_number(&line, "charge_low", order->charge_low, 4);
    put_number(&line, "terminal_V", order->terminal_V, 3);
    put_number(&line, "rest_V", order->rest_V, 3);
    put_number(&line, "left_s", order->left_s, 0);
    put_number(&line, "left_least_s", order->left_least_s, 0);
    if (!text_append(line.text, ORDER_SIZE, &line.length, "}\n"))
        return -EMSGSIZE;
    return files_replace(path, line.text, line.length, 0644, false);
}

int poweroff_withdraw(const char *path) {
    if (unlink(path) == 0)
        return 1;
    return errno == ENOENT || errno == ENOTDIR ? 0 : -errno;
}
