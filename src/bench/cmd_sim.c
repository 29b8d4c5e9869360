/* brink-bench sim: the command line, and the simulated unit's life at its pace. */
#include "bench/args.h"
#include "bench/bench.h"
#include "bench/sim.h"
#include "bench/sink.h"
#include "util/cleanup.h"
#include "util/clock.h"
#include "util/real.h"

#include <errno.h>
#include <math.h>
#include <poll.h>
#include <signal.h>
#include <stdio.h>
#include <string.h>
#include <sys/signalfd.h>
#include <sysexits.h>

struct sim_args {
    const char *cells, *to, *link, *truth;
    struct arg_list capacity_Ah, charge, plug_at_s, plug_for_s, plug_W;
    double idle_W, burst_W, burst_every_s, burst_for_s, jitter;
    double temp_C, period_s, noise_V, reference_V, trim, offset_V;
    double speed, for_s;
    int64_t series, packs, bits, seed;
    bool current, check, faults, help;
};

#define AT(member) offsetof(struct sim_args, member)
static const struct arg_spec specs[] = {
    {"cells", ARG_TEXT, UNIT_NONE, 0, 0, AT(cells), "FILE|NAME  the cell table (required)"},
    {"packs", ARG_INTEGER, UNIT_NONE, 1, PACKS_MAX, AT(packs), "N  packs behind diodes (1)"},
    {"series", ARG_INTEGER, UNIT_NONE, 1, 64, AT(series), "N  cells in series (1)"},
    {"capacity", ARG_LIST, UNIT_AMPERE_HOUR, 0.001, 1e5, AT(capacity_Ah),
     "\"5.8 Ah\"  of a pack; the table's. Once a pack, the last goes on"},
    {"charge", ARG_LIST, UNIT_SHARE, 0, 1, AT(charge), "\"100 %\"  at the start. Once a pack"},
    {"idle", ARG_VALUE, UNIT_WATT, 0, 1e5, AT(idle_W), "\"2.4 W\"  drawn between bursts"},
    {"burst", ARG_VALUE, UNIT_WATT, 0, 1e5, AT(burst_W), "\"5.2 W\"  drawn in bursts"},
    {"burst-every", ARG_VALUE, UNIT_SECOND, 0, 1e7, AT(burst_every_s),
     "\"300 s\"  from burst to burst; 0 s = none"},
    {"burst-for", ARG_VALUE, UNIT_SECOND, 0, 1e7, AT(burst_for_s), "\"45 s\"  how long each lasts"},
    {"jitter", ARG_VALUE, UNIT_SHARE, 0, 10, AT(jitter),
     "\"0 %\"  bursts come late by up to this share of the time between them"},
    {"temperature", ARG_VALUE, UNIT_CELSIUS, -40, 80, AT(temp_C), "\"15 C\"  of the cells"},
    {"period", ARG_VALUE, UNIT_SECOND, 0.01, 3600, AT(period_s), "\"1 s\"  between lines"},
    {"noise", ARG_VALUE, UNIT_VOLT, 0, 1, AT(noise_V), "\"3 mV\"  one standard deviation"},
    {"bits", ARG_INTEGER, UNIT_NONE, 0, 24, AT(bits), "N  of the ADC (10); 0 = no steps"},
    {"reference", ARG_VALUE, UNIT_VOLT, 0.1, 500, AT(reference_V),
     "\"5 V\"  the pack voltage of its full scale; times --series by itself"},
    {"trim", ARG_VALUE, UNIT_SHARE, -0.5, 0.5, AT(trim), "\"0 %\"  it reads high by this share"},
    {"offset", ARG_VALUE, UNIT_VOLT, -5, 5, AT(offset_V), "\"0 V\"  and by this much"},
    {"plug-at", ARG_LIST, UNIT_SECOND, 0, 1e9, AT(plug_at_s),
     "\"1 h\"  an adapter is plugged in. Once an event"},
    {"plug-for", ARG_LIST, UNIT_SECOND, 0, 1e9, AT(plug_for_s), "\"1 h\"  and stays so long"},
    {"plug-power", ARG_LIST, UNIT_WATT, 0.001, 1e5, AT(plug_W),
     "\"10 W\"  and gives so much: what the load leaves over charges"},
    {"current", ARG_FLAG, UNIT_NONE, 0, 0, AT(current), "tell the current too"},
    {"check", ARG_FLAG, UNIT_NONE, 0, 0, AT(check), "end lines with their check *hh"},
    {"faults", ARG_FLAG, UNIT_NONE, 0, 0, AT(faults),
     "rubbish, half lines, gaps, repeated readings, a loose wire"},
    {"to", ARG_TEXT, UNIT_NONE, 0, 0, AT(to), "stdout|pty|fifo|socket  where the lines go"},
    {"link", ARG_TEXT, UNIT_NONE, 0, 0, AT(link), "PATH  of the pty's link, the FIFO, the socket"},
    {"speed", ARG_VALUE, UNIT_NONE, 0, 1e6, AT(speed),
     "N  times life (1); 0 = as fast as the reader takes it"},
    {"seed", ARG_INTEGER, UNIT_NONE, 0, 9e15, AT(seed), "N  the same seed gives the same lines"},
    {"for", ARG_VALUE, UNIT_SECOND, 0, 1e10, AT(for_s),
     "\"2 h\"  end then; else when the packs cannot give the power"},
    {"truth", ARG_TEXT, UNIT_NONE, 0, 0, AT(truth), "FILE  write a log CSV with the true charge"},
    {"help", ARG_FLAG, UNIT_NONE, 0, 0, AT(help), "this list"},
};
enum { SPECS = sizeof specs / sizeof *specs };

/* ---- setting up ------------------------------------------------------------------------------ */

/* The k-th of a list, or its last, or fallback. */
static double kth(const struct arg_list *list, size_t k, double fallback) {
    if (list->n == 0)
        return fallback;
    return list->value[k < list->n ? k : list->n - 1];
}

static int configure(const struct sim_args *args, struct sim_config *ret) {
    struct cell_table table;
    double series = (double)args->series;
    int r = bench_table("sim", args->cells, &table);

    if (r)
        return r;
    *ret = (struct sim_config){
        .n_packs = (size_t)args->packs,
        .idle_W = args->idle_W,
        .burst_W = args->burst_W,
        .burst_every_s = args->burst_every_s,
        .burst_for_s = args->burst_for_s,
        .jitter = args->jitter,
        .temp_C = args->temp_C,
        .period_s = args->period_s,
        .noise_V = args->noise_V,
        .bits = (int)args->bits,
        .reference_V = args->reference_V * series,
        .gain = 1.0 + args->trim,
        .offset_V = args->offset_V,
        .n_plugs = args->plug_at_s.n,
        .tell_current = args->current,
        .check = args->check,
        .faults = args->faults,
        .seed = (uint64_t)args->seed,
    };
    for (size_t k = 0; k < ret->n_packs; k++) {
        ret->charge[k] = kth(&args->charge, k, 1.0);
        if (cell_init(&ret->cell[k], &table, (int)args->series,
                      kth(&args->capacity_Ah, k, table.capacity_Ah)))
            return bench_fail(EX_CONFIG, "sim", "--series and --capacity do not make a pack of %s",
                              table.name);
    }
    for (size_t i = 0; i < ret->n_plugs; i++)
        ret->plug[i] =
            (struct sim_plug){args->plug_at_s.value[i], kth(&args->plug_for_s, i, 3600.0),
                              kth(&args->plug_W, i, 10.0)};
    return 0;
}

/* ---- truth ----------------------------------------------------------------------------------- */

static void truth_head(FILE *truth, const struct sim_config *config) {
    fprintf(truth, "# simulated %s; capacity_Ah %g; seed %llu\n", config->cell[0].table.name,
            config->cell[0].capacity_Ah, (unsigned long long)config->seed);
    fprintf(truth, "time_s,voltage_V,current_A,temp_C,charge_Ah");
    for (size_t k = 1; k < config->n_packs; k++)
        fprintf(truth, ",voltage%zu_V,current%zu_A,charge%zu_Ah", k + 1, k + 1, k + 1);
    fprintf(truth, "\n");
}

/* The voltage as it was told, the rest as it is. */
static void truth_row(FILE *truth, const struct sim *sim) {
    fprintf(truth, "%.3f,%.4f,%.4f,%.1f,%.5f", sim->time_s, sim->pack[0].told_V,
            sim->pack[0].current_A, sim->config.temp_C, sim->pack[0].taken_Ah);
    for (size_t k = 1; k < sim->config.n_packs; k++)
        fprintf(truth, ",%.4f,%.4f,%.5f", sim->pack[k].told_V, sim->pack[k].current_A,
                sim->pack[k].taken_Ah);
    fprintf(truth, "\n");
}

/* ---- life ------------------------------------------------------------------------------------ */

struct life {
    struct sim sim;
    struct sink *sink;
    bool standard_out;
    FILE *truth;
    int stop_fd;
    double speed, for_s;
    int64_t anchor_us; /* real time at which the simulated time was anchor_s */
    double anchor_s;
};

static int wait_for_reader(struct life *life) {
    int r;

    if (!life->standard_out)
        fprintf(stderr, "brink-bench sim: waiting for a reader at %s\n", sink_name(life->sink));
    r = sink_wait(life->sink);
    life->anchor_us = clock_boot_us();
    life->anchor_s = life->sim.time_s;
    return r;
}

/* Waits until the line is due. 0 or -errno. */
static int pace(const struct life *life) {
    struct pollfd stop = {.fd = life->stop_fd, .events = POLLIN};
    double ahead_s = (life->sim.time_s - life->anchor_s) / life->speed -
                     (double)(clock_boot_us() - life->anchor_us) * 1e-6;
    struct timespec wait = {0};

    if (life->speed > 0.0 && ahead_s > 0.0) {
        wait.tv_sec = (time_t)ahead_s;
        wait.tv_nsec = (long)((ahead_s - floor(ahead_s)) * 1e9);
    }
    if (ppoll(&stop, 1, &wait, NULL) < 0)
        return -errno;
    return stop.revents ? -EINTR : 0;
}

static int send_line(struct life *life, const char *line, size_t length) {
    int r;

    while ((r = sink_write(life->sink, line, length)) == -EPIPE && !life->standard_out) {
        r = wait_for_reader(life);
        if (r)
            return r;
    }
    return r;
}

/* Ends with a SIM_E_... or -errno; 0 = --for is over. */
static int live(struct life *life) {
    char line[SIM_LINE_MAX];
    int r = wait_for_reader(life);

    while (r == 0 && (double)life->sim.step * life->sim.config.period_s <= life->for_s) {
        size_t length;

        r = sim_step(&life->sim);
        if (r)
            break;
        if (life->truth)
            truth_row(life->truth, &life->sim);
        length = sim_tell(&life->sim, line);
        r = pace(life);
        if (r == 0)
            r = send_line(life, line, length);
    }
    return r;
}

static int ended(const struct life *life, int r) {
    const struct sim *sim = &life->sim;
    char after[32];

    units_duration(sim->time_s, after, sizeof after);
    if (life->truth && (ferror(life->truth) || fflush(life->truth)))
        return bench_fail(EX_IOERR, "sim", "--truth: %s", strerror(errno));
    if (r == SIM_E_SPENT) {
        fprintf(stderr, "brink-bench sim: dark after %s: the packs cannot give %.2f W (", after,
                sim->load_W - sim->adapter_W);
        for (size_t k = 0; k < sim->config.n_packs; k++)
            fprintf(stderr, "%scharge %.1f %%, last %.3f V", k ? "; " : "",
                    100.0 * sim->pack[k].state.charge, sim->pack[k].voltage_V);
        fprintf(stderr, ")\n");
        return 0;
    }
    if (r == 0 || r == -EINTR)
        fprintf(stderr, "brink-bench sim: ended after %s\n", after);
    if (r == 0 || r == -EINTR || (r == -EPIPE && life->standard_out))
        return 0;
    return bench_fail(EX_IOERR, "sim", "%s: %s", sink_name(life->sink), strerror(-r));
}

/* Signals that end the simulation come through a descriptor, so that what stands at --link is
 * cleared away. */
static int open_stop_fd(void) {
    sigset_t set;

    sigemptyset(&set);
    sigaddset(&set, SIGINT);
    sigaddset(&set, SIGTERM);
    sigaddset(&set, SIGHUP);
    sigprocmask(SIG_BLOCK, &set, NULL);
    return signalfd(-1, &set, SFD_CLOEXEC);
}

static int run(const struct sim_args *args, const struct sim_config *config) {
    scoped(sink_free_p) struct sink *sink = NULL;
    scoped(fclose_p) FILE *truth = NULL;
    scoped(close_p) int stop_fd = open_stop_fd();
    struct life life = {.stop_fd = stop_fd, .speed = args->speed, .for_s = args->for_s};
    int kind = sink_kind_of(args->to), r;

    if (stop_fd < 0)
        return bench_fail(EX_OSERR, "sim", "signals: %s", strerror(errno));
    if (kind < 0)
        return bench_fail(EX_USAGE, "sim",
                          "--to \"%s\" is unknown; accepted are stdout, pty, fifo, socket",
                          args->to);
    if ((kind == SINK_FIFO || kind == SINK_SOCKET) && !args->link)
        return bench_fail(EX_USAGE, "sim", "--to %s needs --link PATH", args->to);
    if (sim_init(&life.sim, config))
        return bench_fail(EX_CONFIG, "sim", "these options do not make a unit to simulate");
    r = sink_new(&sink, (enum sink_kind)kind, args->link, stop_fd);
    if (r)
        return bench_fail(EX_CANTCREAT, "sim", "%s: %s", args->link ? args->link : args->to,
                          strerror(-r));
    if (args->truth && !(truth = fopen(args->truth, "we")))
        return bench_fail(EX_CANTCREAT, "sim", "--truth %s: %s", args->truth, strerror(errno));
    if (truth)
        truth_head(truth, config);
    life.sink = sink;
    life.truth = truth;
    life.standard_out = kind == SINK_STDOUT;
    fprintf(stderr, "brink-bench sim: seed %llu\n", (unsigned long long)config->seed);
    r = live(&life);
    return ended(&life, r);
}

int bench_sim(int argc, char **argv) {
    struct sim_args args = {.to = "stdout",
                            .idle_W = 2.4,
                            .burst_W = 5.2,
                            .burst_every_s = 300.0,
                            .burst_for_s = 45.0,
                            .temp_C = 15.0,
                            .period_s = 1.0,
                            .noise_V = 0.003,
                            .bits = 10,
                            .reference_V = 5.0,
                            .speed = 1.0,
                            .for_s = ENDLESS,
                            .series = 1,
                            .packs = 1,
                            .seed = clock_real_us() % 1000000007};
    struct sim_config config;
    int r = args_parse("sim", specs, SPECS, argc, argv, &args, NULL);

    if (r)
        return r;
    if (args.help) {
        printf("usage: brink-bench sim --cells FILE|NAME [OPTION]...\n\n");
        args_help(specs, SPECS);
        return 0;
    }
    r = configure(&args, &config);
    return r ? r : run(&args, &config);
}
