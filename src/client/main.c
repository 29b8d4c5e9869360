/* brink: reads the status of brinkd once and shows it. No locale is set and no library but jansson
 * linked, all static, so that it starts in about the time of cat. */
#include "client/check.h"
#include "client/follow.h"
#include "client/options.h"
#include "client/out.h"
#include "client/page.h"
#include "client/source.h"
#include "client/template.h"
#include "util/clock.h"
#include "util/version.h"

#include <stdio.h>
#include <string.h>
#include <sysexits.h>
#include <unistd.h>

/* One status on its way out. */
struct show {
    const struct options *options;
    struct page_style style;
    bool ascii;
    struct view view;
};

static int tell(const struct options *options, const struct trouble *trouble) {
    char line[CHECK_SIZE];
    struct trouble ignored = {0};

    if (options->command == COMMAND_CHECK) {
        enum check_code code = check_unknown(trouble->text, line);
        out_write(line, strlen(line), &ignored);
        return (int)code;
    }
    fprintf(stderr, "brink: %s\n", trouble->text);
    if (trouble->code == EX_USAGE)
        fprintf(stderr, "`brink --help` tells more.\n");
    return trouble->code;
}

/* For a monitor even help and version are no answer, hence 3 (see check.h). */
static int tell_about(const struct options *options, struct trouble *trouble) {
    static const char version[] = "brink " BRINK_VERSION "\n";
    char names[8192];
    const char *text = brink_help();

    if (options->version)
        text = version;
    else if (options->command == COMMAND_LINE) {
        template_help(names, sizeof(names));
        text = names;
    }
    if (out_write(text, strlen(text), trouble) != 0)
        return tell(options, trouble);
    return options->command == COMMAND_CHECK ? (int)CHECK_UNKNOWN : EX_OK;
}

static int get(struct show *show, struct source *source, struct trouble *trouble) {
    const struct options *o = show->options;
    int code = o->from_socket ? source_socket(o->socket, source, trouble)
                              : source_file(o->status, source, trouble);

    if (!code && view_read(source->object, source->where, show->ascii, &show->view, trouble) != 0) {
        if (o->from_socket)
            trouble->code = EX_PROTOCOL;
        source_done(source);
    }
    return trouble->code;
}

static int write_page(const struct show *show, struct trouble *trouble) {
    char page[PAGE_SIZE];

    return out_write(page, page_write(&show->view, &show->style, page), trouble);
}

static int write_line(const struct show *show, struct trouble *trouble) {
    char line[TEMPLATE_SIZE];

    if (template_write(show->options->format, &show->view, line, trouble) != 0)
        return trouble->code;
    return out_write(line, strlen(line), trouble);
}

static int write_raw(const struct source *source, struct trouble *trouble) {
    if (out_write(source->object_text, source->object_length, trouble) != 0)
        return trouble->code;
    return out_write("\n", 1, trouble);
}

static int write_check(const struct show *show, struct trouble *trouble) {
    char line[CHECK_SIZE];
    enum check_code code = check_write(&show->view, show->style.old, line);

    return out_write(line, strlen(line), trouble) == 0 ? (int)code : trouble->code;
}

static int write_it(const struct show *show, const struct source *source, struct trouble *trouble) {
    switch (show->options->command) {
    case COMMAND_LINE:
        return write_line(show, trouble);
    case COMMAND_RAW:
        return write_raw(source, trouble);
    default:
        return write_page(show, trouble);
    }
}

/* The socket's answer is fresh by itself, and may come through a tunnel from a machine whose boot
 * clock is another. */
static int show_once(struct show *show, struct trouble *trouble) {
    struct source source = {0};
    char old[OUT_OLD_TEXT];

    if (get(show, &source, trouble) != 0)
        return tell(show->options, trouble);
    if (!show->options->from_socket)
        show->style.old = out_old(&show->view, clock_boot_us(), old);
    int code = show->options->command == COMMAND_CHECK ? write_check(show, trouble)
                                                       : write_it(show, &source, trouble);
    source_done(&source);
    if (trouble->code)
        return tell(show->options, trouble);
    if (show->options->command == COMMAND_CHECK || !show->style.old)
        return code;
    trouble_fill(trouble, EX_UNAVAILABLE, "what is shown is old, %s. See `systemctl status brinkd`",
                 show->style.old);
    return tell(show->options, trouble);
}

int main(int argc, char **argv) {
    struct options options;
    struct trouble trouble = {0};
    struct show show = {.options = &options};

    if (options_read(argc, argv, &options, &trouble) != 0)
        return tell(&options, &trouble);
    if (options.help || options.version)
        return tell_about(&options, &trouble);
    if (!options.format)
        options.format = template_default;
    if (options.command == COMMAND_LINE && template_check(options.format, &trouble) != 0)
        return tell(&options, &trouble);
    out_style(isatty(STDOUT_FILENO) == 1, &show.style, &show.ascii);
    if (!options.follow)
        return show_once(&show, &trouble);
    follow_run(&options, show.ascii, &trouble);
    return tell(&options, &trouble);
}
