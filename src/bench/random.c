/* Pseudo-random numbers; the source stands in random.h. */
#include "bench/random.h"

struct random random_start(uint64_t seed, uint64_t stream) {
    struct random random = {seed + 0x632be59bd9b4e019 * stream};

    if (stream)
        random.state = random_next(&random);
    return random;
}

uint64_t random_next(struct random *random) {
    uint64_t z = random->state += 0x9e3779b97f4a7c15;

    z = (z ^ (z >> 30)) * 0xbf58476d1ce4e5b9;
    z = (z ^ (z >> 27)) * 0x94d049bb133111eb;
    return z ^ (z >> 31);
}

double random_unit(struct random *random) {
    return (double)(random_next(random) >> 11) * 0x1p-53;
}

double random_normal(struct random *random) {
    double sum = -6.0;

    for (int i = 0; i < 12; i++)
        sum += random_unit(random);
    return sum;
}
