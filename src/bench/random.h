/* A small generator of pseudo-random numbers that gives the same on every machine: splitmix64
 * (G. L. Steele, D. Lea, C. H. Flood, "Fast splittable pseudorandom number generators", OOPSLA
 * 2014, 453-472). Not for secrets. */
#pragma once

#include <stdint.h>

struct random {
    uint64_t state;
};

/* The stream-th generator of a seed: streams do not disturb each other. */
struct random random_start(uint64_t seed, uint64_t stream);

uint64_t random_next(struct random *random);
double random_unit(struct random *random); /* 0 <= x < 1 */

/* Near normal, mean 0, standard deviation 1, within +-6: the sum of twelve uniform numbers, less
 * six. Only sums, so that no library's logarithm decides a digit. */
double random_normal(struct random *random);
