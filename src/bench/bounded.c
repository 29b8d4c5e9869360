/* Bounded least squares, see the header. */
#include "bench/bounded.h"

#include <lapacke.h>
#include <math.h>
#include <stdbool.h>
#include <stdlib.h>
#include <string.h>

#include "util/cleanup.h"

struct work {
    size_t n, n_free;
    size_t free[BOUNDED_MAX];
    bool held[BOUNDED_MAX];
    bool barred[BOUNDED_MAX];   /* let go of in vain since x last moved: rounding */
    double target[BOUNDED_MAX]; /* of the free ones, were there no bounds */
    double *G;                  /* of the free ones */
};

/* The best place of the free ones while the held ones stay. */
static int aim(struct work *w, const double *G, const double *h, const double *x) {
    lapack_int m;

    w->n_free = 0;
    for (size_t i = 0; i < w->n; i++)
        if (!w->held[i])
            w->free[w->n_free++] = i;
    m = (lapack_int)w->n_free;
    for (size_t a = 0; a < w->n_free; a++) {
        size_t i = w->free[a];

        w->target[a] = h[i];
        for (size_t j = 0; j < w->n; j++)
            if (w->held[j])
                w->target[a] -= G[i * w->n + j] * x[j];
        for (size_t b = 0; b < w->n_free; b++)
            w->G[a * w->n_free + b] = G[i * w->n + w->free[b]];
    }
    if (m == 0)
        return 0;
    return LAPACKE_dposv(LAPACK_ROW_MAJOR, 'U', m, 1, w->G, m, w->target, 1) ? BOUNDED_E_SINGULAR
                                                                             : 0;
}

/* Goes towards the target up to the first bound, which then holds. True when none was in the way.
 */
static bool go(struct work *w, const double *low, const double *high, double *x) {
    double share = 1.0, stop = 0.0;
    size_t met = w->n;

    for (size_t a = 0; a < w->n_free; a++) {
        size_t i = w->free[a];
        double step = w->target[a] - x[i], bound = step < 0.0 ? low[i] : high[i];

        if ((step < 0.0 ? w->target[a] < bound : w->target[a] > bound) &&
            (bound - x[i]) / step < share) {
            share = fmax((bound - x[i]) / step, 0.0);
            met = i;
            stop = bound;
        }
    }
    for (size_t a = 0; a < w->n_free; a++)
        x[w->free[a]] += share * (w->target[a] - x[w->free[a]]);
    if (share > 0.0)
        memset(w->barred, 0, sizeof w->barred);
    if (met == w->n)
        return true;
    x[met] = stop;
    w->held[met] = true;
    w->barred[met] = share <= 0.0;
    return false;
}

/* Lets go of the held one that pulls most to the inside. False when none does. */
static bool release(struct work *w, const double *G, const double *h, const double *low,
                    const double *x) {
    double most = 0.0;
    size_t best = w->n;

    for (size_t i = 0; i < w->n; i++) {
        double pull = h[i], scale = fabs(h[i]);

        if (!w->held[i] || w->barred[i])
            continue;
        for (size_t j = 0; j < w->n; j++) {
            pull -= G[i * w->n + j] * x[j];
            scale += fabs(G[i * w->n + j] * x[j]);
        }
        pull = x[i] <= low[i] ? pull : -pull;
        if (pull > 1e-10 * scale && pull / sqrt(G[i * w->n + i]) > most) {
            most = pull / sqrt(G[i * w->n + i]);
            best = i;
        }
    }
    if (best == w->n)
        return false;
    w->held[best] = false;
    return true;
}

int bounded_solve(size_t n, const double *G, const double *h, const double *low, const double *high,
                  double *x) {
    scoped(free_p) double *part = malloc(n * n * sizeof *part);
    struct work w = {.n = n, .G = part};
    int r;

    if (!part)
        return BOUNDED_E_LONG;
    for (size_t i = 0; i < n; i++)
        x[i] = fmin(fmax(x[i], low[i]), high[i]);
    for (size_t turn = 0; turn < 20 * n + 20; turn++) {
        if ((r = aim(&w, G, h, x)))
            return r;
        if (go(&w, low, high, x) && !release(&w, G, h, low, x))
            return 0;
    }
    return BOUNDED_E_LONG;
}
