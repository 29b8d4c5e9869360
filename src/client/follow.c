/* Each report makes a line; it is printed when it differs from the one before. */
#include "client/follow.h"

#include "client/out.h"
#include "client/source.h"
#include "client/template.h"

#include <math.h>
#include <string.h>
#include <sysexits.h>

struct following {
    const char *format;
    bool ascii;
    double wait_s; /* for the next report */
    char printed[TEMPLATE_SIZE];
};

static int take(struct following *f, const struct source *source, struct trouble *trouble) {
    char line[TEMPLATE_SIZE];
    struct view view;

    if (view_read(source->object, source->where, f->ascii, &view, trouble) != 0) {
        trouble->code = EX_PROTOCOL;
        return trouble->code;
    }
    if (template_write(f->format, &view, line, trouble) != 0)
        return trouble->code;
    f->wait_s = out_old_after_s(&view);
    if (strcmp(line, f->printed) == 0)
        return 0;
    memcpy(f->printed, line, strlen(line) + 1);
    return out_write(line, strlen(line), trouble);
}

int follow_run(const struct options *options, bool ascii, struct trouble *trouble) {
    struct following f = {.format = options->format, .ascii = ascii, .wait_s = OUT_OLD_LEAST_S};
    struct follower *follower;

    if (follower_open(options->socket, &follower, trouble) != 0)
        return trouble->code;
    while (trouble->code == 0) {
        struct source source;
        if (follower_next(follower, f.wait_s, &source, trouble) != 0)
            break;
        take(&f, &source, trouble);
        source_done(&source);
    }
    follower_free(follower);
    return trouble->code;
}
