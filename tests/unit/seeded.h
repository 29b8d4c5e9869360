/* A random generator for property tests. The seed is printed, so that a failure can be had again:
 * TEST_SEED=number build/gcc/unit/test_x. */
#pragma once

#include <gsl/gsl_rng.h>
#include <stdio.h>
#include <stdlib.h>
#include <time.h>

static inline gsl_rng *seeded_new(const char *name) {
    const char *given = getenv("TEST_SEED");
    unsigned long seed = given ? strtoul(given, NULL, 10) : (unsigned long)time(NULL);
    gsl_rng *random = gsl_rng_alloc(gsl_rng_mt19937);

    gsl_rng_set(random, seed);
    printf("%s: TEST_SEED=%lu\n", name, seed);
    return random;
}

static inline void seeded_free_p(gsl_rng **random) {
    gsl_rng_free(*random);
}
