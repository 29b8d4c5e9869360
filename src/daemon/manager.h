/* The daemon while it runs: one event loop, one gauge, one watch, and the ways out of it. */
#pragma once

struct manager;

/* Reads the config and sets everything up; what is wrong is logged. Returns 0, or an exit code of
 * sysexits.h. */
int manager_new(struct manager **ret, const char *config_path);

/* Tells the service manager that it is ready and runs until told to leave. Returns an exit code. */
int manager_run(struct manager *manager);

void manager_free(struct manager *manager);

static inline void manager_free_p(struct manager **manager) {
    manager_free(*manager);
}
