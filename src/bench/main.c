/* brink-bench: finds the command and hands over. */
#include "bench/bench.h"

#include "util/text.h"
#include "util/version.h"

#include <signal.h>
#include <stdio.h>
#include <string.h>
#include <sysexits.h>

static const struct command {
    const char *name;
    int (*run)(int argc, char **argv);
    const char *help;
} commands[] = {
    {"sim", bench_sim, "simulate a unit and send what its gauge tells"},
    {"replay", bench_replay, "play a log through the estimator and judge what it said"},
    {"fit", bench_fit, "make a cell table from logs"},
};
enum { COMMANDS = sizeof commands / sizeof *commands };

static int help(void) {
    printf("usage: brink-bench COMMAND [OPTION]...\n\n");
    for (size_t i = 0; i < COMMANDS; i++)
        printf("  %-8s %s\n", commands[i].name, commands[i].help);
    printf("\nbrink-bench COMMAND --help lists its options; brink-bench(1) tells more.\n");
    return 0;
}

static int unknown(const char *word) {
    const char *names[COMMANDS], *near;

    for (size_t i = 0; i < COMMANDS; i++)
        names[i] = commands[i].name;
    near = text_nearest(word, names, COMMANDS);
    fprintf(stderr, "brink-bench: no command \"%s\"; ", word);
    if (near)
        fprintf(stderr, "did you mean %s?\n", near);
    else
        fprintf(stderr, "brink-bench --help lists them\n");
    return EX_USAGE;
}

int main(int argc, char **argv) {
    signal(SIGPIPE, SIG_IGN);
    if (argc < 2) {
        fprintf(stderr, "brink-bench: no command; brink-bench --help lists them\n");
        return EX_USAGE;
    }
    if (strcmp(argv[1], "--help") == 0)
        return help();
    if (strcmp(argv[1], "--version") == 0)
        return printf("brink-bench %s\n", BRINK_VERSION) < 0 ? EX_IOERR : 0;
    for (size_t i = 0; i < COMMANDS; i++)
        if (strcmp(argv[1], commands[i].name) == 0)
            return commands[i].run(argc - 1, argv + 1);
    return unknown(argv[1]);
}
