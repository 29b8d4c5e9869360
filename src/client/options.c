/* The command line, from two tables: commands and options. */
#include "client/options.h"

#include "client/words.h"
#include "util/text.h"

#include <stddef.h>
#include <string.h>
#include <sysexits.h>

static const char status_default[] = "/run/brink/status.json";
static const char socket_default[] = "/run/brink.socket";

/* Index = enum command; the page has no word. */
static const char *const commands[] = {"", "line", "check", "raw"};
enum { COMMANDS = sizeof(commands) / sizeof(commands[0]) };

enum option { OPTION_STATUS, OPTION_SOCKET, OPTION_FOLLOW, OPTION_HELP, OPTION_VERSION };
static const char *const names[] = {
    [OPTION_STATUS] = "--status", [OPTION_SOCKET] = "--socket",   [OPTION_FOLLOW] = "--follow",
    [OPTION_HELP] = "--help",     [OPTION_VERSION] = "--version",
};
enum { NAMES = sizeof(names) / sizeof(names[0]) };

/* Where the reading stands. */
struct reading {
    int argc, at;
    char *const *argv;
    bool command_read, options_over;
    const char *status, *socket;
};

const char *brink_help(void) {
    return "brink tells how the packs of this unit stand. brinkd(8) must run.\n"
           "\n"
           "  brink                      a page for people\n"
           "  brink line [FORMAT]        one line; --follow prints it again at each change\n"
           "  brink check                one line and the exit code of a health check:\n"
           "                             0 ample, 1 reserve, 2 edge or leaving, 3 not known\n"
           "  brink raw                  the status object as it is (JSON)\n"
           "\n"
           "  --status PATH              another status file than /run/brink/status.json\n"
           "  --socket PATH              ask brinkd's socket instead of reading the file\n"
           "  --follow                   with `line`: go on, through /run/brink.socket\n"
           "  --help, --version\n"
           "\n"
           "FORMAT is text with names in braces: 'heron {charge}, {left} left'.\n"
           "`brink line --help` lists the names; brink(1) tells all.\n";
}

static int find(const char *word, size_t length, const char *const *list, int n) {
    for (int i = 0; i < n; i++)
        if (strlen(list[i]) == length && memcmp(list[i], word, length) == 0)
            return i;
    return -1;
}

static int unknown(const char *what, const char *word, const char *const *list, size_t n,
                   const char *all, struct trouble *trouble) {
    char clean[64];
    const char *near = text_nearest(word, list, n);

    words_clean(word, strlen(word), false, clean, sizeof(clean));
    if (near)
        return trouble_set(trouble, EX_USAGE,
                           "no %s is called '%s'; did you mean '%s'? There are %s", what, clean,
                           near, all);
    return trouble_set(trouble, EX_USAGE, "no %s is called '%s'; there are %s", what, clean, all);
}

/* The value of --name=VALUE or --name VALUE. */
static const char *value_of(struct reading *r, const char *equals) {
    if (equals)
        return equals[1] ? equals + 1 : NULL;
    return r->at + 1 < r->argc && *r->argv[r->at + 1] ? r->argv[++r->at] : NULL;
}

static int read_option(struct reading *r, const char *word, struct options *ret,
                       struct trouble *trouble) {
    const char *equals = strchr(word, '=');
    size_t length = equals ? (size_t)(equals - word) : strlen(word);
    int option = find(word, length, names, NAMES);

    if (option == OPTION_STATUS || option == OPTION_SOCKET) {
        const char *value = value_of(r, equals);
        if (!value)
            return trouble_set(trouble, EX_USAGE, "%s needs a path behind it", names[option]);
        *(option == OPTION_STATUS ? &r->status : &r->socket) = value;
        return 0;
    }
    if (option < 0)
        return unknown("option", word, names, NAMES,
                       "--status PATH, --socket PATH, --follow, --help and --version", trouble);
    if (equals)
        return trouble_set(trouble, EX_USAGE, "%s takes no value", names[option]);
    *(option == OPTION_FOLLOW ? &ret->follow
      : option == OPTION_HELP ? &ret->help
                              : &ret->version) = true;
    return 0;
}

static int read_word(struct reading *r, const char *word, struct options *ret,
                     struct trouble *trouble) {
    if (!r->command_read) {
        int command = *word ? find(word, strlen(word), commands, COMMANDS) : -1;
        if (command < 0)
            return unknown("command", word, commands + 1, COMMANDS - 1,
                           "line, check and raw; without one brink shows its page", trouble);
        r->command_read = true;
        ret->command = (enum command)command;
        return 0;
    }
    if (ret->command != COMMAND_LINE)
        return trouble_set(trouble, EX_USAGE, "`brink %s` takes no further word",
                           commands[ret->command]);
    if (ret->format)
        return trouble_set(trouble, EX_USAGE,
                           "`brink line` takes one FORMAT: put quotes around it, as in "
                           "brink line '{stage} {charge}'");
    ret->format = word;
    return 0;
}

/* What does not go together. */
static int settle(const struct reading *r, struct options *ret, struct trouble *trouble) {
    if (ret->help || ret->version)
        return 0;
    if (ret->follow && ret->command != COMMAND_LINE)
        return trouble_set(trouble, EX_USAGE,
                           "--follow goes with `line` only: brink line --follow");
    if (r->status && (r->socket || ret->follow))
        return trouble_set(trouble, EX_USAGE,
                           "--status names a file, %s asks the socket: leave one of them out",
                           r->socket ? "--socket" : "--follow");
    ret->from_socket = r->socket || ret->follow;
    return 0;
}

int options_read(int argc, char *const *argv, struct options *ret, struct trouble *trouble) {
    struct reading r = {.argc = argc, .at = 1, .argv = argv};

    *ret = (struct options){.command = COMMAND_PAGE};
    for (; r.at < argc; r.at++) {
        const char *word = argv[r.at];
        int code = 0;
        if (!r.options_over && strcmp(word, "--") == 0)
            r.options_over = true;
        else if (!r.options_over && word[0] == '-' && word[1])
            code = read_option(&r, word, ret, trouble);
        else
            code = read_word(&r, word, ret, trouble);
        if (code)
            return code;
    }
    ret->status = r.status ? r.status : status_default;
    ret->socket = r.socket ? r.socket : socket_default;
    return settle(&r, ret, trouble);
}
